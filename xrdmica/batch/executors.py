"""Ways to run many samples: in this process, or in worker processes that may die without taking the batch with them."""

from __future__ import annotations

import contextlib
import json
import os
import pickle
import queue
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterable, Iterator
from typing import Any, Protocol, TypeVar

from xrdmica.batch.worker import STARTED, WorkerError, guarded, receive, send
from xrdmica.errors import XrdmicaError

__all__ = ["Executor", "InlineExecutor", "ProcessesExecutor", "WorkerError", "available_cores", "executor_for", "limit_words"]

Item = TypeVar("Item")
Result = TypeVar("Result")

# Each worker computes on one core; linear algebra that opens a thread per core would make them wait for each other.
THREAD_VARIABLES = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS", "NUMEXPR_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
)  # fmt: skip
_START = "import json, sys; sys.path[:] = json.loads(sys.argv.pop()); from xrdmica.batch.worker import serve; serve()"
_LOADING = 120.0  # seconds that a new worker may take to import what an item needs, on top of a time limit
_END: Any = object()


class Executor(Protocol):
    """Anything that can apply a function to many items.

    Attributes
    ----------
    remote : bool
        Whether workers may be on other machines, where files of this one cannot be read.
    """

    remote: bool

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """Yield each item with its result, or with the exception it raised, as they come."""
        ...


def available_cores() -> int:
    """Cores that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1


def executor_for(
    workers: int | None, items: int, *, time_limit: float | None = None, scheduler: str | None = None
) -> Executor:
    """The executor for what the user asked for.

    Parameters
    ----------
    workers : int or None
        Worker processes; None or 1 stay in this process, and no more start than there are items.
    items : int
        How many items there are.
    time_limit : float, optional
        Seconds an item may take; needs a process that can be ended, so even one worker is a process then.
    scheduler : str, optional
        Address of a Dask scheduler, or ``local`` for one on this machine.
    """
    if time_limit is not None and not time_limit > 0:
        raise XrdmicaError(f"a time limit of {time_limit:g} seconds", fix="give a number above 0")
    if scheduler is not None:
        from xrdmica.batch.dask_executor import DaskExecutor

        return DaskExecutor(scheduler, workers, time_limit)
    workers = min(workers or 1, max(items, 1))
    return InlineExecutor() if workers == 1 and time_limit is None else ProcessesExecutor(workers, time_limit)


def limit_words(time_limit: float) -> str:
    """Why an item that took too long failed."""
    return f"it was stopped after the time limit of {time_limit:g} s"


class InlineExecutor:
    """One item after the other in this process."""

    remote = False

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """See `Executor`."""
        for item in items:
            yield item, guarded(function, item)


class ProcessesExecutor:
    """Worker processes, started afresh so that they inherit no threads or locks, each with one item in hand.

    They do not import the script that started them, so a script needs no ``if __name__ == "__main__":`` on their account.
    When a worker dies, the item it held is tried once more after all others, with no other item under way (the machine may
    have been short of memory); when it dies again the item is reported as an error. A worker that exceeds the time limit
    is killed and its item reported; it is not tried again.

    Parameters
    ----------
    workers : int
        Number of processes, at least 1.
    time_limit : float, optional
        Seconds an item may take.
    """

    remote = False

    def __init__(self, workers: int, time_limit: float | None = None) -> None:
        if workers < 1:
            raise XrdmicaError(f"{workers} workers", fix="ask for at least 1")
        self.workers = workers
        self.time_limit = time_limit

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """See `Executor`; `function`, items and results travel between processes, so they must pickle."""
        work = pickle.dumps(function, protocol=5)
        spoilt: list[tuple[Item, str]] = []
        again: list[tuple[Item, str]] = []
        yield from self._pass(work, items, self.workers, spoilt)
        yield from self._pass(work, [item for item, _ in spoilt], 1, again)
        for item, reason in again:
            yield item, WorkerError(reason)

    def _pass(
        self, work: bytes, items: Iterable[Item], workers: int, spoilt: list[tuple[Item, str]]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """Go once through the items; those whose worker died are left in `spoilt` with the reason."""
        waiting = iter(items)
        events: queue.SimpleQueue[tuple[_Worker, bytes | None]] = queue.SimpleQueue()
        idle: list[_Worker] = []
        held: dict[_Worker, tuple[Item, float]] = {}
        more = True
        try:
            while True:
                while more and len(held) < workers:
                    item = next(waiting, _END)
                    if item is _END:
                        more = False
                        break
                    try:
                        data = pickle.dumps(item, protocol=5)
                    except Exception as error:
                        yield item, WorkerError(f"it cannot be sent to a worker process: {error}")
                        continue
                    worker = idle.pop() if idle else _Worker(work, events)
                    held[worker] = (item, self._deadline(_LOADING))
                    worker.give(data)
                if not held:
                    return
                worker, answer = self._event(events, held)
                if worker not in held:
                    continue
                item, deadline = held[worker]
                if answer == STARTED:
                    held[worker] = (item, self._deadline())
                elif answer is not None:
                    del held[worker]
                    idle.append(worker)
                    yield item, _loaded(answer)
                elif time.monotonic() >= deadline:
                    worker.kill()
                    del held[worker]
                    yield item, WorkerError(limit_words(self.time_limit or 0.0))
                else:
                    worker.kill()
                    del held[worker]
                    spoilt.append((item, worker.last_words()))
        finally:
            for worker in (*idle, *held):
                worker.kill()

    def _deadline(self, extra: float = 0.0) -> float:
        return float("inf") if self.time_limit is None else time.monotonic() + self.time_limit + extra

    def _event(
        self, events: queue.SimpleQueue[tuple[_Worker, bytes | None]], held: dict[_Worker, tuple[Any, float]]
    ) -> tuple[_Worker, bytes | None]:
        """The next answer; None for a worker that died or whose time is over."""
        while True:
            first = min(held, key=lambda worker: held[worker][1])
            left = held[first][1] - time.monotonic()
            try:
                # a wait without end could not be interrupted on every system
                return events.get(timeout=max(0.0, min(left, 1.0)))
            except queue.Empty:
                if left <= 0:
                    return first, None


class _Worker:
    """One child process, and the thread that talks to it."""

    def __init__(self, work: bytes, events: queue.SimpleQueue[tuple[_Worker, bytes | None]]) -> None:
        self._work = work
        self._events = events
        self._items: queue.SimpleQueue[bytes | None] = queue.SimpleQueue()
        environment = {**os.environ, **dict.fromkeys(THREAD_VARIABLES, "1")}
        self.process = subprocess.Popen(
            [sys.executable, "-c", _START, json.dumps([str(folder) for folder in sys.path])],
            stdin=subprocess.PIPE, stdout=subprocess.PIPE, env=environment,
        )  # fmt: skip
        threading.Thread(target=self._talk, daemon=True).start()

    def give(self, data: bytes) -> None:
        """Hand over an item; its answer comes as an event."""
        self._items.put(data)

    def kill(self) -> None:
        """End the process at once, whatever it does."""
        self.process.kill()
        self.process.wait()
        self._items.put(None)

    def last_words(self) -> str:
        """How the process ended."""
        code = self.process.returncode
        if code is not None and code < 0:
            try:
                how = f"by {signal.Signals(-code).name}"
            except ValueError:
                how = f"by signal {-code}"
        else:
            how = f"with exit code {code}"
        return f"its worker process died {how}, twice (out of memory, killed, or a fault in a library)"

    def _talk(self) -> None:
        source, sink = self.process.stdout, self.process.stdin
        assert source is not None
        assert sink is not None
        try:
            send(sink, self._work)
            while (data := self._items.get()) is not None:
                send(sink, data)
                answer = STARTED
                while answer == STARTED:
                    answer = receive(source)
                    self._events.put((self, answer))
        except (OSError, EOFError, ValueError):
            self._reap()
            self._events.put((self, None))
        finally:
            for stream in (source, sink):
                with contextlib.suppress(OSError):  # what was still to be sent has no reader
                    stream.close()

    def _reap(self) -> None:
        """Give a process that closed its pipe the time to end by itself, so that its exit code tells why."""
        try:
            self.process.wait(timeout=5)
        except subprocess.TimeoutExpired:
            self.process.kill()


def _loaded(data: bytes) -> Any:
    try:
        return pickle.loads(data)
    except Exception as error:
        return WorkerError(f"the result of the worker cannot be read: {type(error).__name__}: {error}")
