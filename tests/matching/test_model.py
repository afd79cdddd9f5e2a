"""The forward model of a sample: derivatives against differences, and a known mixture found again."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from tests.simulated import make_sample
from xrdmica.diffraction.simulate import usual_component
from xrdmica.matching.model import Candidate, SampleModel, build_model
from xrdmica.matching.prepare import prepare
from xrdmica.matching.solve import Fitted, evaluate, fit_model, jacobian, residual

WEIGHTS = {"illite": 40.0, "smectite": 35.0, "kaolinite": 25.0}


@pytest.fixture(scope="module")
def model() -> SampleModel:
    prepared = prepare(make_sample(WEIGHTS, ("air_dried", "glycolated"), phase_spread=0.0, seed=5))
    candidates = [Candidate(p, tuple(usual_component(p, item.scan.treatment) for item in prepared)) for p in WEIGHTS]
    return build_model(prepared, candidates)


@pytest.fixture(scope="module")
def fitted(model: SampleModel) -> Fitted:
    return fit_model(model, rounds=20)


def test_known_mixture_is_found(fitted: Fitted) -> None:
    assert fitted.converged
    assert 0.8 < fitted.reduced_chi_square < 1.3
    found = 100 * fitted.evaluation.amounts
    np.testing.assert_allclose(found, list(WEIGHTS.values()), atol=3.0)


def test_derivatives_agree_with_differences(fitted: Fitted) -> None:
    model, evaluation = fitted.model, fitted.evaluation
    found = jacobian(model, evaluation)
    start = residual(model, evaluation)
    for number, knob in enumerate(model.knobs):
        values = evaluation.values.copy()
        step = 1e-3 if values[number] + 1e-3 < knob.high else -1e-3
        values[number] += step
        moved = replace(evaluation, values=values, columns=model.columns(values))
        difference = (residual(model, moved) - start) / step
        error = np.linalg.norm(-difference - found.knobs[:, number]) / np.linalg.norm(difference)
        # the width is felt through the spacing of grid points, so its difference is itself rough
        assert error < (0.5 if knob.kind == "width" else 0.08), knob.name


def test_values_stay_inside_their_limits(fitted: Fitted) -> None:
    for knob, value in zip(fitted.model.knobs, fitted.evaluation.values, strict=True):
        assert knob.low <= value <= knob.high


def test_evaluation_changes_nothing_it_was_given(model: SampleModel) -> None:
    values = model.start
    before = values.copy()
    first, second = evaluate(model, values), evaluate(model, values)
    np.testing.assert_array_equal(values, before)
    np.testing.assert_array_equal(first.amounts, second.amounts)
