"""What calculated patterns cost, as ratios to plainly written sums in the same run; nothing fails by the clock.

Run with ``python -m pytest tests/benchmarks -s`` to see the ratios. The limits asserted are a third to a half of what was
measured, so that a busy machine does not fail them.
"""

from __future__ import annotations

import time
import tracemalloc
from collections.abc import Callable

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from xrdmica.crystals.layer import Layer, build_layer
from xrdmica.crystals.library import load_phase
from xrdmica.crystals.polytype import library_structure
from xrdmica.diffraction.basal import basal_intensity, basal_pattern
from xrdmica.diffraction.grid import make_grid, on_scan
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.powder import powder_lines, powder_pattern
from xrdmica.diffraction.stack_heights import lognormal_heights
from xrdmica.diffraction.stacking import stack_intensity, two_kind_junctions
from xrdmica.radiation import Radiation

CU = Radiation.parse("Cu")
TWO_THETA = np.linspace(3.0, 40.0, 2500)
GRID = make_grid(TWO_THETA, CU, Instrument())
MEAN = 20.0


def seconds(function: Callable[[], object], rounds: int = 7) -> float:
    """Shortest time of several calls [s]."""
    best = float("inf")
    for _ in range(rounds):
        start = time.perf_counter()
        function()
        best = min(best, time.perf_counter() - start)
    return best


def layer_of(phase: str, state: str | None = None, one_sided: bool = False) -> Layer:
    loaded = load_phase(phase)
    chosen = loaded.states[0] if state is None else next(s for s in loaded.states if s.id == state)
    return build_layer(loaded, chosen, one_sided=one_sided)


def test_basal_pattern_against_the_double_sum(benchmark: BenchmarkFixture) -> None:
    """The double sum takes one cosine per pair of layers of every stack height; 2000 pairs are timed and scaled to all pairs.
    Also against the single sum over distances between layers, the cheapest plain way."""
    layer = layer_of("illite")
    s = np.sin(np.radians(TWO_THETA) / 2) / CU.wavelength
    pairs = 2000
    start = time.perf_counter()
    total = np.zeros(s.size)
    for n in range(pairs):
        total += 0.5 * np.cos(4 * np.pi * s * layer.spacing * (n % 40))
    per_pair = (time.perf_counter() - start) / pairs
    plain = per_pair * float((lognormal_heights(MEAN).numbers.astype(float) ** 2).sum())
    distances = lognormal_heights(MEAN).pair_counts.size
    ours = seconds(lambda: basal_pattern(layer, TWO_THETA, CU, mean_layers=MEAN))
    benchmark(lambda: basal_pattern(layer, TWO_THETA, CU, mean_layers=MEAN))
    print(f"basal pattern: {ours * 1e3:.2f} ms, {plain / ours:.0f} times faster than the double sum,")
    print(f"{per_pair * distances / ours:.1f} times faster than the sum over distances")
    assert plain / ours > 100


def test_the_double_sum_agrees() -> None:
    """The plain sum written above is what is calculated."""
    layer, s = layer_of("illite"), np.linspace(0.03, 0.2, 30)
    heights = lognormal_heights(MEAN)
    total = np.zeros(s.size)
    for number, share in zip(heights.numbers, heights.shares, strict=True):
        places = np.arange(number)
        total += share * np.cos(4 * np.pi * layer.spacing * np.multiply.outer(s, places[:, None] - places)).sum(axis=(1, 2))
    from xrdmica.diffraction.stack_heights import interference

    np.testing.assert_allclose(interference(s, layer.spacing, MEAN), total / heights.mean, atol=1e-4 * total.max())


@pytest.mark.parametrize(("reichweite", "limit"), [(0, 10), (1, 10), (2, 40), (3, 40)])
def test_two_kinds_against_one(benchmark: BenchmarkFixture, reichweite: int, limit: float) -> None:
    plain = layer_of("illite")
    layers = (layer_of("illite", one_sided=True), layer_of("smectite", "glycol_2", one_sided=True))
    junctions = two_kind_junctions(0.8, reichweite)

    def one() -> object:
        return on_scan(basal_intensity(plain, GRID, mean_layers=10), GRID, TWO_THETA, orientation_spread=12.0)

    def two() -> object:
        return on_scan(stack_intensity(layers, junctions, GRID, mean_layers=10), GRID, TWO_THETA, orientation_spread=12.0)

    one(), two()
    single, double = seconds(one), seconds(two)
    benchmark(two)
    print(f"R{reichweite}: {double * 1e3:.2f} ms, {double / single:.1f} times the single kind ({single * 1e3:.2f} ms)")
    assert double / single < limit


@pytest.mark.parametrize("phase", ["muscovite", "quartz", "albite"])
def test_powder_from_the_cache_against_pymatgen(benchmark: BenchmarkFixture, phase: str) -> None:
    """Against pymatgen's calculator on a structure that is ready, same range; both give lines, ours drawn as a pattern too."""
    from pymatgen.analysis.diffraction.xrd import XRDCalculator

    structure = library_structure(load_phase(phase))
    calculator = XRDCalculator(wavelength=CU.wavelength)
    two_theta = np.linspace(3.0, 70.0, 2500)
    powder_pattern(phase, two_theta, CU)
    theirs = seconds(lambda: calculator.get_pattern(structure, scaled=False, two_theta_range=(3.0, 70.0)), 3)
    lines = seconds(lambda: powder_lines(phase, CU, 1.3, 60.0))
    drawn = seconds(lambda: powder_pattern(phase, two_theta, CU))
    benchmark(lambda: powder_pattern(phase, two_theta, CU))
    print(f"{phase}: pymatgen {theirs * 1e3:.1f} ms; drawn {drawn * 1e3:.2f} ms ({theirs / drawn:.1f} times)")
    print(f"lines alone {lines * 1e6:.1f} us ({theirs / lines:.0f} times)")
    assert theirs / lines > 20


def test_memory_of_one_pattern() -> None:
    """Traced allocations of numpy and Python while one pattern is calculated, below 64 MB."""
    layers = (layer_of("illite", one_sided=True), layer_of("smectite", "glycol_2", one_sided=True))
    jobs: dict[str, Callable[[], object]] = {
        "basal": lambda: basal_pattern(layers[0], TWO_THETA, CU),
        "R3": lambda: stack_intensity(layers, two_kind_junctions(0.8, 3), GRID, mean_layers=15),
        "powder": lambda: powder_pattern("muscovite", TWO_THETA, CU),
    }
    for name, job in jobs.items():
        job()
        tracemalloc.start()
        job()
        peak = tracemalloc.get_traced_memory()[1] / 2**20
        tracemalloc.stop()
        print(f"{name}: {peak:.1f} MB")
        assert peak < 64
