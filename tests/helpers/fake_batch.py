"""Stand-ins for samples and their analysis, importable in worker processes."""

from __future__ import annotations

import ctypes
import os
import time
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
from finished_sample import build_result

from xrdmica.errors import FitError
from xrdmica.results import Findings, GroupWeight, PhaseWeight, SampleResult
from xrdmica.scans.scan import Sample, Scan


@dataclass(frozen=True)
class FakeSettings:
    radiation: str | None = None
    phases: tuple[str, ...] = ()
    instrument: str | None = None
    curves: bool = True
    width_calibration: str | None = None
    formulas: tuple[tuple[str, str], ...] = ()
    joint_chemistry: bool = False
    bootstrap: int = 0
    seed: int = 0


@dataclass(frozen=True)
class FakeRow:
    path: Path


@dataclass(frozen=True)
class FakeEntry:
    """A sample that needs no files; `path` is its one input."""

    name: str
    rows: tuple[FakeRow, ...] = ()
    details: dict[str, str] = field(default_factory=dict)

    def load(self) -> Sample:
        angle = np.linspace(2, 40, 60)
        scan = Scan.from_arrays(angle, np.ones(60), source="none.xy")
        return Sample(self.name, (replace(scan),), self.details)


def with_weights(name: str, weights: Sequence[float], curves: bool, details: dict[str, str]) -> SampleResult:
    """A finished sample with given weights of illite, kaolinite, smectite, chlorite."""
    result = build_result(name, curves=curves, points=60)
    phases = tuple(
        phase.model_copy(update={"weight_percent": weights[k] if k < len(weights) else None, "low95": None, "high95": None})
        for k, phase in enumerate(result.proportions.phases)
    )
    proportions = result.proportions.model_copy(update={"phases": phases, "groups": groups_of(phases)})
    return result.model_copy(update={"proportions": proportions, "curves": result.curves[:1], "details": details})


def groups_of(phases: Sequence[PhaseWeight]) -> tuple[GroupWeight, ...]:
    sums: dict[str, float] = {}
    for phase in phases:
        if phase.weight_percent is not None:
            sums[phase.group] = sums.get(phase.group, 0.0) + phase.weight_percent
    return tuple(GroupWeight(group=group, status="present", weight_percent=weight) for group, weight in sums.items())


def analyse(sample: Sample, settings: FakeSettings, on_draw: object = None) -> SampleResult:
    """The name of the sample says what happens to it."""
    if "bad" in sample.name:
        raise FitError(f"sample {sample.name}: nothing to fit", fix="measure it again")
    if "bug" in sample.name:
        raise ZeroDivisionError("a mistake in the program")
    if "killer" in sample.name:
        os._exit(7)
    if "slow" in sample.name:
        time.sleep(0.3)
    if "segfault" in sample.name:
        ctypes.string_at(0)
    if "hang" in sample.name:
        time.sleep(3600)
    if "spin" in sample.name:
        while True:
            pass
    result = build_result(sample.name, curves=settings.curves, points=60)
    return result.model_copy(update={"curves": result.curves[:1]})


def name_of_instrument(sample: Sample, settings: Any) -> SampleResult:
    """Fails, telling what it was given."""
    raise TypeError(f"{type(settings.instrument).__name__} {settings.instrument.name}")


def identify(sample: Sample, phases: object = None, instrument: object = None) -> Findings:
    """The findings of `analyse`."""
    return analyse(sample, FakeSettings(curves=False)).findings


def load_and_analyse(entry: FakeEntry) -> SampleResult:
    return analyse(entry.load(), FakeSettings())


def double(value: int) -> int:
    return 2 * value


def process_id(value: int) -> int:
    return os.getpid()


def die_once(marker: str) -> str:
    """Kill the process the first time, work the second time."""
    if Path(marker).exists():
        return "second"
    Path(marker).write_text("x")
    os._exit(3)


def die_or_double(value: int) -> int:
    if value == 3:
        os._exit(9)
    return 2 * value


def thread_variable(name: str) -> str | None:
    return os.environ.get(name)


class UnpickleableError(Exception):
    """Cannot be built again from its arguments, which breaks a naive pool."""

    def __init__(self, one: int, two: int) -> None:
        super().__init__(f"{one} and {two}")


def raise_odd(value: int) -> int:
    raise UnpickleableError(value, value)
