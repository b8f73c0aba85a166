"""Whose turn it is: short before long, nobody starves, equal shares."""

from dataclasses import dataclass

import pytest

from app.turns import IN_A_ROW, SHORT_SECONDS, Turns


@dataclass(eq=False)
class Work:
    """A job as far as turns look at it: so many chunks of so many seconds."""

    client: str
    chunks: int
    seconds: float = 0.2
    turn: int = 0

    def is_shorter_than(self, seconds: float) -> bool:
        return self.chunks * self.seconds <= seconds


def run(turns: Turns, works: list[Work], chunks: int) -> list[Work]:
    """Compute chunks one after another on one processor; return whose they were."""
    order = []
    for _ in range(chunks):
        waiting = [work for work in works if work.chunks]
        if not waiting:
            break
        chosen = turns.choose(waiting)
        chosen.chunks -= 1
        turns.charge(chosen.client, chosen.seconds)
        order.append(chosen)
    return order


def test_a_short_job_goes_before_a_long_one_of_the_same_client() -> None:
    turns, long = Turns(), Work("a", 1000)
    run(turns, [long], 50)
    short = Work("a", IN_A_ROW)
    assert run(turns, [long, short], IN_A_ROW) == [short] * IN_A_ROW


def test_a_short_job_of_another_client_goes_first_too() -> None:
    turns, long = Turns(), Work("a", 1000)
    run(turns, [long], 50)
    short = Work("b", 2)
    assert run(turns, [long, short], 2) == [short] * 2


def test_a_long_job_goes_on_while_short_ones_keep_coming() -> None:
    turns, long = Turns(), Work("a", 1000)
    order: list[Work] = []
    for _ in range(40):
        order += run(turns, [long, Work("a", 4)], 4)
    share = order.count(long) / len(order)
    assert share == pytest.approx(1.0 / (IN_A_ROW + 1), abs=0.03)


@pytest.mark.parametrize("jobs", [(1, 1), (1, 5), (3, 1)])
def test_clients_get_equal_shares_however_many_jobs_they_have(jobs: tuple[int, int]) -> None:
    turns = Turns()
    works = [Work("ab"[which], 1000) for which in (0, 1) for _ in range(jobs[which])]
    order = run(turns, works, 400)
    assert sum(work.client == "a" for work in order) == pytest.approx(200, abs=2)
    # and the jobs of one client share alike
    for client, count in zip("ab", jobs, strict=True):
        own = [order.count(work) for work in works if work.client == client]
        assert max(own) - min(own) <= 1 + 200 // (50 * count)


def test_shares_are_of_time_not_of_chunks() -> None:
    turns = Turns()
    fine, coarse = Work("a", 10_000, 0.05), Work("b", 10_000, 0.4)
    order = run(turns, [fine, coarse], 900)
    spent = [sum(work.seconds for work in order if work.client == client) for client in "ab"]
    assert spent[0] == pytest.approx(spent[1], rel=0.02)


def test_a_stream_of_short_jobs_gets_no_more_than_its_share_in_the_end() -> None:
    turns, long = Turns(), Work("a", 100_000)
    order: list[Work] = []
    for _ in range(400):
        order += run(turns, [long, Work("b", 5)], 5)
    spent = [sum(work.seconds for work in order[-1000:] if work.client == client) for client in "ab"]
    assert spent[0] == pytest.approx(spent[1], rel=0.05)


def test_who_comes_late_has_no_claim_on_what_was() -> None:
    turns, first = Turns(), Work("a", 100_000)
    run(turns, [first], 500)
    late = Work("b", 100_000)
    order = run(turns, [first, late], 100)
    assert order.count(late) == pytest.approx(50, abs=2)


def test_long_means_more_than_the_limit() -> None:
    turns = Turns()
    longer, shorter = Work("a", 1, 2 * SHORT_SECONDS), Work("a", 1, 0.5 * SHORT_SECONDS)
    assert run(turns, [longer, shorter], 2) == [shorter, longer]
