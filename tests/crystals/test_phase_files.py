"""Every phase file of the library: complete, balanced, consistent with handbooks; broken copies are refused."""

from __future__ import annotations

import csv
import json
import math
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from xrdmica.chemistry.ions import GROUP_IONS, charge_of, mass_of
from xrdmica.cli.phases import command
from xrdmica.crystals.layer import build_layer, formula_with
from xrdmica.crystals.library import Phase, State, all_phases, load_phase
from xrdmica.crystals.polytype import cell_atoms
from xrdmica.errors import StructureError
from xrdmica.paths import data_folder
from xrdmica.scans.treatment import Treatment

FILES = sorted(data_folder("structures").glob("*.toml"))
PHASES = {phase.id: phase for phase in all_phases()}
LAYERED = [phase for phase in PHASES.values() if phase.layer is not None]
STATES = [(phase, state) for phase in LAYERED for state in phase.states if not state.lost]
STATE_IDS = [f"{phase.id}-{state.id}" for phase, state in STATES]
# what an interlayer may hold besides the formula: water, and the atoms of glycol or glycerol
GUESTS = {"H2O", "C", "O"}

# ids that other parts of the program and its users rely on
EXPECTED = [
    "muscovite", "phengite", "celadonite", "glauconite", "illite", "paragonite", "phlogopite", "biotite", "annite",
    "lepidolite", "margarite", "clintonite", "talc", "minnesotaite", "kerolite", "pyrophyllite", "kaolinite", "dickite",
    "nacrite", "halloysite", "serpentine", "chlorite", "vermiculite", "smectite", "saponite", "illite_smectite",
    "illite_smectite_r1", "kaolinite_smectite", "chlorite_smectite", "chlorite_vermiculite", "palygorskite",
    "sepiolite", "quartz", "albite", "microcline", "calcite", "dolomite", "siderite", "gypsum", "anhydrite", "pyrite",
    "goethite", "hematite", "gibbsite", "boehmite", "anatase", "rutile", "corundum", "zincite", "fluorite", "halite",
    "magnetite", "augite", "amphibole",
]  # fmt: skip


def test_the_library_is_whole() -> None:
    assert set(EXPECTED) == set(PHASES)


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_every_file_loads_and_says_where_it_comes_from(path: Path) -> None:
    phase = load_phase(path)
    assert phase.sources
    assert all(source.strip() for source in phase.sources)
    assert phase.transcribed_by.strip()
    assert phase.checked_against.strip()
    assert all(polytype.source.strip() for polytype in phase.polytypes)
    assert all(state.source.strip() for state in phase.states)
    # a number without a printed source says so: every file names a year of publication or that it was recalled
    assert any(word in source for source in phase.sources for word in ("(19", "(20", "from memory"))


def _counts(phase: Phase, state: State) -> dict[str, float]:
    """Ions per formula unit on all planes of a phase in a state."""
    assert phase.layer is not None
    total: dict[str, float] = {}
    for plane in (*phase.layer.planes, *state.planes):
        off_the_middle = plane.z is None or plane.z > 0
        sides = 2 if phase.layer.mirrored and off_the_middle else 1
        ions = plane.ions or {ion: plane.share * n for ion, n in phase.site_formula.site(plane.role or "anions").items()}
        for ion, n in ions.items():
            total[ion] = total.get(ion, 0.0) + sides * n
    return {ion: n for ion, n in total.items() if ion not in GUESTS}


@pytest.mark.parametrize(("phase", "state"), STATES, ids=STATE_IDS)
def test_planes_add_up_to_the_formula(phase: Phase, state: State) -> None:
    wanted: dict[str, float] = {}
    for site in ("interlayer", "octahedral", "tetrahedral", "anions"):
        for ion, n in phase.site_formula.site(site).items():
            wanted[ion] = wanted.get(ion, 0.0) + n
    found = _counts(phase, state)
    if state.id == "dehydroxylated":
        # 2 OH- give H2O, which leaves, and O2-: cations and charge stay
        oxygens = {"O2-", "OH-"}
        charge = sum(charge_of(ion) * found.pop(ion) for ion in oxygens)
        assert charge == pytest.approx(sum(charge_of(ion) * wanted.pop(ion) for ion in oxygens))
    assert found == pytest.approx(wanted, abs=1e-6)


@pytest.mark.parametrize(("phase", "state"), STATES, ids=STATE_IDS)
def test_heights_stay_inside_the_spacing(phase: Phase, state: State) -> None:
    assert state.spacing is not None
    assert state.spacing_range is not None
    for spacing in (*state.spacing_range, state.spacing):
        layer = build_layer(phase, state, spacing=spacing)
        assert np.all(np.abs(layer.z) <= spacing / 2 + 1e-9)
        assert np.all(layer.counts > 0)
        # oxygens of neighbouring planes do not interpenetrate: the framework leaves room for the interlayer
        assert phase.layer is not None
        fixed = [plane.z for plane in phase.layer.planes if plane.z is not None]
        assert max(fixed) < spacing / 2
        assert layer.centrosymmetric == phase.layer.mirrored


@pytest.mark.parametrize("phase", PHASES.values(), ids=PHASES)
def test_charges_balance(phase: Phase) -> None:
    if phase.stack is not None:
        with pytest.raises(StructureError, match="no site formula"):
            _ = phase.site_formula
        return
    if phase.formula.framework:
        assert sum(n * charge_of(ion) for ion, n in phase.formula.framework.items()) == pytest.approx(0, abs=0.02)
        return
    exchanges = [v for v in phase.variables if v.kind == "exchange"]
    assert phase.site_formula.imbalance == pytest.approx(0, abs=0.02)
    for variable in exchanges:
        for value in (variable.minimum, variable.typical, variable.maximum):
            changed = formula_with(phase, {variable.id: value})
            assert changed.site(variable.site or "anions").get(variable.into or "", 0.0) == pytest.approx(value)
            # Fe3+ for Al3+ and Fe2+ for Mg2+ keep the charge
            assert changed.imbalance == pytest.approx(0, abs=0.02)


@pytest.mark.parametrize("phase", PHASES.values(), ids=PHASES)
def test_names_of_other_phases_exist(phase: Phase) -> None:
    for other in phase.look_alikes:
        assert other.id in PHASES
        assert other.id != phase.id
        assert other.told_by.strip()
        assert phase.id in {back.id for back in PHASES[other.id].look_alikes}
    if phase.stack is not None:
        for member in (phase.stack.first, phase.stack.second):
            assert PHASES[member].layer is not None
        low, usual, high = phase.stack.fraction
        assert 0 < low <= usual <= high < 1


@pytest.mark.parametrize("phase", LAYERED, ids=lambda phase: phase.id)
@pytest.mark.parametrize("treatment", ["air_dried", "glycolated", "glycerolated", "none", "heated_110", "heated_550"])
def test_every_treatment_is_answered(phase: Phase, treatment: str) -> None:
    assert phase.states_for(Treatment.parse(treatment))
    assert phase.variable("mean_layers") is not None


# ---------------------------------------------------------------- handbook values

# First basal spacing [angstrom], lowest and highest: Moore & Reynolds (1997) and Brindley & Brown (1980), from memory;
# swelling and heated layers: common practice.
ANCHORS = [
    ("muscovite", "air_dried", 9.96, 10.02), ("muscovite", "heated_550", 9.96, 10.02),
    ("paragonite", "air_dried", 9.62, 9.66), ("margarite", "air_dried", 9.53, 9.56),
    ("phlogopite", "air_dried", 10.00, 10.15), ("annite", "air_dried", 10.08, 10.10),
    ("clintonite", "air_dried", 9.60, 9.70), ("talc", "air_dried", 9.34, 9.36),
    ("pyrophyllite", "air_dried", 9.19, 9.21), ("minnesotaite", "air_dried", 9.5, 9.6),
    ("kerolite", "air_dried", 9.55, 9.65), ("celadonite", "air_dried", 9.95, 9.97),
    ("glauconite", "air_dried", 10.0, 10.1), ("illite", "glycolated", 9.98, 10.06),
    ("biotite", "air_dried", 10.0, 10.1), ("kaolinite", "air_dried", 7.14, 7.17),
    ("kaolinite", "heated_400", 7.14, 7.17), ("serpentine", "air_dried", 7.2, 7.35),
    ("chlorite", "air_dried", 14.1, 14.3), ("chlorite", "glycolated", 14.1, 14.3),
    ("chlorite", "heated_600", 13.6, 13.9), ("smectite", "Ca_air_dried", 14.6, 15.4),
    ("smectite", "Na_air_dried", 12.4, 12.6), ("smectite", "Mg_glycolated", 16.6, 17.2),
    ("smectite", "Mg_glycerolated", 17.6, 18.0), ("smectite", "heated_400", 9.6, 10.0),
    ("smectite", "heated_550", 9.6, 9.9), ("saponite", "Mg_air_dried", 14.8, 15.2),
    ("vermiculite", "Mg_air_dried", 14.2, 14.4), ("vermiculite", "Mg_glycolated", 14.2, 14.6),
    ("vermiculite", "Mg_glycerolated", 14.2, 14.4), ("vermiculite", "heated_400", 10.0, 11.8),
    ("vermiculite", "heated_550", 9.8, 10.2), ("halloysite", "glycolated", 10.9, 11.0),
    ("halloysite", "heated_400", 7.2, 7.4), ("palygorskite", "air_dried", 10.4, 10.5),
    ("sepiolite", "air_dried", 12.0, 12.3),
]  # fmt: skip


@pytest.mark.parametrize(("phase", "treatment", "low", "high"), ANCHORS, ids=lambda value: str(value))
def test_first_spacing_is_that_of_the_handbook(phase: str, treatment: str, low: float, high: float) -> None:
    usual = PHASES[phase].states_for(Treatment.parse(treatment))[0]
    assert usual.spacing is not None
    assert low <= usual.spacing <= high


@pytest.mark.parametrize("phase", ["kaolinite", "halloysite", "dickite", "nacrite"])
def test_kaolin_is_lost_on_strong_heating(phase: str) -> None:
    # common practice: gone after an hour at 550-600 C
    assert all(state.lost for state in PHASES[phase].states_for(Treatment.parse("heated_620")))
    assert not any(state.lost for state in PHASES[phase].states_for(Treatment.parse("heated_400")))


# d(060) [angstrom], Moore & Reynolds (1997), from memory
D060 = {
    "kaolinite": (1.489, 1.491), "smectite": (1.490, 1.504), "muscovite": (1.499, 1.504), "pyrophyllite": (1.492, 1.495),
    "margarite": (1.470, 1.475), "paragonite": (1.482, 1.484), "talc": (1.527, 1.529), "phlogopite": (1.532, 1.538),
    "biotite": (1.541, 1.554), "annite": (1.541, 1.555), "chlorite": (1.535, 1.550), "saponite": (1.525, 1.535),
}  # fmt: skip


@pytest.mark.parametrize(("phase", "limits"), D060.items(), ids=D060)
def test_d060(phase: str, limits: tuple[float, float]) -> None:
    value = PHASES[phase].d060
    assert value is not None
    assert limits[0] <= value <= limits[1]
    # b of the cell is six times d(060) when beta leaves b alone
    assert PHASES[phase].polytypes[0].cell[1] / 6 == pytest.approx(value, rel=0.004)


# Density [g/cm3]: as printed with the published cell, or mineralogical handbooks (from memory)
DENSITY = {
    "muscovite": 2.818, "phlogopite": 2.788, "paragonite": 2.892, "margarite": 3.05, "illite": 2.78, "celadonite": 2.98,
    "lepidolite": 2.838, "phengite": 2.84, "talc": 2.78, "pyrophyllite": 2.81, "kaolinite": 2.599, "dickite": 2.600,
    "nacrite": 2.607, "chlorite": 2.65, "quartz": 2.65, "albite": 2.623, "microcline": 2.56, "calcite": 2.71,
    "dolomite": 2.869, "siderite": 3.94, "gypsum": 2.31, "anhydrite": 2.97, "pyrite": 5.01, "goethite": 4.27,
    "hematite": 5.26, "gibbsite": 2.42, "boehmite": 3.07, "anatase": 3.89, "rutile": 4.25, "corundum": 3.98,
    "zincite": 5.68, "fluorite": 3.18, "halite": 2.165, "magnetite": 5.20, "augite": 3.28, "amphibole": 2.98,
}  # fmt: skip


def _volume(cell: tuple[float, ...]) -> float:
    a, b, c = cell[:3]
    ca, cb, cg = (math.cos(math.radians(angle)) for angle in cell[3:])
    return a * b * c * math.sqrt(1 - ca * ca - cb * cb - cg * cg + 2 * ca * cb * cg)


@pytest.mark.parametrize(("phase", "density"), DENSITY.items(), ids=DENSITY)
def test_density_of_published_cells(phase: str, density: float) -> None:
    polytype = next(p for p in PHASES[phase].polytypes if p.sites)
    to_density = 1.66053907 / _volume(polytype.cell)  # g/mol per cubic angstrom to g/cm3
    assert PHASES[phase].molar_mass * polytype.formula_units * to_density == pytest.approx(density, rel=0.03)
    # the sites, through the symmetry, give the same content as Z formula units
    atoms = cell_atoms(polytype)
    mass = sum(mass_of(ion) * n for ion, n in zip(atoms.ions, atoms.occupancies, strict=True))
    assert mass * to_density == pytest.approx(density, rel=0.03)


@pytest.mark.parametrize("phase", LAYERED, ids=lambda phase: phase.id)
def test_first_polytype_gives_the_area_of_a_formula_unit(phase: Phase) -> None:
    # the cell holds Z formula units in its layers, so that Z / layers formula units share a b sin(gamma)
    polytype = phase.polytypes[0]
    a, b, _, _, _, gamma = polytype.cell
    units = polytype.formula_units / polytype.layers_per_cell
    assert phase.area == pytest.approx(a * b * math.sin(math.radians(gamma)) / units)


# ---------------------------------------------------------------- relative intensities from first principles

# Relative 00l intensities of an oriented mount (Cu, ionic form factors, orientation spread 12 degrees): an independent
# calculation; tolerance a third of the value, and 2 of 100 for the faint ones.
# Not a blind check everywhere: Soller openings (2.3 degrees) were not stated there and are chosen to agree; so are K of
# muscovite, Na of margarite, the geometry of clintonite and Fe of chlorite (see checked_against of these files).
INTENSITIES = {
    ("muscovite", ""): (100, 32, 93), ("illite", ""): (100, 29, 65), ("phlogopite", ""): (100, 1, 57),
    ("biotite", ""): (100, 3, 32), ("paragonite", ""): (73, 23, 100), ("margarite", ""): (11, 4, 100),
    ("clintonite", ""): (41, 4, 100), ("talc", ""): (100, 7, 62), ("pyrophyllite", ""): (88, 31, 100),
    ("kaolinite", "kept"): (100, 59), ("chlorite", "air"): (55, 100, 54, 80),
}  # fmt: skip
WAVELENGTH, ENERGY = 1.5405929, 8047.8  # Cu K-alpha1: angstrom (Hoelzer et al. 1997, from memory), eV


def _form_factor(ion: str, s: np.ndarray) -> np.ndarray:
    import xraydb

    if ion in GROUP_IONS or ion == "O2-":
        ion = "O-"
    element = ion.rstrip("0123456789+-")
    table = {"K+": "K1+", "Na+": "Na1+", "O-": "O1-"}.get(ion, ion)
    dispersion = complex(*(float(np.squeeze(f(element, ENERGY))) for f in (xraydb.f1_chantler, xraydb.f2_chantler)))
    return np.asarray(xraydb.f0(table, s)) + dispersion


def _oriented(phase: Phase, state: State, orders: int) -> np.ndarray:
    """Integrated 00l intensities: F written out, averaged over both sides up, times the factor of Reynolds (1986)."""
    assert state.spacing is not None
    layer = build_layer(phase, state, exchanges={v.id: v.typical for v in phase.variables if v.kind == "exchange"})
    s = np.arange(1, orders + 1) / (2 * state.spacing)
    theta = np.arcsin(WAVELENGTH * s)
    square = np.zeros(orders)
    for side in (1, -1):
        f = np.zeros(orders, dtype=complex)
        for z, n, ion, b in zip(layer.z, layer.counts, layer.ions, layer.b_iso, strict=True):
            f += n * _form_factor(ion, s) * np.exp(-b * s * s) * np.exp(4j * np.pi * side * z * s)
        square += np.abs(f) ** 2 / 2
    spread, soller = 12.0, math.hypot(2.3 / 2, 2.3 / 2)
    q = soller / (2 * math.sqrt(2) * spread * np.sin(theta))
    erf = np.array([math.erf(x) for x in q])
    psi = math.sqrt(2 * math.pi) * erf / (2 * spread * soller) - 2 * np.sin(theta) * (1 - np.exp(-q * q)) / soller**2
    return np.asarray(square * (1 + np.cos(2 * theta) ** 2) * psi / np.sin(theta) / np.cos(theta))


@pytest.mark.parametrize(("name", "relative"), INTENSITIES.items(), ids=[name for name, _ in INTENSITIES])
def test_relative_intensities(name: tuple[str, str], relative: tuple[float, ...]) -> None:
    phase = PHASES[name[0]]
    state = next(s for s in phase.states if s.id == (name[1] or "anhydrous"))
    found = _oriented(phase, state, len(relative))
    assert 100 * found / found.max() == pytest.approx(np.array(relative, dtype=float), rel=1 / 3, abs=2)


def test_heating_raises_001_of_chlorite_and_weakens_the_rest() -> None:
    # a regression value in part: the heated sheet's heights were fitted to these ratios (the phase file says so)
    # handbook and common practice: 001 times 2 to 5, 002 and 003 times 0.1 to 0.3, 004 about half (a third of tolerance)
    states = {state.id: state for state in PHASES["chlorite"].states}
    ratio = _oriented(PHASES["chlorite"], states["dehydroxylated"], 4) / _oriented(PHASES["chlorite"], states["air"], 4)
    assert 2 <= ratio[0] <= 5
    assert 0.1 <= ratio[1] <= 0.3
    assert 0.1 <= ratio[2] <= 0.3
    assert ratio[3] == pytest.approx(0.5, rel=1 / 3)


# ---------------------------------------------------------------- broken copies

BROKEN = [
    ('id = "muscovite"', 'id = "muscowite"', "id"),
    ('group = "true mica"', 'group = "mica"', "group"),
    ('layer_type = "2:1"', 'layer_type = "3:1"', "layer_type"),
    ('"K+" = 0.92', '"K+" = -0.92', "formula.interlayer"),
    ('"K+" = 0.92', '"K+" = 0.5', "charges"),
    ('"K+" = 0.92', '"Kx" = 0.92', "formula"),
    ("[layer]", "[lair]", "lair"),
    ("z = 0.000, role", "z = 0.000, below_middle = 1.0, role", "layer.planes.0"),
    ('role = "octahedral"', 'role = "hexahedral"', "layer.planes.0.role"),
    ("spacing = 9.99", "spacing = 19.99", "states.0"),
    ("spacing = 9.99", "spacing = 999.0", "states.0.spacing"),
    ('"air_dried", "glycolated"', '"air_dried", "boiled"', "states.0.conditions"),
    ("minimum = 15.0", "minimum = 150.0", "variables.0"),
    ("formula_units = 4.0", "formula_units = 0.0", "polytypes.0.formula_units"),
    ("symmetry = [", "symmetri = [", "polytypes.0.symmetri"),
    ('transcribed_by = "xrdmica contributors"', 'transcribed_by = ""', "transcribed_by"),
    ("checked_against", "checked", "checked"),
    ("told_by", "told", "look_alikes.0"),
    ("b_iso = 0.88", "b_iso = 88.0", "layer.planes.0.b_iso"),
    ("[formula]", "[formula", "TOML"),
]


@pytest.mark.parametrize(("old", "new", "key"), BROKEN, ids=[f"{new[:24]}" for _, new, _ in BROKEN])
def test_a_broken_file_is_refused_with_file_and_key(tmp_path: Path, old: str, new: str, key: str) -> None:
    text = (data_folder("structures") / "muscovite.toml").read_text(encoding="utf-8")
    assert old in text
    path = tmp_path / "muscovite.toml"
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    with pytest.raises(StructureError) as caught:
        load_phase(path)
    assert "muscovite.toml" in str(caught.value)
    assert key in str(caught.value)


def test_sources_cannot_be_left_out(tmp_path: Path) -> None:
    lines = (data_folder("structures") / "halite.toml").read_text(encoding="utf-8").splitlines()
    start = lines.index("sources = [")
    path = tmp_path / "halite.toml"
    path.write_text("\n".join([*lines[:start], "sources = [", *lines[lines.index("]", start) :]]), encoding="utf-8")
    with pytest.raises(StructureError, match=r"halite\.toml: sources"):
        load_phase(path)


# ---------------------------------------------------------------- the phases command


def test_the_command_lists_what_lies_near(tmp_path: Path) -> None:
    table, record = tmp_path / "near.csv", tmp_path / "near.json"
    result = CliRunner().invoke(command, ["--near", "9.6", "--within", "0.08", "--csv", str(table), "--json", str(record)])
    assert result.exit_code == 0, result.output
    with table.open(encoding="utf-8", newline="") as stream:
        found = {row["id"]: row for row in csv.DictReader(stream)}
    # handbook spacings between 9.5 and 9.7, and layers collapsed by heating
    assert {"paragonite", "margarite", "clintonite", "minnesotaite", "kerolite", "smectite"} <= set(found)
    assert not {"talc", "muscovite", "kaolinite", "quartz"} & set(found)
    assert found["paragonite"]["formula"] == "Na(Al2)(Si3Al)O10(OH)2"
    assert found["paragonite"]["air_dried"] == "9.63"
    records = json.loads(record.read_text(encoding="utf-8"))["phases"]
    assert [r["id"] for r in records] == sorted(found)
    assert "interstratified phases" in result.stderr


def test_the_command_lists_a_group() -> None:
    result = CliRunner().invoke(command, ["--group", "Brittle mica"])
    assert result.exit_code == 0
    assert "margarite" in result.stdout
    assert "paragonite" not in result.stdout


@pytest.mark.parametrize("phase", ["biotite", "illite_smectite", "quartz", "halloysite"])
def test_the_command_shows_one_phase(phase: str) -> None:
    result = CliRunner(env={"COLUMNS": "400"}).invoke(command, ["--show", phase])
    assert result.exit_code == 0, result.output
    shown = PHASES[phase]
    for words in (*shown.sources, *shown.cautions, *(other.told_by for other in shown.look_alikes), shown.checked_against):
        assert words in result.stdout
    if phase == "biotite":
        # the iron of the usual biotite is in the formula shown
        assert "K(Mg1.5Fe2+1.5)(Si3Al)O10(OH)2" in result.stdout


@pytest.mark.parametrize("arguments", [["--group", "mica"], ["--near", "900"], ["--show", "talc", "--near", "9"]])
def test_the_command_refuses_wrong_use(arguments: list[str]) -> None:
    assert CliRunner().invoke(command, arguments).exit_code == 2


def test_the_command_suggests_a_phase() -> None:
    result = CliRunner().invoke(command, ["--show", "ilite"])
    assert isinstance(result.exception, StructureError)
    assert "did you mean illite" in str(result.exception)
