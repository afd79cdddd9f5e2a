"""Results in notebooks and as tables."""

from __future__ import annotations

import subprocess
import sys

import pytest

from xrdmica.results import Proportions, SampleResult


def test_result_shows_its_verdict_and_weights(full_result: SampleResult) -> None:
    text = full_result._repr_html_()
    assert "about 18 %" in text
    assert "38.3 – 44.5" in text
    assert "<svg" in text
    assert "Pyrophyllite" in full_result.findings._repr_html_()
    assert "41.3" in full_result.proportions._repr_html_()


def test_names_are_escaped(make_result) -> None:
    result = make_result("<script>alert(1)</script>\"'", curves=False)
    for record in (result, result.findings, result.proportions):
        assert "<script" not in record._repr_html_()
        assert "&lt;script&gt;" in record._repr_html_()


def test_tables(full_result: SampleResult) -> None:
    table = full_result.to_dataframe()
    assert len(table) == len(full_result.proportions.phases)
    assert table.weight_percent.sum() == pytest.approx(100)
    assert table.set_index("phase").weight_percent.isna()["vermiculite"]
    facts = full_result.findings.to_dataframe()
    assert facts[facts.phase == "illite"].weight.sum() == pytest.approx(3.1 + 2.0 - 0.6)
    empty = Proportions(sample="x", basis="crystalline part", phases=())
    assert len(empty.to_dataframe()) == 0


def test_records_stay_light() -> None:
    code = "import sys, xrdmica.results; print([m for m in ('pandas', 'jinja2', 'matplotlib', 'rich') if m in sys.modules])"
    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=120).stdout
    assert out.strip() == "[]"
