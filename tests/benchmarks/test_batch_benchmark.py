"""What running many samples costs, as ratios within one run; nothing fails by the clock.

Run with ``python -m pytest tests/benchmarks/test_batch_benchmark.py -s`` on a machine that does nothing else.
"""

from __future__ import annotations

import sys
import time
from pathlib import Path
from typing import Any

import pytest

from xrdmica.batch.analyse import Settings, analyse_sample
from xrdmica.batch.executors import ProcessesExecutor, available_cores
from xrdmica.batch.run import run_batch
from xrdmica.batch.sheet import entries_from
from xrdmica.batch.task import Job, work
from xrdmica.paths import data_folder
from xrdmica.results import SampleResult
from xrdmica.scans.entry import SampleEntry
from xrdmica.scans.scan import Sample


def demo(count: int) -> list[SampleEntry]:
    """Samples of the demonstration, the ones with four scans, again and again under new names."""
    full = [entry for entry in entries_from(data_folder("demo_patterns")) if len(entry.rows) == 4]
    return [SampleEntry(f"{full[k % len(full)].name} {k}", full[k % len(full)].rows, {}) for k in range(count)]


def passed(workers: int, jobs: list[Job]) -> tuple[float, float, float]:
    """Seconds by the clock while all workers are busy, and processor seconds of the workers and of this process, per job.

    The start of the workers and the end, when some have nothing left, are not in the first number.
    """
    import resource

    children, own = resource.getrusage(resource.RUSAGE_CHILDREN), time.process_time()
    ends = [time.perf_counter() for _ in ProcessesExecutor(workers).map_unordered(work, jobs)]
    after, own = resource.getrusage(resource.RUSAGE_CHILDREN), time.process_time() - own
    computed = after.ru_utime + after.ru_stime - children.ru_utime - children.ru_stime
    clock = (ends[-workers - 1] - ends[workers - 1]) / (len(jobs) - 2 * workers)
    return clock, computed / len(jobs), own / len(jobs)


@pytest.mark.skipif(sys.platform == "win32" or available_cores() < 2, reason="needs two cores and their processor times")
def test_two_cores_against_one() -> None:
    """By the clock, which tells something on an idle machine only, and by processor times: two workers must not cost more than
    one per sample, and this process must have next to nothing to do."""
    entry = demo(1)[0]
    jobs = [Job(k, entry, Settings(), analyse_sample, "", False, False) for k in range(8)]
    clock_one, one, _ = passed(1, jobs[:4])
    clock_two, two, own = passed(2, jobs)
    gain = 2 * one / (two + own)
    print(f"\nby the clock {clock_one / clock_two:.2f} times ({1 / clock_two:.2f} samples/s), by processor times {gain:.2f} "
          f"times; this process {100 * own / two:.2f} % of the work")  # fmt: skip
    assert gain > 1.5
    assert own < 0.02 * two


def test_overhead_outside_the_analysis(tmp_path: Path, benchmark: Any) -> None:
    """Reading, checking, writing and tables against identify and estimate; figures on their own."""
    spent = [0.0]

    def timed(sample: Sample, settings: Settings) -> SampleResult:
        begin = time.perf_counter()
        result = analyse_sample(sample, settings)
        spent[0] += time.perf_counter() - begin
        return result

    list(run_batch(demo(1), tmp_path / "warm", analyse=timed))
    shares = {}
    for figures in (False, True):
        spent[0] = 0.0
        begin = time.perf_counter()
        assert len(list(run_batch(demo(4), tmp_path / str(figures), analyse=timed, figures=figures))) == 4
        shares[figures] = (time.perf_counter() - begin - spent[0]) / spent[0]
    begin = time.perf_counter()
    assert len(list(run_batch(demo(4), tmp_path / "True", analyse=timed))) == 4
    again = time.perf_counter() - begin
    benchmark.extra_info["overhead percent"] = round(100 * shares[False], 1)
    print(f"\n{4 / spent[0]:.2f} samples/s in the analysis on one core; overhead {100 * shares[False]:.1f} %, with figures "
          f"{100 * shares[True]:.1f} %; a run with nothing to do takes {100 * again / spent[0]:.1f} % of it")  # fmt: skip
    assert shares[False] < 0.10
    benchmark.pedantic(lambda: list(run_batch(demo(4), tmp_path / "True", analyse=timed)), rounds=2)
