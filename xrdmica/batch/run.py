"""Run many samples: each is written when it is finished, one that fails does not stop the others, a repeat does the rest."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from xrdmica._version import __version__
from xrdmica.batch.executors import Executor, executor_for
from xrdmica.batch.lock import locked, refuse_if_locked
from xrdmica.batch.record import write_record
from xrdmica.batch.resume import FINGERPRINT, Circumstances, circumstances, digests_of, fingerprint_of, read_head
from xrdmica.batch.store import commit, replace_bytes, sweep, withdraw
from xrdmica.batch.task import Analyse, Job, Outcome, work
from xrdmica.errors import XrdmicaError
from xrdmica.report.files import plan_stems, read_result, write_text
from xrdmica.results import SampleResult

if TYPE_CHECKING:
    from xrdmica.batch.analyse import Settings
    from xrdmica.batch.sheet import FoundSamples, SampleEntry
    from xrdmica.batch.sources import Gathered

__all__ = ["BATCH_FILES", "Progress", "run_batch"]

BATCH_FILES = (
    "proportions.csv", "proportions_wide.csv", "groups.csv", "indices.csv", "summary.csv", "repeats.csv", "failures.csv",
    "proportions.svg", "ternary.svg", "run.json", "index.html",
)  # fmt: skip


@dataclass(frozen=True)
class Progress:
    """What `on_progress` is told after every sample.

    Attributes
    ----------
    sample : str
        The sample that ended.
    index : int
        Its place in the sheet, from 0.
    done, total : int
        How many have ended, of how many.
    reason : str or None
        Why the sample failed (or its figure could not be drawn); None when all is well.
    finished : bool
        Whether there is a result.
    failed : int
        How many samples have no result so far.
    kept : bool
        Whether the result is that of an earlier run, still good.
    """

    sample: str
    index: int
    done: int
    total: int
    reason: str | None
    finished: bool
    failed: int = 0
    kept: bool = False


@dataclass
class _Task:
    """One sample of a run and what has become of it; small, for there may be very many."""

    index: int
    entry: SampleEntry
    stem: str
    digests: tuple[bytes | None, ...] = ()
    fingerprint: str = ""
    finished: bool = False
    reason: str | None = None


@dataclass(frozen=True)
class _Plan:
    tasks: Sequence[_Task]
    out: Path
    settings: Settings
    analyse: Analyse
    figures: bool
    report: bool
    redo: bool
    curves: bool
    bom: bool
    executor: Executor
    on_progress: Callable[[Progress], None] | None
    origin: dict[str, Any]
    count: dict[str, int] = field(default_factory=lambda: {"done": 0, "failed": 0})

    def suffixes(self) -> tuple[str, ...]:
        """What a finished sample has beside its JSON."""
        figure = self.figures and getattr(self.settings, "curves", True)
        return ((".png",) if figure else ()) + ((".html",) if self.report else ())

    def told(self, task: _Task, *, kept: bool = False) -> None:
        """Count a sample that ended and tell of it."""
        self.count["done"] += 1
        self.count["failed"] += not task.finished
        if self.on_progress is not None:
            self.on_progress(
                Progress(task.entry.name, task.index, self.count["done"], len(self.tasks), task.reason, task.finished,
                         self.count["failed"], kept)
            )  # fmt: skip

    def result(self, task: _Task) -> SampleResult:
        """A finished result as its file has it."""
        path = self.out / f"{task.stem}.json"
        head = None if self.curves else read_head(path)
        return head if head is not None else read_result(path)


def run_batch(
    source: str | Path | FoundSamples | Gathered | Sequence[SampleEntry] | Sequence[str | Path],
    out: str | Path,
    *,
    settings: Settings | None = None,
    workers: int | None = None,
    figures: bool = True,
    report: bool = False,
    redo: bool = False,
    time_limit: float | None = None,
    scheduler: str | None = None,
    bom: bool = False,
    curves: bool = True,
    on_progress: Callable[[Progress], None] | None = None,
    analyse: Analyse | None = None,
) -> Iterator[SampleResult]:
    """Analyse every sample of sheets, folders and patterns and write the results.

    ``<sample>.json`` and its figure (and page) are written as soon as a sample is finished, the tables and figures over all
    samples, ``failures.csv`` when samples failed, and ``run.json`` when the last one is: a folder without ``run.json``
    holds a run that is not complete. Rows follow the order of the sheet; the files are the same byte for byte however
    many workers there are. A second run into the same folder keeps every result whose inputs, settings, versions and phase
    files have not changed, does the rest, and ends with the files of a run that was never interrupted. Results of other
    samples in the folder are left alone. One run at a time may write into a folder.

    Worker processes are programs of their own that do not import the script or notebook they are started from: with
    ``workers`` this function can be called in a notebook cell, and in a script without ``if __name__ == "__main__":``. Only
    ``scheduler="local"`` starts workers that import the script, which needs that line then. An iterator that is not used
    to the end holds the folder until it is closed or forgotten: call its ``close()``.

    Parameters
    ----------
    source : path, paths, FoundSamples, Gathered or sequence of SampleEntry
        Sample sheets, folders of exports, patterns such as ``"scans/*.xy"``, or what `xrdmica.batch.sheet.entries_from`
        or `xrdmica.batch.sources.gather` made of them.
    out : path
        Folder for the results; made when it does not exist.
    settings : Settings, optional
        How to analyse.
    workers : int, optional
        Worker processes; None or 1 computes in this process.
    figures : bool
        Whether to draw ``<sample>.png`` and the figures over all samples.
    report : bool
        Whether to write ``<sample>.html`` and the overview ``index.html``.
    redo : bool
        Whether to do everything again.
    time_limit : float, optional
        Longest time for a sample [s]; one that takes longer is stopped and reported.
    scheduler : str, optional
        Address of a Dask scheduler, or ``"local"`` for one on this machine (``xrdmica[cluster]``).
    bom : bool
        Whether tables start with the mark by which some spreadsheets know UTF-8.
    curves : bool
        Whether the results that are yielded carry their curves; the files always do.
    on_progress : callable, optional
        Told after every sample, also of those that fail.
    analyse : callable, optional
        What to do with a sample, by default `xrdmica.batch.analyse.analyse_sample`; with workers it must stand in a module.

    Yields
    ------
    SampleResult
        Finished samples as they come, as the files have them; nothing runs until the iterator is used.

    Raises
    ------
    XrdmicaError
        At once when the source cannot be read or the output folder cannot be used; while running when a result cannot be
        written.
    """
    if settings is None or analyse is None:
        from xrdmica.batch.analyse import Settings, analyse_sample

        settings = settings or Settings()
        analyse = analyse or analyse_sample
    out = Path(out)
    entries, origin, sheets = _entries(source, settings)
    executor = executor_for(workers, len(entries), time_limit=time_limit, scheduler=scheduler)
    _check_folder(out, sheets, entries)
    stems = plan_stems([entry.name for entry in entries], out)
    tasks = [_Task(k, entry, stems[entry.name]) for k, entry in enumerate(entries)]
    shared = circumstances(settings, analyse)
    if executor.remote and isinstance(settings.instrument, str):
        from xrdmica.diffraction.optics import load_instrument

        settings = dataclasses.replace(settings, instrument=load_instrument(settings.instrument))
    return _run(
        _Plan(tasks, out, settings, analyse, figures, report, redo, curves, bom, executor, on_progress, origin), shared
    )


def _entries(source: Any, settings: Settings) -> tuple[list[SampleEntry], dict[str, Any], list[Path]]:
    """The samples, what the record says about where they come from, and the sheets."""
    if isinstance(source, str | Path) or (
        isinstance(source, list | tuple) and source and all(isinstance(s, str | Path) for s in source)
    ):
        from xrdmica.batch.sources import gather

        source = gather(source, radiation=settings.radiation)
    sheet: Path | None = getattr(source, "sheet", None)
    sheets = list(getattr(source, "sheets", ())) or ([sheet] if sheet is not None else [])
    skipped = [{"file": s.file.name, "reason": s.reason} for s in getattr(source, "skipped", ())]
    return list(source), {"sheets": [path.name for path in sheets], "not_read": skipped}, sheets


def _check_folder(out: Path, sheets: Sequence[Path], entries: Sequence[SampleEntry]) -> None:
    """Refuse an output folder where results would overwrite what was measured or be taken for scans later."""
    if out.exists() and not out.is_dir():
        raise XrdmicaError(f"{out}: is a file, not a folder", fix="name a folder for the results")
    place = out.resolve()
    parents: dict[Path, Path] = {}  # many scans stand in few folders
    scans = set()
    for entry in entries:
        for path in input_files(entry):
            parent = parents.setdefault(path.parent, path.parent.resolve())
            if parent == place:
                scans.add(path.name)
    beside = scans | {sheet.name for sheet in sheets if sheet.resolve().parent == place}
    overwritten = sorted(beside & set(BATCH_FILES))
    if overwritten:
        raise XrdmicaError(
            f"{out}: the results would overwrite the input {overwritten[0]}", fix="name another folder for the results"
        )
    if scans:
        raise XrdmicaError(
            f"{out}: is the folder with the scans", why="the tables would be taken for scans next time",
            fix="name another folder for the results",
        )  # fmt: skip
    write_text(place / ".xrdmica-writable", "").unlink()
    refuse_if_locked(out)


def input_files(entry: SampleEntry) -> tuple[Path, ...]:
    """The scan files of a sample, as the sheet gives them."""
    return tuple(Path(row.path) for row in entry.rows)


# ---------------------------------------------------------------- the run


def _run(plan: _Plan, shared: Circumstances) -> Iterator[SampleResult]:
    from xrdmica.batch.campaign import Ended, write_campaign

    with locked(plan.out):
        sweep(plan.out)
        (plan.out / "run.json").unlink(missing_ok=True)
        common = shared.digest()
        waiting: list[_Task] = []
        for task in plan.tasks:
            task.digests = digests_of(input_files(task.entry))
            task.fingerprint = fingerprint_of(task.entry, task.digests, common)
            if _complete(plan, task):
                plan.told(task, kept=True)
                yield plan.result(task)
            else:
                waiting.append(task)
        script = [plan.report]
        for job, outcome in plan.executor.map_unordered(work, _jobs(plan, waiting, script)):
            task = plan.tasks[job.index]
            _settle(plan, task, outcome, script)
            plan.told(task)
            if task.finished:
                yield plan.result(task)
        write_campaign(
            plan.out, [Ended(t.entry.name, t.stem if t.finished else None, t.reason or "") for t in plan.tasks],
            details=(getattr(task.entry, "details", {}) for task in plan.tasks), figures=plan.figures, report=plan.report,
            bom=plan.bom, title=", ".join(plan.origin["sheets"]) or "Samples",
        )  # fmt: skip
        write_record(plan.out, plan.tasks, shared, plan.origin)


def _complete(plan: _Plan, task: _Task) -> bool:
    """Whether an earlier run left all that this sample should have; marks it as finished then."""
    if plan.redo or not _has_result(plan, task):
        return False
    for suffix in (".png", ".html"):
        there = (plan.out / f"{task.stem}{suffix}").exists()
        if suffix in plan.suffixes() and not there:
            return False
        if there and suffix not in plan.suffixes():
            (plan.out / f"{task.stem}{suffix}").unlink(missing_ok=True)
    task.finished = True
    return True


def _has_result(plan: _Plan, task: _Task) -> bool:
    head = read_head(plan.out / f"{task.stem}.json")
    return head is not None and head.sample == task.entry.name and head.settings.get(FINGERPRINT) == task.fingerprint


def _jobs(plan: _Plan, waiting: Sequence[_Task], script: Sequence[bool]) -> Iterator[Job]:
    """Work for the executor, made when it is asked for; `script` says whether the shared files of pages are still wanted."""
    for task in waiting:
        source: Any = task.entry
        wanted = plan.suffixes()
        if not plan.redo and _has_result(plan, task):
            source = read_result(plan.out / f"{task.stem}.json")
            wanted = tuple(suffix for suffix in wanted if not (plan.out / f"{task.stem}{suffix}").exists())
        elif plan.executor.remote:
            try:
                source = task.entry.load()
            except Exception as error:
                source = error
        yield Job(
            task.index, source, plan.settings, plan.analyse, task.fingerprint, ".png" in wanted, ".html" in wanted, script[0]
        )


def _settle(plan: _Plan, task: _Task, outcome: Outcome | Exception, script: list[bool]) -> None:
    """Write what a worker sent back and note what became of the sample."""
    if not isinstance(outcome, Exception) and digests_of(input_files(task.entry)) != task.digests:
        # what went into the result may be neither the old nor the new file
        outcome = XrdmicaError("its files changed while it was analysed", fix="repeat the command when they are complete")
    if isinstance(outcome, Exception):
        task.reason = " ".join(str(outcome).split())
        withdraw(plan.out, task.stem, task.entry.name)
        return
    if outcome.version != __version__:
        raise XrdmicaError(
            f"a worker has version {outcome.version} of this program, here it is {__version__}",
            fix="install the same version everywhere",
        )
    for name, content in outcome.shared.items():
        replace_bytes(plan.out / name, content)
        script[0] = False
    # with a new JSON all others are new too; without one, what is there belongs to it
    keep = () if ".json" in outcome.files else plan.suffixes()
    commit(plan.out, task.stem, outcome.files, keep=keep)
    task.finished = True
    task.reason = outcome.problem
