"""How a batch tells what it does: a bar on a terminal, plain lines elsewhere; all on stderr."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from typing import TYPE_CHECKING

import click

if TYPE_CHECKING:
    from xrdmica.batch.run import Progress

__all__ = ["Pace", "show_progress"]


class Pace:
    """How fast samples are computed, and how long the rest will take; results kept from an earlier run do not count.

    Parameters
    ----------
    clock : callable
        Seconds that only grow.
    """

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._start = clock()
        self._kept = 0

    def words(self, progress: Progress) -> str:
        """Failures, rate and time left, as far as they can be told."""
        self._kept += progress.kept
        parts = [f"{progress.failed} failed"] if progress.failed else []
        computed = progress.done - self._kept
        elapsed = self._clock() - self._start
        if computed >= 2 and elapsed >= 1:
            parts.append(_rate(computed / elapsed))
            if progress.done < progress.total:
                parts.append(f"{_duration((progress.total - progress.done) * elapsed / computed)} left")
        return ", ".join(parts)


def _rate(per_second: float) -> str:
    if per_second >= 1:
        return f"{per_second:.1f}/s"
    return f"{60 * per_second:.1f}/min" if per_second * 60 >= 1 else f"{3600 * per_second:.1f}/h"


def _duration(seconds: float) -> str:
    whole = round(seconds)
    if whole < 60:
        return f"{whole} s"
    if whole < 3600:
        return f"{whole // 60} min {whole % 60:02d} s"
    return f"{whole // 3600} h {whole % 3600 // 60:02d} min"


@contextmanager
def show_progress(quiet: bool) -> Iterator[Callable[[Progress], None]]:
    """A function that shows what it is told; nothing but failures when quiet."""
    pace = Pace()
    if quiet or not sys.stderr.isatty():
        yield lambda progress: _line(progress, pace, quiet)
        return
    from rich.progress import BarColumn, MofNCompleteColumn, TextColumn
    from rich.progress import Progress as Bar

    from xrdmica.report.tables import console_for, plain

    columns = (TextColumn("{task.description}", markup=False), BarColumn(), MofNCompleteColumn(),
               TextColumn("{task.fields[pace]}", markup=False))  # fmt: skip
    with Bar(*columns, console=console_for(stderr=True), transient=True) as bar:
        task = bar.add_task("samples", total=None, pace="")

        def show(progress: Progress) -> None:
            name = plain(progress.sample)
            bar.update(task, total=progress.total, completed=progress.done, description=name[:30], pace=pace.words(progress))
            if progress.reason is not None:
                bar.console.print(f"{name}: {plain(progress.reason)}", markup=False)

        yield show


def _line(progress: Progress, pace: Pace, quiet: bool) -> None:
    words = pace.words(progress)
    # a reader that went away must not end a run of many hours
    with suppress(OSError):
        _tell(progress, words, quiet)


def _tell(progress: Progress, words: str, quiet: bool) -> None:
    from xrdmica.report.tables import plain

    place = f"[{progress.done}/{progress.total}] {plain(progress.sample)}"
    if progress.reason is not None:
        kind = "FAILED" if not progress.finished else "INCOMPLETE"
        click.echo(f"{place}: {kind}: {plain(progress.reason)}", err=True)
    elif not quiet:
        kept = " (kept)" if progress.kept else ""
        click.echo(f"{place}{kept}" + (f" ({words})" if words else ""), err=True)
