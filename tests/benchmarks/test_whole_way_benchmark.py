"""How long the whole way takes, and what keeping the linear part out of the fit is worth. Compared within one run only."""

from __future__ import annotations

import time
from typing import Any

import lmfit
import numpy as np
import pytest

from tests.simulated import FULL, make_sample
from xrdmica.batch.analyse import analyse_sample
from xrdmica.diffraction.simulate import usual_component
from xrdmica.matching.model import Candidate, SampleModel, build_model
from xrdmica.matching.prepare import prepare
from xrdmica.matching.solve import fit_model

WEIGHTS = {"illite": 30.0, "smectite": 25.0, "kaolinite": 20.0, "chlorite": 15.0, "muscovite": 10.0}


@pytest.fixture(scope="module")
def model() -> SampleModel:
    prepared = prepare(make_sample(WEIGHTS, FULL, seed=3))
    return build_model(
        prepared, [Candidate(p, tuple(usual_component(p, item.scan.treatment) for item in prepared)) for p in WEIGHTS]
    )


def plain_fit(model: SampleModel, rounds: int) -> tuple[float, int]:
    """The same model handed to lmfit plainly: all weights, scales and background terms as parameters, numerical derivatives."""
    params = lmfit.Parameters()
    for knob in model.knobs:
        params.add(knob.name, value=knob.value, min=knob.low, max=knob.high)
    for j in range(len(model.candidates)):
        params.add(f"w{j}", value=1.0, min=0.0)
    for k, item in enumerate(model.prepared):
        for b in range(item.smooth.shape[1]):
            params.add(f"b{k}_{b}", value=float(np.median(item.scan.counts)) if b == 0 else 0.0)
        params.add(f"s{k}", value=1.0, min=0.0, vary=k > 0)
    calls = 0

    def rest(p: Any) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
        nonlocal calls
        calls += 1
        columns = model.columns(np.array([p[knob.name].value for knob in model.knobs]))
        weights = np.array([p[f"w{j}"].value for j in range(len(model.candidates))])
        out = []
        for k, (item, a) in enumerate(zip(model.prepared, columns, strict=True)):
            terms = np.array([p[f"b{k}_{b}"].value for b in range(item.smooth.shape[1])])
            calculated = p[f"s{k}"].value * (a / a.max()) @ weights * 1000 + item.smooth @ terms
            out.append((item.scan.counts - calculated) * item.weight)
        return np.concatenate(out)

    start = time.perf_counter()
    lmfit.Minimizer(rest, params).leastsq(max_nfev=rounds)
    return time.perf_counter() - start, calls


def test_whole_sample(benchmark: Any) -> None:
    sample = make_sample(WEIGHTS, FULL, seed=4)
    analyse_sample(sample)
    result = benchmark.pedantic(analyse_sample, args=(sample,), rounds=3)
    assert result.findings.of_status("present")


def test_fit_inside_against_plain_fit(benchmark: Any, model: SampleModel) -> None:
    fit_model(model)
    fitted = benchmark.pedantic(fit_model, args=(model,), kwargs={"rounds": 40}, rounds=3)
    # the plain fit is stopped after the calls of four derivatives: it is far from done by then
    seconds, calls = plain_fit(model, rounds=260)
    ratio = seconds / benchmark.stats.stats.median if benchmark.stats else float("nan")
    benchmark.extra_info["plain fit, unfinished, over ours"] = round(ratio, 1)
    print(f"\nplain fit stopped after {calls} evaluations: {ratio:.1f} times the time of the whole inner-linear fit "
          f"({fitted.evaluations} evaluations)")  # fmt: skip
    assert fitted.converged
    assert fitted.evaluations < calls
