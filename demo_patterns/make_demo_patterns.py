"""Make the demonstration scans: an invented dam foundation and an invented talc quarry.

Run ``python demo_patterns/make_demo_patterns.py`` from the repository; the same seed and version give the same files.
The scans are calculated with the program's own models, but with optics, orientation, stack heights, compositions and
background drawn away from the values that the program starts from, with specimen displacement and counting noise.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np

from xrdmica.crystals.library import load_phase
from xrdmica.diffraction.columns import Component
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.simulate import MountSettings, simulate_scan, usual_component
from xrdmica.scans.scan import Scan
from xrdmica.scans.treatment import Treatment

HERE = Path(__file__).resolve().parent
SEED = 20260412
FULL = ("air_dried", "glycolated", "heated_400", "heated_550")
SHORT = {"air_dried": "AD", "glycolated": "EG", "heated_400": "400", "heated_550": "550"}
COMPANIONS = ("quartz", "calcite")


@dataclass(frozen=True)
class Specimen:
    """One invented sample."""

    name: str
    depth_m: str
    note: str
    weights: Mapping[str, float]
    swelling: str
    treatments: tuple[str, ...] = FULL
    radiation: str = "Cu"
    high: float = 35.0
    style: str = "spaces"
    states: Mapping[str, str] = field(default_factory=dict)
    fractions: Mapping[str, float] = field(default_factory=dict)
    exchanges: Mapping[str, Mapping[str, float]] = field(default_factory=dict)
    layers: Mapping[str, float] = field(default_factory=dict)


SPECIMENS = (
    Specimen(
        "GB1-04.2", "4.2", "grey plastic clay seam, dam foundation",
        {"illite": 30, "smectite": 42, "kaolinite": 20, "quartz": 8}, "yes",
    ),
    Specimen(
        "GB1-11.8", "11.8", "stiff clay, dam foundation", {"illite_smectite": 55, "illite": 25, "kaolinite": 20}, "yes",
        fractions={"illite_smectite": 0.45}, style="comma",
    ),
    Specimen(
        "GB2-06.5", "6.5", "weathered phyllite, dam foundation", {"muscovite": 46, "chlorite": 34, "kaolinite": 20}, "no",
        style="decimal_comma",
    ),
    Specimen(
        "GB3-02.0", "2.0", "clay film on a joint; too little material for glycol", {"smectite": 35, "illite": 65},
        "cannot tell", treatments=("air_dried",),
    ),
    Specimen(
        "GB4-09.1", "9.1", "schist, scanned with a cobalt tube", {"biotite": 40, "vermiculite": 25, "chlorite": 35}, "no",
        radiation="Co", high=41.0, style="header", exchanges={"biotite": {"fe": 1.3}},
    ),
    Specimen("TQ-A", "0.5", "talc ore, quarry face", {"talc": 78, "chlorite": 22}, "no", style="three_columns"),
    Specimen(
        "TQ-B", "1.5", "contact zone: true mica, brittle mica and talc", {"muscovite": 34, "margarite": 40, "talc": 26}, "no",
        high=52.0,
    ),
    Specimen(
        "TQ-C", "3.0", "pale schist beside the ore", {"pyrophyllite": 48, "muscovite": 30, "kaolinite": 22}, "no",
        style="comma",
    ),
)  # fmt: skip


def component(specimen: Specimen, phase: str, treatment: Treatment, layers: float) -> Component | None:
    """The phase as it lies in this specimen."""
    found = usual_component(phase, treatment, specimen.states.get(f"{phase}/{treatment.name}"))
    if found is None or not found.states:
        return found
    exchanges = dict(found.exchanges) | dict(specimen.exchanges.get(phase, {}))
    return replace(
        found,
        mean_layers=layers,
        exchanges=tuple(exchanges.items()),
        fraction=specimen.fractions.get(phase, found.fraction),
    )


def scans_of(specimen: Specimen, rng: np.random.Generator) -> list[tuple[str, Scan, dict[str, float]]]:
    """All scans of a specimen with the displacement of each mount."""
    instrument = Instrument(
        name="invented", soller_incident=4.0, soller_diffracted=4.0, fwhm=float(rng.uniform(0.07, 0.1)), lorentzian=0.6
    )
    spread = float(rng.uniform(9.0, 15.0))
    factors = {phase: float(np.clip(rng.normal(1.0, 0.08), 0.8, 1.2)) for phase in specimen.weights}
    layers = {}
    for phase in specimen.weights:
        variable = load_phase(phase).variable("mean_layers")
        if variable is not None:
            low, high = np.log(variable.minimum), np.log(variable.maximum)
            drawn = np.clip(np.log(variable.typical) + rng.normal(0, 0.2), low, high)
            layers[phase] = specimen.layers.get(phase, float(np.exp(drawn)))
    out = []
    for name in specimen.treatments:
        treatment = Treatment.parse(name)
        parts = {phase: component(specimen, phase, treatment, layers.get(phase, 20.0)) for phase in specimen.weights}
        displacement = float(np.clip(rng.normal(0.0, 0.08), -0.2, 0.2))
        settings = MountSettings(
            high=specimen.high, peak_counts=float(rng.uniform(6000, 12000)), background_counts=float(rng.uniform(70, 160)),
            low_angle_rise=float(rng.uniform(3, 7)), displacement=displacement, orientation_spread=spread, spread_factors=factors,
        )  # fmt: skip
        scan = simulate_scan(
            specimen.weights, parts, treatment, settings, rng, radiation=specimen.radiation, instrument=instrument
        )
        out.append((name, scan, {"displacement_mm": round(displacement, 3)}))
    return out


def written(specimen: Specimen, treatment: str, scan: Scan) -> tuple[str, str]:
    """File name and text of one export, in one of the dialects that laboratories meet."""
    stem = f"{specimen.name}_{SHORT[treatment]}"
    pairs = list(zip(scan.two_theta, scan.counts, strict=True))
    if specimen.style == "comma":
        return f"{stem}.csv", "two_theta,counts\n" + "".join(f"{x:.2f},{y:.0f}\n" for x, y in pairs)
    if specimen.style == "decimal_comma":
        lines = "".join(f"{x:.2f};{y:.0f}\n" for x, y in pairs).replace(".", ",")
        return f"{stem}.txt", "Winkel;Impulse\n" + lines
    if specimen.style == "three_columns":
        rows = zip(scan.two_theta, scan.counts, scan.sigma, strict=True)
        return f"{stem}.xye", "".join(f"{x:.2f} {y:.0f} {s:.2f}\n" for x, y, s in rows)
    if specimen.style == "header":
        head = f"# sample: {specimen.name}\n# anode: {specimen.radiation}\n# treatment: {treatment}\n# step: 0.02\n"
        return f"{stem}.dat", head + "".join(f"{x:.2f}\t{y:.0f}\n" for x, y in pairs)
    return f"{stem}.xy", "".join(f"{x:.2f} {y:.0f}\n" for x, y in pairs)


def main() -> None:
    """Write scans, sample sheet and truth file into this folder."""
    rng = np.random.default_rng(SEED)
    rows, truth = [], {}
    for specimen in SPECIMENS:
        mounts = {}
        for name, scan, optics in scans_of(specimen, rng):
            file, text = written(specimen, name, scan)
            (HERE / file).write_text(text, encoding="utf-8", newline="\n")
            radiation = "" if specimen.style == "header" else specimen.radiation
            rows.append([specimen.name, file, "oriented", name, radiation, specimen.depth_m, specimen.note])
            mounts[name] = optics
        plates = {p: w for p, w in specimen.weights.items() if p not in COMPANIONS}
        total = sum(plates.values())
        truth[specimen.name] = {
            "weight_percent": {p: round(100 * w / total, 2) for p, w in plates.items()},
            "companions": [p for p in specimen.weights if p in COMPANIONS],
            "swelling": specimen.swelling,
            "fractions": dict(specimen.fractions),
            "mounts": mounts,
        }
    with (HERE / "samples.csv").open("w", encoding="utf-8", newline="") as handle:
        writer = csv.writer(handle, lineterminator="\n")
        writer.writerow(["sample", "file", "mount", "treatment", "radiation", "depth_m", "note"])
        writer.writerows(rows)
    (HERE / "truth.json").write_text(json.dumps(truth, indent=2) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
