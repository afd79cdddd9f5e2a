"""Calculated patterns: areas against the drawn curve, random against oriented, and pymatgen's calculator as the reference."""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.calculated.pattern import basal_areas, calculate_pattern, powder_areas
from xrdmica.calculated.subject import lines_of_atoms, read_subject
from xrdmica.crystals.layer import build_layer
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.crystals.polytype import cell_atoms, library_structure, structured_polytype
from xrdmica.diffraction.grid import make_grid
from xrdmica.diffraction.optics import RANDOM_SPREAD, Instrument
from xrdmica.diffraction.powder import powder_lines, reference_pattern
from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation

CU = Radiation.parse("Cu")


@pytest.mark.parametrize("name", ["quartz", "talc", "muscovite", "kaolinite", "calcite"])
def test_without_corrections_the_intensities_are_those_of_pymatgen(name: str) -> None:
    # pymatgen: neutral atoms of another parametrisation of the same form factors, hence 2 % of the strongest line
    phase = load_phase(name)
    polytype = structured_polytype(phase)
    lines = lines_of_atoms(
        cell_atoms(polytype), polytype.cell, 1.0, CU, 1.35, model="neutral", dispersion=False, displacement=False
    )
    theta = np.arcsin(CU.wavelength / (2 * lines.d_spacing))
    ours = lines.structure_factor_squared * (1 + np.cos(2 * theta) ** 2) / (np.sin(theta) ** 2 * np.cos(theta))
    angles, theirs, _ = reference_pattern(library_structure(phase), CU, (5.0, 60.0))
    # pymatgen joins lines closer than 1e-5 degree and drops weak ones; sum what we have within 2e-4 degree
    found = np.array([ours[np.abs(2 * np.degrees(theta) - angle) < 2e-4].sum() for angle in angles])
    assert angles.size > 5
    assert np.allclose(found / found.max(), theirs / theirs.max(), atol=0.02)


@pytest.mark.parametrize(
    ("name", "mount"), [("phlogopite", "oriented"), ("muscovite", "oriented"), ("kaolinite", "oriented"), ("muscovite", "random")]
)
def test_areas_of_basal_lines_are_those_under_the_curve(name: str, mount: str) -> None:
    found = calculate_pattern(
        name, mount="random" if mount == "random" else "oriented", radiation="1.5406", two_theta_range=(3.0, 26.0), step=0.01,
        mean_layers=200.0, instrument=Instrument(lorentzian=0.0, fwhm=0.06),
    )  # fmt: skip
    basal = [line for line in found.reflections if line.hkl and line.hkl[:2] == (0, 0)]
    assert len(basal) == 2

    def area(two_theta: float) -> float:
        # tails run under other lines: a narrow window, alike for all
        return float(found.intensity[np.abs(found.two_theta - two_theta) < 0.45].sum())

    measured = area(basal[1].two_theta) / area(basal[0].two_theta)
    assert measured == pytest.approx(basal[1].intensity / basal[0].intensity, rel=0.05, abs=0.004)


def test_basal_and_powder_areas_share_one_scale() -> None:
    """The same 00l line from the layer model and from the published structure, per unit of mass."""
    phase = load_phase("phlogopite")
    lines = powder_lines("phlogopite", CU, 1.2)
    areas = powder_areas(lines, CU, Instrument())
    cell_spacing = float(lines.d_spacing[0])
    layer = build_layer(phase, phase.states[0], spacing=cell_spacing)
    grid = make_grid(np.arange(5.0, 60.0, 0.02), CU, Instrument())
    basal = basal_areas(layer, np.array([1, 3, 5]), grid, RANDOM_SPREAD, "ionic")
    for order, area in zip((1, 3, 5), basal, strict=True):
        index = np.flatnonzero(np.all(np.abs(lines.hkl) == [0, 0, order], axis=1))[0]
        # the layer table merges planes and has other displacement parameters
        assert area == pytest.approx(areas[index], rel=0.25)


def test_lines_and_curve_are_scaled_to_hundred() -> None:
    found = calculate_pattern("talc")
    assert max(line.intensity for line in found.reflections) == pytest.approx(100.0)
    assert found.intensity.max() == pytest.approx(100.0)
    assert all(a.two_theta <= b.two_theta for a, b in zip(found.reflections, found.reflections[1:], strict=False))
    assert [line.label for line in found.reflections][:3] == ["001", "002", "003"]


def test_indices_of_a_two_layer_cell_count_cells() -> None:
    found = calculate_pattern("muscovite", mount="random", two_theta_range=(5.0, 30.0))
    first = found.reflections[0]
    assert first.hkl == (0, 0, 2)
    assert first.d_spacing == pytest.approx(9.99)


def test_interstratified_lines_have_no_indices() -> None:
    found = calculate_pattern("illite_smectite", treatment="glycolated", two_theta_range=(3.0, 35.0))
    assert all(line.hkl is None and line.label == "" for line in found.reflections)
    # R0 with the usual share of illite of the file: the composite lines lie between those of 16.9 and 10.0 angstrom
    assert any(8.45 < line.d_spacing < 10.0 for line in found.reflections)
    assert any(5.0 < line.d_spacing < 5.63 for line in found.reflections)
    assert any("glycol_1" in note for note in found.notes)


def test_co_radiation_moves_lines_and_keeps_spacings() -> None:
    copper, cobalt = (calculate_pattern("talc", radiation=tube, two_theta_range=(5.0, 40.0)) for tube in ("Cu", "Co"))
    assert cobalt.reflections[0].d_spacing == pytest.approx(copper.reflections[0].d_spacing)
    assert cobalt.reflections[0].two_theta > copper.reflections[0].two_theta + 1


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ({"two_theta_range": (30.0, 10.0)}, "cannot be used"),
        ({"step": 0.0}, "does not suit"),
        ({"step": 1e-3, "two_theta_range": (1.0, 160.0), "mean_layers": 0.5}, "too few"),
        ({"orientation_spread": 0.0}, "out of range"),
        ({"two_theta_range": (2.0, 3.0)}, "no lines between"),
        ({"polytype": "9Z"}, "no published atoms of polytype 9Z"),
        ({"treatment": "boiled"}, "treatment 'boiled' is not known"),
    ],
)
def test_wrong_arguments_are_one_sentence(arguments: dict[str, object], sentence: str) -> None:
    with pytest.raises(XrdmicaError, match=sentence):
        calculate_pattern("talc", **arguments)  # type: ignore[arg-type]


def test_a_phase_that_is_gone_has_no_pattern() -> None:
    with pytest.raises(XrdmicaError, match="shows no basal lines after"):
        calculate_pattern("kaolinite", treatment="heated_550")


def test_subjects_are_read_as_people_write_them() -> None:
    assert isinstance(read_subject("Illite-smectite"), Phase)
    with pytest.raises(XrdmicaError, match="did you mean muscovite"):
        read_subject("muscovit")
    with pytest.raises(XrdmicaError, match="tetrahedral"):
        read_subject("KMg3(AlSi2)O10(OH)2")
