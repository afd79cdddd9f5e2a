"""Many machines: the same executor interface over a Dask scheduler."""

from __future__ import annotations

import contextlib
import importlib
import time
import uuid
from collections.abc import Callable, Iterable, Iterator
from typing import Any, TypeVar

from xrdmica.batch.worker import WorkerError, guarded
from xrdmica.errors import XrdmicaError

__all__ = ["DaskExecutor"]

Item = TypeVar("Item")
Result = TypeVar("Result")

_REACH = 15.0  # seconds to wait for the scheduler
_JOIN = 60.0  # seconds to wait for the first worker
_END: Any = object()


class DaskExecutor:
    """Workers of a Dask cluster; they need this program installed and get everything else with the item.

    Items of a worker that dies are given to others by the scheduler; an item that took down several workers is reported as
    an error. A worker that exceeds the time limit is restarted by its nanny and its item reported.

    Parameters
    ----------
    scheduler : str
        Address such as ``tcp://host:8786``, or ``local`` to start scheduler and workers on this machine. Local workers
        import the script that started them, which therefore needs ``if __name__ == "__main__":``.
    workers : int, optional
        Number of local workers; by default one per core.
    time_limit : float, optional
        Seconds an item may take.
    """

    remote = True

    def __init__(self, scheduler: str, workers: int | None = None, time_limit: float | None = None) -> None:
        self.scheduler = scheduler
        self.workers = workers
        self.time_limit = time_limit

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """See `Executor`; `function`, items and results travel between machines, so they must pickle."""
        waiting = iter(items)
        # nothing to do needs no cluster
        first = next(waiting, _END)
        if first is _END:
            return
        with self._client() as client:
            yield from self._work(client, function, first, waiting)

    def _work(
        self, client: Any, function: Callable[[Item], Result], first: Item, waiting: Iterator[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        run = uuid.uuid4().hex
        held: dict[Any, Item] = {}
        clock = _Clock(self.time_limit)
        item: Item = first
        number = 0
        try:
            while True:
                room = max(1, sum(client.nthreads().values()))
                while item is not _END and len(held) < room:
                    future = client.submit(guarded, function, item, key=f"xrdmica-{run}-{number}", pure=False, retries=0)
                    held[future] = item
                    number += 1
                    item = next(waiting, _END)
                if not held:
                    return
                for future in _done(list(held), 1.0 if self.time_limit is None else min(1.0, self.time_limit / 4)):
                    if future.status in ("cancelled", "lost"):
                        raise XrdmicaError(
                            f"the Dask scheduler {self.scheduler} is gone", why="what was under way was cancelled",
                            fix="start it again and repeat the command: what is finished is kept",
                        )  # fmt: skip
                    yield held.pop(future), _outcome(future)
                for future in clock.overdue(client, held):
                    yield held.pop(future), WorkerError(clock.words())
        finally:
            if held:
                client.cancel(list(held), force=True)

    @contextlib.contextmanager
    def _client(self) -> Iterator[Any]:
        distributed = _distributed()
        if self.scheduler == "local":
            from xrdmica.batch.executors import available_cores

            count = self.workers or available_cores()
            options = {"threads_per_worker": 1, "dashboard_address": ":0", "silence_logs": 50}
            with (
                distributed.LocalCluster(n_workers=count, **options) as cluster,
                distributed.Client(cluster) as client,
            ):
                yield client
            return
        try:
            client = distributed.Client(self.scheduler, timeout=_REACH)
        except (OSError, ValueError) as error:
            reason = " ".join(str(error).split())
            raise XrdmicaError(
                f"the Dask scheduler {self.scheduler} cannot be reached", why=reason, fix="check its address and that it runs"
            ) from None
        with client:
            try:
                client.wait_for_workers(1, timeout=_JOIN)
            except TimeoutError:
                raise XrdmicaError(
                    f"the Dask scheduler {self.scheduler} has no workers", fix="start workers that connect to it"
                ) from None
            yield client


class _Clock:
    """Since when each item is with its worker, as seen from here."""

    def __init__(self, limit: float | None) -> None:
        self._limit = limit
        self._since: dict[str, tuple[str, float]] = {}

    def words(self) -> str:
        from xrdmica.batch.executors import limit_words

        return limit_words(self._limit or 0.0)

    def overdue(self, client: Any, held: dict[Any, Any]) -> list[Any]:
        """Items over the limit, whose workers are restarted."""
        if self._limit is None:
            return []
        now = time.monotonic()
        placed = {key: worker for worker, keys in client.processing().items() for key in keys}
        self._since = {
            key: self._since[key] if key in self._since and self._since[key][0] == worker else (worker, now)
            for key, worker in placed.items()
        }
        late = [f for f in held if f.key in self._since and now - self._since[f.key][1] > self._limit and not f.done()]
        if late:
            workers = sorted({self._since[future.key][0] for future in late})
            client.cancel(late, force=True)
            client.restart_workers(workers, timeout=30, raise_for_error=False)
            for future in late:
                del self._since[future.key]
        return late


def _distributed() -> Any:
    try:
        return importlib.import_module("distributed")
    except ImportError:
        raise XrdmicaError("Dask is not installed", fix="pip install 'xrdmica[cluster]'") from None


def _done(futures: list[Any], timeout: float) -> list[Any]:
    with contextlib.suppress(Exception):  # the time is over, or a future was cancelled
        _distributed().wait(futures, timeout=timeout, return_when="FIRST_COMPLETED")
    return [future for future in futures if future.done()]


def _outcome(future: Any) -> Any:
    error = future.exception() if future.status == "error" else None
    if error is None:
        return future.result()
    if type(error).__name__ == "KilledWorker":
        return WorkerError("it took down several workers, one after the other (out of memory, or a fault in a library)")
    return WorkerError(f"{type(error).__name__}: {error}")
