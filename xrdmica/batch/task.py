"""The work on one sample, as it is done in a worker: plain records in, the contents of files out."""

from __future__ import annotations

import tempfile
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from xrdmica._version import __version__
from xrdmica.batch.resume import FINGERPRINT
from xrdmica.report.files import result_text
from xrdmica.results import SampleResult
from xrdmica.scans.scan import Sample

if TYPE_CHECKING:
    from xrdmica.batch.analyse import Settings
    from xrdmica.batch.sheet import SampleEntry

__all__ = ["Analyse", "Job", "Outcome", "work"]

Analyse = Callable[["Sample", "Settings"], SampleResult]


@dataclass(frozen=True)
class Job:
    """What a worker is told.

    Attributes
    ----------
    index : int
        Place of the sample in the run.
    source : SampleEntry, Sample, SampleResult or Exception
        What to start from: files to be read, arrays for a worker that may not see the files, a finished result whose
        figure or page is wanting, or why the files could not be read.
    settings : Settings
        How to analyse.
    analyse : callable
        Function of sample and settings.
    fingerprint : str
        Goes into the result.
    figure, page : bool
        Whether to make them.
    script : bool
        Whether the files that all pages share are wanted too.
    """

    index: int
    source: SampleEntry | Sample | SampleResult | Exception
    settings: Settings
    analyse: Analyse
    fingerprint: str
    figure: bool
    page: bool
    script: bool = False


@dataclass(frozen=True)
class Outcome:
    """What a worker sends back.

    Attributes
    ----------
    files : dict
        Suffix -> content of the files of the sample.
    shared : dict
        Name -> content of files that all pages share.
    problem : str or None
        Why a figure or page is wanting though the result is complete.
    version : str
        Of this program where the work was done.
    """

    files: dict[str, bytes]
    shared: dict[str, bytes] = field(default_factory=dict)
    problem: str | None = None
    version: str = __version__


def work(job: Job) -> Outcome:
    """Load, analyse and draw one sample; writes nothing, so that a worker that outlives its run can spoil nothing."""
    if isinstance(job.source, Exception):
        raise job.source
    files: dict[str, bytes] = {}
    if isinstance(job.source, SampleResult):
        result = job.source
    else:
        sample = job.source if isinstance(job.source, Sample) else job.source.load()
        fresh = job.analyse(sample, job.settings)
        text = result_text(fresh.model_copy(update={"settings": {**fresh.settings, FINGERPRINT: job.fingerprint}}))
        files[".json"] = text.encode("utf-8")
        # figures and pages show what the file says, rounding and all: made later from the file they are the same
        result = SampleResult.model_validate_json(text)
    problems: list[str] = []
    shared: dict[str, bytes] = {}
    if job.figure and result.curves:
        try:
            files[".png"] = _figure(result)
        except Exception as error:
            problems.append(f"its figure could not be drawn: {error}")
    if job.page:
        try:
            files[".html"], shared = _page(result, job.script)
        except Exception as error:
            problems.append(f"its page could not be written: {error}")
    problem = f"the result is complete, but {' and '.join(problems)}" if problems else None
    return Outcome(files, shared, problem, __version__)


def _figure(result: SampleResult) -> bytes:
    from xrdmica.report.figures import figure_bytes, sample_figure

    return figure_bytes(sample_figure(result), "png")


def _page(result: SampleResult, script: bool) -> tuple[bytes, dict[str, bytes]]:
    """The page and what it shares with others, by way of a folder of its own."""
    from xrdmica.report.page import write_sample_page  # type: ignore[import-not-found, unused-ignore]

    with tempfile.TemporaryDirectory(prefix="xrdmica-") as name:
        folder = Path(name)
        page = Path(write_sample_page(result, folder, shared_script=True))
        content = page.read_bytes()
        shared = {
            path.relative_to(folder).as_posix(): path.read_bytes()
            for path in sorted(folder.rglob("*"))
            if script and path.is_file() and path != page
        }
    return content, shared
