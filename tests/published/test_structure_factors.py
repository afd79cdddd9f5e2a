"""Structure factors of library phases against those of gemmi's calculator for small structures.

gemmi uses the form factors of International Tables C (1992), table 6.1.1.4, the library those of Waasmaier & Kirfel (1995): the
two agree within 1.5 %. Molybdenum radiation, where the imaginary part of the dispersion (which gemmi leaves out) is negligible
for these elements; the real part is given to gemmi.
"""

from __future__ import annotations

import numpy as np
import pytest

from xrdmica.chemistry.ions import element_of
from xrdmica.crystals.library import load_phase
from xrdmica.crystals.polytype import cell_atoms, structured_polytype
from xrdmica.diffraction.powder import powder_lines
from xrdmica.diffraction.scattering import anomalous
from xrdmica.radiation import Radiation

MO = Radiation.tube("Mo", doublet=False)
LOW, HIGH = 1.6, 12.0


def squares_of_gemmi(phase: str) -> list[tuple[float, float]]:
    """1/d and |F|^2 of every reciprocal-lattice point."""
    import gemmi

    polytype = structured_polytype(load_phase(phase))
    atoms = cell_atoms(polytype)
    small = gemmi.SmallStructure()
    small.cell = gemmi.UnitCell(*polytype.cell)
    small.spacegroup_hm = "P 1"
    small.determine_and_set_spacegroup("s")
    for place, ion, occupancy, b_iso in zip(atoms.fractional, atoms.ions, atoms.occupancies, atoms.b_iso, strict=True):
        site = gemmi.SmallStructure.Site()
        site.element = gemmi.Element("O" if ion == "OH-" else element_of(ion))
        site.type_symbol = site.element.name
        site.label = site.element.name
        site.fract = gemmi.Fractional(*(float(x) for x in place))
        site.occ = float(occupancy)
        site.u_iso = float(b_iso) / (8 * np.pi**2)
        small.add_site(site)
    small.setup_cell_images()
    calculator = gemmi.StructureFactorCalculatorX(small.cell)
    for ion in set(atoms.ions):
        calculator.addends.set(gemmi.Element("O" if ion == "OH-" else element_of(ion)), float(anomalous(ion, MO.energy_ev).real))
    limits = [int(edge / LOW) + 1 for edge in polytype.cell[:3]]
    out = []
    for h in range(-limits[0], limits[0] + 1):
        for k in range(-limits[1], limits[1] + 1):
            for m in range(-limits[2], limits[2] + 1):
                if (h, k, m) != (0, 0, 0):
                    d = small.cell.calculate_d([h, k, m])
                    if LOW <= d <= HIGH:
                        value = calculator.calculate_sf_from_small_structure(small, [h, k, m])
                        out.append((1 / d, abs(value) ** 2))
    return out


@pytest.mark.parametrize("phase", ["quartz", "kaolinite", "muscovite", "phlogopite", "talc"])
def test_against_gemmi(phase: str) -> None:
    found = np.array(squares_of_gemmi(phase))
    lines = powder_lines(phase, MO, LOW + 0.05, HIGH, "neutral")
    strong = lines.structure_factor_squared > 0.01 * lines.structure_factor_squared.max()
    assert strong.sum() >= 8
    for d_spacing, ours in zip(lines.d_spacing[strong], lines.structure_factor_squared[strong], strict=True):
        theirs = found[np.abs(found[:, 0] * d_spacing - 1) < 2e-6, 1].sum()
        # a few per cent of the strongest amplitudes, as differences of the two tables enter weak lines enlarged
        assert ours == pytest.approx(theirs, rel=0.04, abs=2e-3 * lines.structure_factor_squared.max())
