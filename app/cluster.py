"""The workers of an existing Dask cluster, used like the processes of this machine.

Only questions travel there and only rows come back. Each chunk names the versions it wants and is refused by
a worker that has others. When the scheduler is lost, chunks under way are kept and handed over again to the
one that takes its place; a chunk gives the same rows however often it is computed.

What arrives from a scheduler is unpickled, so that it must be on this machine or proven by TLS.
"""

import contextlib
import logging
import os
import socket
import threading
import time
from collections.abc import Callable, Mapping
from concurrent.futures import Future
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlsplit

from app import identity
from app.errors import ClusterError, StartError
from app.settings import check_cluster_address
from app.workers import MOST_DEATHS, THREAD_CAPS, Outcome, Task, answer
from solver import StateName

logger = logging.getLogger(__name__)

CONNECT_SECONDS = 5.0
CALL_SECONDS = 20.0
# a worker that is asked for the first time loads the solver, maybe from a slow disk
PROBE_SECONDS = 90.0
LOOK_SECONDS = 0.5
RETRY_AFTER = 10


@dataclass(frozen=True)
class Order:
    """A chunk on its way to a worker: what is asked, and the versions that may answer."""

    questions: tuple[Any, ...]
    work: str
    state: StateName
    versions: Mapping[str, str]


@dataclass(eq=False)
class _Entry:
    """A task that has not been reported, and its future while a scheduler has it."""

    task: Task
    future: "Future[Outcome] | None" = None


def difference(wanted: Mapping[str, str], found: Mapping[str, str]) -> str | None:
    """Say in words how the versions of a worker differ from those of this program; None when equal."""
    parts = []
    for name, version in wanted.items():
        if found.get(name) != version:
            here, there = version, found.get(name, "none")
            if name == "solver":
                # digests of files: long, and different from the first digits on
                here, there = here[:12], there[:12]
            parts.append(f"{name} {there} instead of {here}")
    return ", ".join(parts) or None


def wanted_versions() -> dict[str, str]:
    """Return what every worker must have: the versions of this program, and one BLAS thread."""
    return identity.versions() | {"BLAS threads": "1"}


def found_versions() -> dict[str, str]:
    """Return the same facts of the process that asks."""
    capped = all(os.environ.get(name) == "1" for name in THREAD_CAPS[:3])
    return identity.versions() | {"BLAS threads": "1" if capped else "not limited to 1"}


def answer_order(order: Order) -> Outcome:
    """Answer a chunk (runs on a worker of the cluster)."""
    other = difference(order.versions, found_versions())
    if other is not None:
        from distributed import get_worker  # noqa: PLC0415 - known to be there on a worker

        return Outcome("unavailable", error=_differs(get_worker().address, other))
    return answer(order.questions, order.work, order.state, _withdrawn())


def _withdrawn() -> Callable[[], bool]:
    """Return a function that says whether the task that runs here has been cancelled."""
    from distributed import get_worker  # noqa: PLC0415

    worker = get_worker()
    key = worker.get_current_task()

    def withdrawn() -> bool:
        known = worker.state.tasks.get(key)
        return known is None or known.state not in {"executing", "long-running"}

    return withdrawn


def _differs(address: str, other: str) -> dict[str, Any]:
    return {
        "code": "workers-differ",
        "message": f"the cluster's worker {address} would compute other numbers: it has {other}; install the "
        "same versions there, or take the worker away",
        "field": "cluster",
        "value": f"{address}: {other}",
        "allowed": ", ".join(f"{name} {version[:12]}" for name, version in wanted_versions().items()),
    }


class ClusterPool:
    """A Dask cluster in the place of a `ProcessPool`.

    Parameters
    ----------
    address : str
        Of the scheduler: tcp://HOST:PORT on this machine, tls://HOST:PORT anywhere.
    patience : float
        Seconds for which chunks wait for a lost scheduler, or for a first worker.

    Raises StartError when the address is refused or nothing answers there, ClusterError when the workers
    differ.
    """

    def __init__(self, address: str, patience: float) -> None:
        check_cluster_address(address)
        self.address = address
        self.patience = patience
        self.lost = 0
        self.trouble: str | None = None
        self._trouble_since = 0.0
        self._entries: dict[int, _Entry] = {}
        self._threads: dict[str, int] = {}
        self._known: set[str] = set()
        self._closing = threading.Event()
        self._look_now = threading.Event()
        # held while entries or the client change; Dask's calls under it never wait for the network
        self._lock = threading.RLock()
        self._client: Any = None
        self._executor: Any = None
        try:
            self._connect()
        except (OSError, ValueError, TypeError) as error:
            raise StartError(
                "no-scheduler",
                f"no Dask scheduler answers at {address}: {_words(error)}",
                "cluster",
                address,
                "the address that a running scheduler prints",
            ) from error
        try:
            self.check()
        except ClusterError:
            self._drop_client()
            raise
        self._thread = threading.Thread(target=self._watch, name="softmode-cluster", daemon=True)
        self._thread.start()

    # -- used like a ProcessPool ----------------------------------------------------------------

    @property
    def size(self) -> int:
        """Number of chunks computed at the same time: threads of all workers, at least one."""
        return max(1, sum(self._threads.values()))

    @property
    def ready(self) -> int:
        """Number of threads that can compute now."""
        return 0 if self._client is None else sum(self._threads.values())

    def submit(self, task: Task) -> None:
        """Hand over a task; its `report` is called once, from a thread of the pool."""
        entry = _Entry(task)
        with self._lock:
            self._entries[id(task)] = entry
            self._hand_over(entry)

    def stop(self, task: Task) -> None:
        """Stop a task: withdrawn at once, ended by its worker after the point under way."""
        with self._lock:
            task.stopped = True
            entry = self._entries.pop(id(task), None)
            future, found = (None, None) if entry is None else (entry.future, entry)
            if found is not None:
                found.future = None
        if future is not None:
            future.cancel()
        if found is not None:
            task.report(Outcome("stopped"))

    def check(self) -> None:
        """Compare the versions of workers not seen before; raise ClusterError where one differs."""
        with self._lock:
            client = self._client
        if client is None:
            raise ClusterError(**self._lost_facts(), retry_after=RETRY_AFTER)
        try:
            self._threads = _call(client, client.scheduler.ncores)
            unseen = sorted(set(self._threads) - self._known)
            answers = _asked(client, unseen) if unseen else {}
        except Exception as error:
            self._look_now.set()
            logger.warning("the cluster's workers could not be asked: %s", _words(error))
            raise ClusterError(**self._lost_facts(), retry_after=RETRY_AFTER) from error
        for address, facts in answers.items():
            if not isinstance(facts, dict):
                # gone meanwhile, or too busy to say; it is asked again, and every chunk asks, too
                continue
            other = difference(wanted_versions(), facts)
            if other is not None:
                raise ClusterError(**_differs(address, other), retry_after=RETRY_AFTER)
            self._known.add(address)

    def close(self) -> None:
        """Withdraw what is under way and leave the cluster; its workers stay."""
        self._closing.set()
        self._look_now.set()
        self._thread.join(CONNECT_SECONDS)
        with self._lock:
            entries = list(self._entries.values())
        for entry in entries:
            self.stop(entry.task)
        self._drop_client()

    # -- tasks ----------------------------------------------------------------------------------

    def _hand_over(self, entry: _Entry) -> None:
        """Give a task to the scheduler, if there is one; the lock is held."""
        if self._executor is None:
            if self._given_up():
                self._report(entry, Outcome("unavailable", error=self._lost_facts()))
            return
        task = entry.task
        order = Order(tuple(task.questions), task.work, task.state, wanted_versions())
        try:
            entry.future = self._executor.submit(answer_order, order)
        except Exception as error:  # noqa: BLE001 - a client that has just broken; the watching thread sees to it
            logger.warning("a chunk could not be handed to the cluster: %s", _words(error))
            self._look_now.set()
            return
        future = entry.future
        future.add_done_callback(lambda done: self._landed(entry, done))

    def _landed(self, entry: _Entry, future: "Future[Outcome]") -> None:
        """Take in how a future ended (called from Dask's thread)."""
        with self._lock:
            if entry.future is not future:
                return
            entry.future = None
            if future.cancelled():
                # not by us: the scheduler is gone, or has forgotten the chunk
                self._look_now.set()
                return
        error = future.exception()
        if error is None:
            self._report(entry, future.result())
        elif type(error).__name__ == "KilledWorker":
            self._report(entry, Outcome("lost"))
        elif isinstance(error, OSError):
            self._look_now.set()
        else:
            self._report(entry, Outcome("broken", trace=f"on the cluster: {_words(error)}"))

    def _report(self, entry: _Entry, outcome: Outcome) -> None:
        with self._lock:
            if self._entries.pop(id(entry.task), None) is None:
                return
        entry.task.report(outcome)

    # -- the scheduler --------------------------------------------------------------------------

    def _watch(self) -> None:
        """Look after the connection; hand over again what a lost scheduler had."""
        while not self._closing.is_set():
            self._look_now.wait(LOOK_SECONDS)
            self._look_now.clear()
            if self._closing.is_set():
                return
            try:
                self._look()
            except Exception:
                logger.exception("looking after the cluster failed")

    def _look(self) -> None:
        with self._lock:
            client = self._client
        if client is not None:
            try:
                self._see(_call(client, client.scheduler.ncores))
            except Exception as error:  # noqa: BLE001 - whatever the reason: this client is of no use
                logger.warning("the scheduler at %s is lost: %s", self.address, _words(error))
                self._drop_client()
                client = None
        if client is None:
            self._worry(f"the cluster's scheduler at {self.address} is lost; trying to reach it again")
            with contextlib.suppress(OSError, ValueError, TypeError):
                self._connect()
        with self._lock:
            if self._client is not None and self._threads:
                self.trouble = None
            elif self._given_up():
                for entry in list(self._entries.values()):
                    self._give_up(entry)
            for entry in list(self._entries.values()):
                if entry.future is None:
                    self._hand_over(entry)

    def _see(self, threads: dict[str, int]) -> None:
        """Note which workers there are."""
        gone = set(self._threads) - set(threads)
        if gone:
            logger.warning("the cluster has lost %s", ", ".join(sorted(gone)))
        self.lost += len(gone)
        self._known -= gone
        self._threads = threads
        if not threads:
            self._worry(f"the cluster at {self.address} has no workers; the work waits for one")

    def _worry(self, words: str) -> None:
        if self.trouble is None:
            self._trouble_since = time.monotonic()
        self.trouble = words

    def _given_up(self) -> bool:
        return self.trouble is not None and time.monotonic() - self._trouble_since > self.patience

    def _give_up(self, entry: _Entry) -> None:
        future, entry.future = entry.future, None
        if future is not None:
            future.cancel()
        self._report(entry, Outcome("unavailable", error=self._lost_facts()))

    def _lost_facts(self) -> dict[str, Any]:
        words = self.trouble or f"the cluster's scheduler at {self.address} does not answer"
        return {
            "code": "executor-lost",
            "message": f"{words}. Finished parts are kept: ask again when the cluster is back",
            "field": "cluster",
            "value": self.address,
            "allowed": "a scheduler that runs and has workers",
        }

    def _connect(self) -> None:
        """Become a client of the scheduler; raise OSError when nothing answers."""
        client = _client_of(self.address)
        limit = MOST_DEATHS - 1

        # by value: the scheduler need not know this module to be asked
        def keep_failures_low(dask_scheduler: Any) -> None:
            dask_scheduler.allowed_failures = min(dask_scheduler.allowed_failures, limit)

        try:
            client.run_on_scheduler(keep_failures_low)
            threads = _call(client, client.scheduler.ncores)
        except Exception as error:
            _close(client)
            raise ConnectionError(_words(error)) from error
        with self._lock:
            self._client, self._executor = client, client.get_executor(pure=False)
            self._threads = threads
            # a new scheduler may have given a worker of another kind an old address
            self._known.clear()

    def _drop_client(self) -> None:
        """Let go of the client; what it had under way is no longer waited for."""
        with self._lock:
            client, self._client, self._executor = self._client, None, None
            for entry in self._entries.values():
                entry.future = None
        if client is not None:
            _close(client)


def _client_of(address: str) -> Any:
    try:
        from distributed import Client  # noqa: PLC0415 - only there with the extra
        from distributed.security import Security  # noqa: PLC0415
    except ImportError as error:
        raise StartError(
            "no-dask",
            f"--cluster needs the packages of the extra 'cluster' ({error}): pip install 'softmode[cluster]'",
            "cluster",
            address,
        ) from error
    parts = urlsplit(address)
    encrypted = parts.scheme == "tls"
    security = Security(require_encryption=True) if encrypted else Security()
    # tried without Dask first: a client that cannot connect leaves threads and traces behind
    with socket.create_connection((parts.hostname or "", parts.port or 0), CONNECT_SECONDS) as plain:
        if encrypted:
            context = security.get_connection_args("client").get("ssl_context")
            if context is None:
                raise ValueError("Dask's settings name no certificates (distributed.comm.tls)")
            with context.wrap_socket(plain, server_hostname=parts.hostname) as proven:
                # whether our own certificate is good shows in what is sent back
                proven.recv(1)
    return Client(address, timeout=CONNECT_SECONDS, security=security, set_as_default=False)


def _call(client: Any, method: Any) -> dict[str, int]:
    """Return the number of threads of each worker as the scheduler knows them now."""
    if client.status != "running":
        raise ConnectionError("the connection to the scheduler is closed")
    found: dict[str, int] = client.sync(method, workers=None, callback_timeout=CALL_SECONDS)
    return dict(found)


def _asked(client: Any, workers: list[str]) -> dict[str, Any]:
    """Return the versions of some workers, something else where one does not say."""
    method = client._run  # noqa: SLF001 - `run` has no limit of time, and a worker may hang
    answers: dict[str, Any] = client.sync(
        method, _probe(), workers=workers, on_error="return", callback_timeout=PROBE_SECONDS
    )
    return answers


def _close(client: Any) -> None:
    with contextlib.suppress(Exception):
        client.close(timeout=1.0)


def _probe() -> Callable[[], dict[str, str]]:
    """Return a function that a worker can run without having this program: it travels by value."""

    def probe() -> dict[str, str]:
        try:
            from app.cluster import found_versions as found  # noqa: PLC0415
        except ImportError as error:
            return {"softmode": f"that cannot be imported ({error})"}
        return found()

    return probe


def _words(error: BaseException) -> str:
    text = str(error).strip()
    return f"{type(error).__name__}: {text}" if text else type(error).__name__
