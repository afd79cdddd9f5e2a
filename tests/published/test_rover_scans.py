"""Measured powders of a planetary rover (NASA Planetary Data System, MSL-M-CHEMIN-4-RDR-V1.0): honest answers are wanted.

Cobalt radiation, powder mounts, no glycol; nobody knows the truth of most of them, so that what must not be claimed is
tested: see the notes of the data set on window features and on the 10 angstrom phase.
"""

from __future__ import annotations

import csv
import shutil
from pathlib import Path

import pytest

from xrdmica.batch.run import run_batch
from xrdmica.crystals.library import load_phase
from xrdmica.results import SampleResult


@pytest.fixture(scope="module")
def results(shared: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, SampleResult]:
    folder = tmp_path_factory.mktemp("rover")
    rows = ["sample,file,mount,treatment,radiation"]
    with (shared / "measured" / "planetary" / "catalogue.csv").open(encoding="utf-8", newline="") as handle:
        for line in csv.DictReader(handle):
            shutil.copy(shared / "measured" / "planetary" / line["scan"], folder)
            rows.append(f"{line['scan'].split('rda')[0]},{line['scan']},random,none,Co")
    (folder / "sheet.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    failures: list[str] = []
    found = {
        r.sample: r
        for r in run_batch(
            folder / "sheet.csv",
            folder / "out",
            workers=1,
            figures=False,
            on_progress=lambda progress: failures.append(str(progress.reason)) if progress.reason else None,
        )
    }
    assert not failures
    assert len(found) == 11
    return found


def sheets(result: SampleResult, *status: str) -> set[str]:
    return {f.phase for f in result.findings.phases if f.status in status and load_phase(f.phase).is_sheet_silicate}


def test_no_sheet_silicate_is_called_present(results: dict[str, SampleResult]) -> None:
    for result in results.values():
        assert not sheets(result, "present", "trace"), result.sample


@pytest.mark.parametrize("name", ["cmb_442656639", "cmb_468152334"])
def test_amphibole_and_arcanite_hold_none_at_all(results: dict[str, SampleResult], name: str) -> None:
    assert not sheets(results[name], "present", "trace", "possible")


def test_amphibole_standard_is_recognised(results: dict[str, SampleResult]) -> None:
    assert results["cmb_442656639"].findings.get("amphibole").status == "present"  # type: ignore[union-attr]


@pytest.mark.parametrize("name", ["cmb_709781522", "cmb_616745003"])
def test_window_feature_at_16_angstrom_is_not_smectite(results: dict[str, SampleResult], name: str) -> None:
    result = results[name]
    assert result.swelling.verdict == "cannot tell"
    near = [line for line in result.findings.unassigned if 15.2 < line.d_spacing < 16.4]
    assert near or "smectite" in sheets(result, "possible")


@pytest.mark.parametrize("name", ["cmb_608205076", "cmb_609535789"])
def test_the_10_angstrom_phase_is_left_open(results: dict[str, SampleResult], name: str) -> None:
    findings = results[name].findings
    ten = [f for f in findings.of_status("possible") if f.basal_spacing and 9.85 <= f.basal_spacing <= 10.5]
    assert ten
    assert {a.phase for f in ten for a in f.alternatives} | {f.phase for f in ten} & {"smectite"}
    assert any("glycol" in text for text in findings.measure_next)


def test_hematite_and_anhydrite_of_a_drill_sample_are_found(results: dict[str, SampleResult]) -> None:
    # the mission's own table lists plagioclase, hematite 26 %, anhydrite 5.8 % and gypsum 5.5 % of the crystalline part
    present = {f.phase for f in results["cmb_518482923"].findings.of_status("present")}
    assert {"hematite", "anhydrite", "gypsum"} <= present
