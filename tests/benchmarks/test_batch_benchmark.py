"""What running many samples costs, as ratios within one run; nothing fails by the clock.

Run with ``python -m pytest tests/benchmarks/test_batch_benchmark.py -s`` on a machine that does nothing else.
"""

from __future__ import annotations

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


def burn(seconds: float) -> int:
    """Plain computing for some processor seconds; how many rounds that were does not matter."""
    end = time.process_time() + seconds
    rounds = 0
    while time.process_time() < end:
        rounds += sum(range(1000)) > 0
    return rounds


def rate(workers: int, function: Any, items: list[Any]) -> float:
    """Equal items per second while all workers are busy: their start and the end, when some have nothing left, are not in it."""
    ends = [time.perf_counter() for _ in ProcessesExecutor(workers).map_unordered(function, items)]
    return (len(ends) - 2 * workers) / (ends[-workers - 1] - ends[workers - 1])


@pytest.mark.skipif(available_cores() < 2, reason="needs two cores")
def test_two_cores_against_one() -> None:
    """Against what two processes of plain computing reach on the machine as it is now: 2.0 when it is idle."""
    entry = demo(1)[0]
    jobs = [Job(k, entry, Settings(), analyse_sample, "", False, False) for k in range(16)]
    plain_one, one = rate(1, burn, [1.0] * 8), rate(1, work, jobs[:8])
    two, plain_two = rate(2, work, jobs), rate(2, burn, [1.0] * 16)
    plain = plain_two / plain_one
    print(f"\none worker {one:.3f} samples/s, two {two:.3f}: {two / one:.2f} times; plain computing {plain:.2f} times")
    assert two / one > 0.8 * plain


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
        assert len(list(run_batch(demo(6), tmp_path / str(figures), analyse=timed, figures=figures))) == 6
        shares[figures] = (time.perf_counter() - begin - spent[0]) / spent[0]
    begin = time.perf_counter()
    assert len(list(run_batch(demo(6), tmp_path / "True", analyse=timed))) == 6
    again = time.perf_counter() - begin
    benchmark.extra_info["overhead percent"] = round(100 * shares[False], 1)
    print(f"\n{6 / spent[0]:.2f} samples/s in the analysis on one core; overhead {100 * shares[False]:.1f} %, with figures "
          f"{100 * shares[True]:.1f} %; a run with nothing to do takes {100 * again / spent[0]:.1f} % of it")  # fmt: skip
    assert shares[False] < 0.10
    benchmark.pedantic(lambda: list(run_batch(demo(6), tmp_path / "True", analyse=timed)), rounds=3)
