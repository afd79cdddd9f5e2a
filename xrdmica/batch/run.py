"""Run many samples: each is written when it is finished, one that fails does not stop the others."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import platform
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from importlib import metadata
from pathlib import Path
from typing import TYPE_CHECKING, Any

from xrdmica._version import __version__
from xrdmica.batch.executors import executor_for
from xrdmica.errors import XrdmicaError
from xrdmica.paths import data_folder
from xrdmica.report.files import (
    FAILURES_HEADER,
    GROUPS_HEADER,
    PROPORTIONS_HEADER,
    SUMMARY_HEADER,
    failures_rows,
    groups_rows,
    plan_stems,
    proportions_rows,
    sample_of_file,
    summary_rows,
    write_csv,
    write_result,
    write_text,
)
from xrdmica.results import SampleResult

if TYPE_CHECKING:
    from xrdmica.batch.analyse import Settings
    from xrdmica.batch.sheet import FoundSamples, SampleEntry
    from xrdmica.scans.scan import Sample

__all__ = ["BATCH_FILES", "Progress", "run_batch"]

Analyse = Callable[["Sample", "Settings"], SampleResult]

BATCH_FILES = ("proportions.csv", "groups.csv", "summary.csv", "failures.csv", "run.json")
_PACKAGES = ("numpy", "scipy", "lmfit", "pymatgen", "matplotlib", "xraydb", "pybaselines", "gemmi", "pydantic")


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
    """

    sample: str
    index: int
    done: int
    total: int
    reason: str | None
    finished: bool


@dataclass(frozen=True)
class _Task:
    index: int
    entry: SampleEntry
    stem: str
    out: Path
    settings: Settings
    figures: bool
    analyse: Analyse


@dataclass(frozen=True)
class _Outcome:
    result: SampleResult
    figure_problem: str | None


def run_batch(
    source: str | Path | FoundSamples | Sequence[SampleEntry],
    out: str | Path,
    *,
    settings: Settings | None = None,
    workers: int | None = None,
    figures: bool = True,
    on_progress: Callable[[Progress], None] | None = None,
    analyse: Analyse | None = None,
) -> Iterator[SampleResult]:
    """Analyse every sample of a sheet or folder and write the results.

    ``<sample>.json`` and ``<sample>.png`` are written as soon as a sample is finished; ``proportions.csv``, ``groups.csv``,
    ``summary.csv``, ``run.json`` and, when samples failed, ``failures.csv`` when the last one is. Their rows follow the
    order of the sheet however many workers there are. Results of other samples in the folder are left alone.

    Parameters
    ----------
    source : path, FoundSamples or sequence of SampleEntry
        Sample sheet, folder of exports, or what `xrdmica.batch.sheet.entries_from` made of it.
    out : path
        Folder for the results; made when it does not exist.
    settings : Settings, optional
        How to analyse.
    workers : int, optional
        Worker processes; None or 1 computes in this process. A script that asks for more needs the usual
        ``if __name__ == "__main__":`` because workers import it.
    figures : bool
        Whether to draw ``<sample>.png``.
    on_progress : callable, optional
        Told after every sample, also of those that fail.
    analyse : callable, optional
        What to do with a sample, by default `xrdmica.batch.analyse.analyse_sample`; with workers it must pickle.

    Yields
    ------
    SampleResult
        Finished samples as they come; nothing runs until the iterator is used.

    Raises
    ------
    XrdmicaError
        At once when the source cannot be read or the output folder cannot be used.
    """
    if settings is None or analyse is None:
        from xrdmica.batch.analyse import Settings, analyse_sample

        settings = settings or Settings()
        analyse = analyse or analyse_sample
    out = Path(out)
    if isinstance(source, str | Path):
        from xrdmica.batch.sheet import entries_from

        source = entries_from(source, radiation=settings.radiation)
    entries = list(source)
    sheet: Path | None = getattr(source, "sheet", None)
    skipped = [{"file": s.file.name, "reason": s.reason} for s in getattr(source, "skipped", ())]
    _check_folder(out, sheet, entries)
    stems = plan_stems([entry.name for entry in entries], out)
    tasks = [_Task(k, entry, stems[entry.name], out, settings, figures, analyse) for k, entry in enumerate(entries)]
    return _run(tasks, out, settings, workers, on_progress, {"sheet": sheet.name if sheet else None, "not_read": skipped})


def _check_folder(out: Path, sheet: Path | None, entries: Sequence[SampleEntry]) -> None:
    """Refuse an output folder where results would overwrite what was measured or be taken for scans later."""
    if out.exists() and not out.is_dir():
        raise XrdmicaError(f"{out}: is a file, not a folder", fix="name a folder for the results")
    place = out.resolve()
    scans = {path.resolve() for entry in entries for path in input_files(entry)}
    overwritten = sorted((scans | ({sheet.resolve()} if sheet else set())) & {place / name for name in BATCH_FILES})
    if overwritten:
        raise XrdmicaError(
            f"{out}: the results would overwrite the input {overwritten[0].name}", fix="name another folder for the results"
        )
    if any(path.parent == place for path in scans):
        raise XrdmicaError(
            f"{out}: is the folder with the scans", why="the tables would be taken for scans next time",
            fix="name another folder for the results",
        )  # fmt: skip
    write_text(place / ".xrdmica-writable", "").unlink()


def input_files(entry: SampleEntry) -> tuple[Path, ...]:
    """The scan files of a sample, as the sheet gives them."""
    return tuple(Path(row.path) for row in entry.rows)


def _run(
    tasks: Sequence[_Task],
    out: Path,
    settings: Settings,
    workers: int | None,
    on_progress: Callable[[Progress], None] | None,
    origin: dict[str, Any],
) -> Iterator[SampleResult]:
    inputs = [_fingerprints(task.entry) for task in tasks]
    results: dict[int, SampleResult] = {}
    reasons: dict[int, str] = {}
    outcomes = executor_for(workers, len(tasks)).map_unordered(_one_sample, tasks)
    for ended, (task, outcome) in enumerate(outcomes, start=1):
        reason: str | None
        if isinstance(outcome, Exception):
            reason = " ".join(str(outcome).split())
            _remove_stale(task, ".json", ".png")
        else:
            reason = outcome.figure_problem
            # curves stay in the file: hundreds of samples would fill the memory
            results[task.index] = outcome.result.model_copy(update={"curves": ()})
            if not task.figures or reason is not None:
                _remove_stale(task, ".png")
        if reason is not None:
            reasons[task.index] = reason
        if on_progress is not None:
            finished = not isinstance(outcome, Exception)
            on_progress(Progress(task.entry.name, task.index, ended, len(tasks), reason, finished))
        if not isinstance(outcome, Exception):
            yield outcome.result
    _write_tables(out, tasks, results, reasons)
    _write_record(out, tasks, results, reasons, inputs, settings, origin)


def _one_sample(task: _Task) -> _Outcome:
    """Load, analyse and write one sample; runs in a worker."""
    result = task.analyse(task.entry.load(), task.settings)
    write_result(result, task.out, stem=task.stem)
    problem = None
    if task.figures and result.curves:
        from xrdmica.report.figures import sample_figure, save_figure

        try:
            save_figure(sample_figure(result), task.out / f"{task.stem}.png")
        except Exception as error:
            problem = f"the result is complete, but its figure could not be drawn: {error}"
    return _Outcome(result, problem)


def _remove_stale(task: _Task, *suffixes: str) -> None:
    """Take away what an earlier run left for this sample, so that nobody takes it for the result of this one."""
    if sample_of_file(task.out / f"{task.stem}.json") == task.entry.name:
        for suffix in suffixes:
            (task.out / f"{task.stem}{suffix}").unlink(missing_ok=True)


def _write_tables(out: Path, tasks: Sequence[_Task], results: dict[int, SampleResult], reasons: dict[int, str]) -> None:
    ordered = [results[task.index] for task in tasks if task.index in results]
    write_csv(out / "proportions.csv", PROPORTIONS_HEADER, proportions_rows(ordered))
    write_csv(out / "groups.csv", GROUPS_HEADER, groups_rows(ordered))
    write_csv(out / "summary.csv", SUMMARY_HEADER, summary_rows(ordered))
    if reasons:
        failures = [(task.entry.name, reasons[task.index]) for task in tasks if task.index in reasons]
        write_csv(out / "failures.csv", FAILURES_HEADER, failures_rows(failures))
    else:
        (out / "failures.csv").unlink(missing_ok=True)


# ---------------------------------------------------------------- the record of the run


def _write_record(
    out: Path,
    tasks: Sequence[_Task],
    results: dict[int, SampleResult],
    reasons: dict[int, str],
    inputs: Sequence[list[dict[str, str | None]]],
    settings: Settings,
    origin: dict[str, Any],
) -> None:
    """``run.json``: what is needed to repeat the run. No clock and no worker count, so that a repeat gives equal bytes."""
    samples = []
    for task, files in zip(tasks, inputs, strict=True):
        done = task.index in results
        record: dict[str, Any] = {"sample": task.entry.name, "status": "done" if done else "failed"}
        if done:
            record["result"] = f"{task.stem}.json"
        if task.index in reasons:
            record["reason"] = reasons[task.index]
        samples.append({**record, "inputs": files})
    record = {
        "program": "xrdmica",
        "version": __version__,
        "python": platform.python_version(),
        "packages": _package_versions(),
        "structures_sha256": _structures_fingerprint(),
        "settings": dataclasses.asdict(settings),
        **origin,
        "samples": samples,
    }
    write_text(out / "run.json", json.dumps(record, indent=2, ensure_ascii=False, default=str) + "\n")


def _fingerprints(entry: SampleEntry) -> list[dict[str, str | None]]:
    out: list[dict[str, str | None]] = []
    for path in input_files(entry):
        try:
            digest: str | None = hashlib.sha256(path.read_bytes()).hexdigest()
        except OSError:
            digest = None  # the sample itself will fail and say why
        out.append({"file": path.name, "sha256": digest})
    return out


def _package_versions() -> dict[str, str | None]:
    versions: dict[str, str | None] = {}
    for name in _PACKAGES:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            versions[name] = None
    return versions


def _structures_fingerprint() -> str | None:
    """One check sum over all phase files: results depend on them as much as on the program."""
    try:
        folder = data_folder("structures")
    except XrdmicaError:
        return None
    digest = hashlib.sha256()
    for path in sorted(folder.glob("*.toml")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()
