"""Positions of lines against certified and published values."""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.crystals.layer import build_layer
from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.basal import basal_pattern
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.powder import powder_lines
from xrdmica.radiation import TUBES, Radiation

# NIST SRM 675, fluorophlogopite, d(001) = 9.98104 angstrom (from memory); angles at Cu K-alpha1 by Bragg's law [degree]
SRM_675_SPACING = 9.98104
SRM_675_ANGLES = (8.853, 17.758, 26.774, 35.962, 45.397, 55.169, 65.399, 76.254, 87.988, 101.024)



@pytest.mark.parametrize("order", range(1, 11))
def test_srm_675_by_bragg(order: int) -> None:
    angle = float(Radiation.tube("Cu", doublet=False).two_theta(SRM_675_SPACING / order))
    assert angle == pytest.approx(SRM_675_ANGLES[order - 1], abs=0.0011)


def test_srm_675_in_a_calculated_pattern() -> None:
    """Thick stacks, nearly perfect instrument: the maxima of the basal pattern of phlogopite lie at the certified angles."""
    phase = load_phase("phlogopite")
    layer = build_layer(phase, phase.states[0], spacing=SRM_675_SPACING)
    sharp = Instrument(fwhm=0.05)
    for order in (1, 3, 4, 5, 6):
        angle = SRM_675_ANGLES[order - 1]
        two_theta = np.arange(angle - 0.3, angle + 0.3, 0.002)
        pattern = basal_pattern(layer, two_theta, Radiation.tube("Cu", doublet=False), mean_layers=300, instrument=sharp)
        assert two_theta[pattern.argmax()] == pytest.approx(angle, abs=0.006)


def test_spacings_of_alpha_quartz() -> None:
    """d(100) 4.257, d(101) 3.343, d(112) 1.818, d(211) 1.541: handbook values (from memory), to 0.003 between refinements."""
    lines = powder_lines("quartz", Radiation.parse("Cu"), 1.2, 10.0)
    for d in (4.257, 3.343, 1.818, 1.541):
        assert np.abs(lines.d_spacing - d).min() < 0.003


# Hoelzer et al. (1997) Phys. Rev. A 56, 4554 gives Cu, Co, Fe, Cr, on the same length scale as the table below to 3e-5.
# International Tables for Crystallography C (1992), as tabulated in pymatgen's diffraction module [angstrom].
@pytest.mark.parametrize("metal", sorted(TUBES))
def test_wavelengths_against_pymatgen(metal: str) -> None:
    from pymatgen.analysis.diffraction.xrd import WAVELENGTHS

    first, second = TUBES[metal]
    assert first == pytest.approx(WAVELENGTHS[f"{metal}Ka1"], rel=5e-5)
    assert second == pytest.approx(WAVELENGTHS[f"{metal}Ka2"], rel=5e-5)


@pytest.mark.parametrize("metal", sorted(TUBES))
def test_wavelengths_against_level_energies(metal: str) -> None:
    """K-alpha1 energies of Elam's table in xraydb are rounded to 1 eV or so."""
    import xraydb

    lines = xraydb.xray_lines(metal)
    tube = Radiation.tube(metal)
    assert tube.energy_ev == pytest.approx(lines["Ka1"].energy, rel=6e-4)
    assert lines["Ka2"].energy < lines["Ka1"].energy
    assert tube.wavelengths[1] > tube.wavelengths[0]
