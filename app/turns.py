"""Whose turn it is: clients get equal shares of the processors, short jobs go before long ones.

A job that will soon be over goes first, so that a moved knob is answered while a long map is under way; but
every few turns the long ones have theirs, and a client who has already had far more than its share no longer
goes first however short its jobs are. The order decides when a chunk is computed, never what it gives.
"""

from collections.abc import Sequence
from typing import Protocol, TypeVar

# a job with less than this to go is short, in processor seconds
SHORT_SECONDS = 5.0
# short jobs go first that many times in a row while longer ones wait
IN_A_ROW = 3
# how far short jobs may take a client beyond the share of another that waits
CREDIT_SECONDS = 15.0


class Waiting(Protocol):
    """A job with chunks that wait."""

    client: str
    turn: int

    def is_shorter_than(self, seconds: float) -> bool:
        """Say whether the chunks that wait will take less processor time than that."""


Job = TypeVar("Job", bound=Waiting)


class Turns:
    """Accounts of the processor time that clients have had."""

    def __init__(self) -> None:
        self.had: dict[str, float] = {}
        self._in_a_row = 0
        self._count = 0

    def choose(self, waiting: Sequence[Job]) -> Job:
        """Return the job whose next chunk is computed next, and note its turn; `waiting` is not empty."""
        known = [self.had[job.client] for job in waiting if job.client in self.had]
        least = min(known, default=0.0)
        for job in waiting:
            # who comes, or comes back, has no claim on what was computed meanwhile
            self.had[job.client] = max(least, self.had.get(job.client, least))
        short = [
            job
            for job in waiting
            if job.is_shorter_than(SHORT_SECONDS) and self.had[job.client] <= least + CREDIT_SECONDS
        ]
        others = [job for job in waiting if job not in short]
        if short and others:
            first = self._in_a_row < IN_A_ROW
            self._in_a_row = self._in_a_row + 1 if first else 0
            group = short if first else others
        else:
            group = short or others
        chosen = min(group, key=lambda job: (self.had[job.client], job.turn))
        self._count += 1
        chosen.turn = self._count
        return chosen

    def charge(self, client: str, seconds: float) -> None:
        """Note processor time that a client gets, or gives back when it is negative."""
        if client in self.had:
            self.had[client] += seconds

    def clear(self) -> None:
        """Forget all accounts: nobody waits."""
        self.had.clear()
        self._in_a_row = 0
