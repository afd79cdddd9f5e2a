"""Errors, tubes, treatments and result records: what every part leans on."""

from __future__ import annotations

import json
import pickle

import jsonschema
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from xrdmica.errors import ScanError, SheetError, XrdmicaError
from xrdmica.paths import data_folder
from xrdmica.radiation import TUBES, Radiation
from xrdmica.results import SampleResult
from xrdmica.scans.scan import Sample, Scan
from xrdmica.scans.treatment import Treatment


def test_error_says_what_why_and_fix_and_survives_a_worker_process() -> None:
    error = ScanError("a.xy, line 3: no number", why="it says 'abc'", fix="export again")
    again = pickle.loads(pickle.dumps(error))
    assert isinstance(again, ScanError)
    assert str(again) == "a.xy, line 3: no number (it says 'abc'): export again"


def test_error_cannot_be_made_without_a_way_out() -> None:
    with pytest.raises(TypeError):
        XrdmicaError("something is wrong")  # type: ignore[call-arg]


# Hoelzer et al. (1997) Phys. Rev. A 56, 4554
@pytest.mark.parametrize(("metal", "first"), [("Cu", 1.54059), ("Co", 1.78900), ("Fe", 1.93604), ("Cr", 2.28973)])
def test_wavelengths(metal: str, first: float) -> None:
    assert Radiation.tube(metal).wavelength == pytest.approx(first, abs=2e-5)
    assert TUBES[metal][1] > TUBES[metal][0]


@pytest.mark.parametrize("text", ["Cu", "cu", "CuKa", "Cu K-alpha", "Cu Kα", "Cu Ka1+2", " 'Cu' "])
def test_doublet_is_read_in_many_spellings(text: str) -> None:
    assert Radiation.parse(text) == Radiation.tube("Cu")


def test_single_line_and_number() -> None:
    assert Radiation.parse("CoKa1").wavelengths == (TUBES["Co"][0],)
    assert Radiation.parse("1,7902").wavelength == pytest.approx(1.7902)


@pytest.mark.parametrize("text", ["Xx", "", "0.001", "154.06"])
def test_unknown_radiation_is_refused(text: str) -> None:
    with pytest.raises(XrdmicaError, match=r"write one of|angstrom"):
        Radiation.parse(text)


@given(st.floats(1.0, 30.0))
def test_bragg_law_both_ways(d_spacing: float) -> None:
    tube = Radiation.tube("Cu")
    assert float(tube.d_spacing(tube.two_theta(d_spacing))) == pytest.approx(d_spacing, rel=1e-9)


def test_photon_energy() -> None:
    # Cu K-alpha1 8047.8 eV, Hoelzer et al. (1997)
    assert Radiation.tube("Cu").energy_ev == pytest.approx(8047.8, abs=0.5)


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("AD", "air_dried"), ("N", "air_dried"), ("air dried", "air_dried"), ("EG", "glycolated"), ("550", "heated_550"),
        ("heated_400", "heated_400"), ("H550", "heated_550"), ("K-550", "K_heated_550"), ("Mg_glycerolated", "Mg_glycerolated"),
        ("none", "none"), ("550°C", "heated_550"),
    ],
)  # fmt: skip
def test_treatments_as_laboratories_write_them(text: str, name: str) -> None:
    assert Treatment.parse(text).name == name
    assert Treatment.parse(name) == Treatment.parse(text)


@pytest.mark.parametrize("text", ["", "wet", "20", "5000", "K"])
def test_unknown_treatment_is_refused(text: str) -> None:
    with pytest.raises(SheetError, match="write air_dried"):
        Treatment.parse(text)


def test_scan_needs_enough_points_and_keeps_its_arrays() -> None:
    with pytest.raises(ScanError, match="only 10 points"):
        Scan.from_arrays(np.arange(10.0), np.ones(10))
    scan = Scan.from_arrays(np.arange(5, 25, 0.1), np.full(200, 25.0))
    assert scan.sigma[0] == 5.0
    with pytest.raises(ValueError, match="read-only"):
        scan.counts[0] = 0.0


def test_repeated_treatments_get_distinct_labels() -> None:
    scan = Scan.from_arrays(np.arange(5, 25, 0.1), np.full(200, 25.0))
    assert Sample("s", (scan, scan)).labels == ("air_dried", "air_dried#2")


def test_data_folders_are_found_and_a_missing_one_is_said() -> None:
    assert (data_folder("structures") / "muscovite.toml").is_file()
    with pytest.raises(XrdmicaError, match="install xrdmica again"):
        data_folder("nothing")


def test_result_schema_is_valid_json_schema() -> None:
    schema = SampleResult.model_json_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    assert "proportions" in json.dumps(schema)
