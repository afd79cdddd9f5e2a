"""A quick stand-in for the analysis, importable in workers; with XRDMICA_TEST_CHEAP set, figures and pages are cheap too."""

from __future__ import annotations

import os
import random
import sys
import time
from dataclasses import dataclass

import fake_batch
import fake_page
import numpy as np

from xrdmica.results import SampleResult
from xrdmica.scans.scan import Sample


@dataclass(frozen=True)
class QuickSettings(fake_batch.FakeSettings):
    """Settings of the run; `shade` is a number that the results depend on."""

    shade: float = 0.0


def quick(sample: Sample, settings: QuickSettings) -> SampleResult:
    """A result that depends on the name of the sample and on the settings, after a short time of chance length."""
    if "bad" in sample.name:
        raise ZeroDivisionError("a mistake in the program")
    time.sleep(random.Random(os.getpid() + time.monotonic_ns()).uniform(0.0, 0.01))
    weights = 100 * np.random.default_rng(sum(map(ord, sample.name))).dirichlet([4.0, 3.0, 2.0, 1.0 + settings.shade])
    return fake_batch.with_weights(sample.name, weights.tolist(), settings.curves, dict(sample.details))


def entries(count: int) -> list[fake_batch.FakeEntry]:
    """Samples; every thirteenth fails."""
    return [fake_batch.FakeEntry(f"S{k:04d}{'bad' if k % 13 == 7 else ''}") for k in range(count)]


def cheap_figure(result: SampleResult) -> bytes:
    """A few bytes that depend on the result."""
    return repr([(p.phase, p.weight_percent) for p in result.proportions.phases]).encode()


if os.environ.get("XRDMICA_TEST_CHEAP"):
    import xrdmica.batch.task

    xrdmica.batch.task._figure = cheap_figure
    sys.modules["xrdmica.report.page"] = fake_page
