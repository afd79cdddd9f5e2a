"""Ways to run many samples: in this process, or in worker processes that may die without taking the batch with them."""

from __future__ import annotations

import multiprocessing
import os
import signal
import traceback
from collections.abc import Callable, Generator, Iterable, Iterator
from concurrent.futures import FIRST_COMPLETED, Future, ProcessPoolExecutor, wait
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from functools import partial
from itertools import islice
from typing import Protocol, TypeVar

from xrdmica.errors import XrdmicaError

__all__ = ["Executor", "InlineExecutor", "ProcessesExecutor", "WorkerError", "available_cores", "executor_for"]

Item = TypeVar("Item")
Result = TypeVar("Result")

# Each worker computes on one core; linear algebra that opens a thread per core would make them wait for each other.
_THREAD_VARIABLES = (
    "OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "BLIS_NUM_THREADS", "NUMEXPR_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
)  # fmt: skip


class WorkerError(Exception):
    """An error of a worker that is no `XrdmicaError`, in a form that travels between processes.

    Attributes
    ----------
    reason : str
        One sentence.
    trace : str
        Where it happened, for developers; may be empty.
    """

    def __init__(self, reason: str, trace: str = "") -> None:
        self.reason = reason
        self.trace = trace
        super().__init__(reason, trace)

    def __str__(self) -> str:
        return self.reason


class Executor(Protocol):
    """Anything that can apply a function to many items."""

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


def executor_for(workers: int | None, items: int) -> Executor:
    """The executor for a number of workers; None or 1 stay in this process, and no more start than there are items."""
    workers = min(workers or 1, max(items, 1))
    return InlineExecutor() if workers == 1 else ProcessesExecutor(workers)


def _guarded(function: Callable[[Item], Result], item: Item) -> Result | Exception:
    """Apply the function; an exception becomes a value, for some exceptions break a process pool on their way back."""
    try:
        return function(item)
    except XrdmicaError as error:
        return error
    except Exception as error:
        return WorkerError(f"{type(error).__name__}: {error}", traceback.format_exc())


class InlineExecutor:
    """One item after the other in this process."""

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """See `Executor`."""
        for item in items:
            yield item, _guarded(function, item)


def _ignore_interrupt() -> None:
    # Ctrl-C reaches the whole process group: the parent alone decides what to do about it
    signal.signal(signal.SIGINT, signal.SIG_IGN)


@contextmanager
def _one_thread() -> Iterator[None]:
    """Set the thread variables while workers start (they inherit the environment), then put things back."""
    before = {name: os.environ.get(name) for name in _THREAD_VARIABLES}
    os.environ.update(dict.fromkeys(_THREAD_VARIABLES, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


class ProcessesExecutor:
    """Worker processes, started afresh (spawn) so that they inherit no threads or locks.

    A worker that dies spoils only the items that were under way: the pool is built again and those items are tried once
    more, each alone in a process of its own. An item whose process dies again is reported as an error.

    Parameters
    ----------
    workers : int
        Number of processes, at least 1.
    """

    def __init__(self, workers: int) -> None:
        if workers < 1:
            raise XrdmicaError(f"{workers} workers", fix="ask for at least 1")
        self.workers = workers

    def map_unordered(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[tuple[Item, Result | Exception]]:
        """See `Executor`; `function`, items and results travel between processes, so they must pickle."""
        waiting = iter(items)
        call = partial(_guarded, function)
        while True:
            spoilt: list[Item] = []
            with _workers(self.workers) as pool:
                finished = yield from self._drain(pool, call, waiting, spoilt)
            for item in spoilt:
                yield item, self._alone(call, item)
            if finished:
                return

    def _drain(
        self,
        pool: ProcessPoolExecutor,
        call: Callable[[Item], Result | Exception],
        waiting: Iterator[Item],
        spoilt: list[Item],
    ) -> Generator[tuple[Item, Result | Exception], None, bool]:
        """Work through the items; returns whether none are left, else the pool broke and `spoilt` has what it held."""
        pending: dict[Future[Result | Exception], Item] = {}
        broken = False
        while True:
            # one item in hand per worker and one to follow: little is lost when a worker dies
            for item in islice(waiting, 0 if broken else 2 * self.workers - len(pending)):
                try:
                    with _one_thread():
                        pending[pool.submit(call, item)] = item
                except BrokenProcessPool:
                    broken = True
                    spoilt.append(item)
                    break
            if not pending:
                return not broken
            done, _ = wait(pending, return_when=FIRST_COMPLETED)
            for future in done:
                item = pending.pop(future)
                error = future.exception()
                if isinstance(error, BrokenProcessPool):
                    broken = True
                    spoilt.append(item)
                elif error is not None:
                    yield item, WorkerError(f"{type(error).__name__}: {error}")
                else:
                    yield item, future.result()

    @staticmethod
    def _alone(call: Callable[[Item], Result | Exception], item: Item) -> Result | Exception:
        with _workers(1) as pool:
            try:
                with _one_thread():
                    future = pool.submit(call, item)
                return future.result()
            except BrokenProcessPool:
                return WorkerError("the worker process died (out of memory, or killed)")


@contextmanager
def _workers(count: int) -> Iterator[ProcessPoolExecutor]:
    """A pool that ends in an orderly way, or at once when the caller gives up."""
    pool = ProcessPoolExecutor(count, multiprocessing.get_context("spawn"), initializer=_ignore_interrupt)
    try:
        yield pool
    except BaseException:
        processes = list((getattr(pool, "_processes", None) or {}).values())
        pool.shutdown(wait=False, cancel_futures=True)
        for process in processes:
            process.terminate()
        raise
    pool.shutdown(wait=True)
