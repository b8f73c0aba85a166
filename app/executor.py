"""What computes: processes on this machine, or the workers of a Dask cluster. Both take the same tasks."""

from typing import Protocol

from app.cluster import ClusterPool
from app.workers import ProcessPool, Task


class Executor(Protocol):
    """Takes chunks, and calls each chunk's `report` once with its outcome, from a thread of its own."""

    @property
    def size(self) -> int:
        """Number of chunks computed at the same time."""

    @property
    def ready(self) -> int:
        """Number of workers that can take a chunk now."""

    @property
    def lost(self) -> int:
        """Number of workers that were lost without being asked to end."""

    @property
    def trouble(self) -> str | None:
        """Why nothing can be computed at present, in words for the user; None when all is well."""

    def check(self) -> None:
        """Make sure that the workers compute what this program would (may block for seconds).

        Raises ClusterError when they do not, or cannot be reached.
        """

    def submit(self, task: Task) -> None:
        """Hand over a task."""

    def stop(self, task: Task) -> None:
        """Stop a task; its outcome is "stopped", unless it has ended already."""

    def close(self) -> None:
        """Let go of all workers."""


def open_executor(workers: int, cluster: str | None, patience: float) -> Executor:
    """Return the processes of this machine, or the cluster whose scheduler is at the address `cluster`.

    Raises StartError when the cluster cannot be used.
    """
    return ProcessPool(workers) if cluster is None else ClusterPool(cluster, patience)
