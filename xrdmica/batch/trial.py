"""How well would this work for my kind of sample? Simulated samples, analysed like real ones, compared with what went in."""

from __future__ import annotations

import json
import tomllib
from collections.abc import Callable, Iterator, Sequence
from dataclasses import replace
from functools import partial
from hashlib import sha256
from pathlib import Path

import numpy as np
from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from xrdmica._version import __version__
from xrdmica.batch.analyse import Settings, analyse_sample
from xrdmica.batch.executors import executor_for
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.diffraction.columns import Component
from xrdmica.diffraction.optics import Instrument
from xrdmica.diffraction.simulate import MountSettings, simulate_scan, usual_component
from xrdmica.errors import XrdmicaError
from xrdmica.report.trial_report import TrialOutcome, TrialPhase
from xrdmica.results import SampleResult
from xrdmica.scans.scan import Sample
from xrdmica.scans.treatment import Treatment
from xrdmica.scans.write import write_atomically

__all__ = ["TrialSpecification", "load_specification", "run_trial", "trial_sample"]

Range = tuple[float, float]


class TrialSpecification(BaseModel):
    """What to simulate; read from a TOML file with these keys.

    Attributes
    ----------
    phases : dict
        Library id -> lowest and highest weight before normalisation.
    phases_per_sample : tuple of int
        Fewest and most phases of a sample, drawn from `phases`.
    treatments : tuple of str
        Scans of a sample.
    missing : float
        Chance that any scan but the first is missing.
    orientation_spread, peak_counts, background_counts, soller, fwhm : tuple of float
        Ranges from which each sample or mount is drawn.
    phase_spread : float
        Relative difference of orientation between the phases of one mount, standard deviation.
    displacement : float
        Standard deviation [mm].
    layers : float
        Standard deviation of the logarithm of the mean stack height.
    neutral_share : tuple of float
        Range of the part calculated with neutral atoms.
    hump : tuple of float
        Range of the height of a broad hump, relative to the background.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")

    phases: dict[str, Range] = Field(
        default={
            "illite": (5, 60), "smectite": (5, 60), "kaolinite": (5, 60), "chlorite": (5, 40), "muscovite": (5, 50),
            "vermiculite": (5, 40), "illite_smectite": (5, 60), "talc": (5, 60), "biotite": (5, 40), "quartz": (2, 15),
        },
        min_length=1,
    )  # fmt: skip
    phases_per_sample: tuple[int, int] = (2, 5)
    treatments: tuple[str, ...] = Field(default=("air_dried", "glycolated", "heated_400", "heated_550"), min_length=1)
    radiation: str = "Cu"
    missing: float = Field(default=0.0, ge=0, le=1)
    two_theta: Range = (3.0, 35.0)
    step: float = Field(default=0.02, gt=0.001, le=0.2)
    orientation_spread: Range = (9.0, 16.0)
    phase_spread: float = Field(default=0.10, ge=0, le=0.5)
    displacement: float = Field(default=0.07, ge=0, le=0.5)
    layers: float = Field(default=0.2, ge=0, le=1)
    peak_counts: Range = (2000.0, 12000.0)
    background_counts: Range = (60.0, 200.0)
    soller: Range = (2.0, 4.5)
    fwhm: Range = (0.07, 0.13)
    neutral_share: Range = (0.0, 0.3)
    hump: Range = (0.0, 0.6)

    @model_validator(mode="after")
    def _usable(self) -> TrialSpecification:
        for phase in self.phases:
            load_phase(phase)
        for treatment in self.treatments:
            Treatment.parse(treatment)
        low, high = self.phases_per_sample
        if not 1 <= low <= high:
            raise ValueError("phases_per_sample needs 1 <= fewest <= most")
        return self


def load_specification(path: str | Path) -> TrialSpecification:
    """Read a trial specification.

    Raises
    ------
    XrdmicaError
        If the file cannot be read, or a key is unknown or out of range.
    """
    try:
        return TrialSpecification.model_validate(tomllib.loads(Path(path).read_text(encoding="utf-8")))
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise XrdmicaError(f"trial specification {path} cannot be read", why=str(error), fix="give a TOML file") from error
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"]) or "the file as a whole"
        known = ", ".join(TrialSpecification.model_fields)
        raise XrdmicaError(f"trial specification {path}: {key}: {first['msg']}", fix=f"known keys are {known}") from error


def _mixed(phase: Phase, component: Component, rng: np.random.Generator, layers: float) -> Component:
    """A component with stack height, composition and mixing fraction drawn from what the phase file allows."""
    exchanges = []
    for variable in phase.variables:
        if variable.kind == "exchange":
            reach = (variable.maximum - variable.minimum) / 6
            value = float(np.clip(rng.normal(variable.typical, reach), variable.minimum, variable.maximum))
            exchanges.append((variable.id, round(value, 4)))
    height = phase.variable("mean_layers")
    mean = component.mean_layers * float(np.exp(rng.normal(0, layers)))
    if height is not None:
        mean = float(np.clip(mean, height.minimum, height.maximum))
    fraction = component.fraction
    if phase.stack is not None:
        low, _, high = phase.stack.fraction
        fraction = round(float(rng.uniform(low + 0.15 * (high - low), high - 0.15 * (high - low))), 4)
    return replace(component, mean_layers=mean, exchanges=tuple(exchanges), fraction=fraction)


def trial_sample(specification: TrialSpecification, seed: int, number: int) -> tuple[Sample, dict[str, float]]:
    """Draw one sample.

    Parameters
    ----------
    specification : TrialSpecification
    seed, number : int
        Together they fix the sample.

    Returns
    -------
    sample : Sample
    weights : dict of str to float
        What went in, companions included.
    """
    rng = np.random.default_rng([seed, number])
    s = specification
    count = min(int(rng.integers(s.phases_per_sample[0], s.phases_per_sample[1] + 1)), len(s.phases))
    chosen = sorted(rng.choice(sorted(s.phases), size=count, replace=False).tolist())
    weights = {phase: float(rng.uniform(*s.phases[phase])) for phase in chosen}
    soller, fwhm = float(rng.uniform(*s.soller)), float(rng.uniform(*s.fwhm))
    instrument = Instrument(soller_incident=soller, soller_diffracted=soller, fwhm=fwhm, lorentzian=float(rng.uniform(0.3, 0.8)))
    spread, neutral = float(rng.uniform(*s.orientation_spread)), float(rng.uniform(*s.neutral_share))
    factors = {phase: float(np.clip(rng.normal(1, s.phase_spread), 0.6, 1.5)) for phase in chosen}
    textures: dict[str, Component] = {}
    scans = []
    for place, text in enumerate(s.treatments):
        treatment = Treatment.parse(text)
        dropped = place > 0 and rng.random() < s.missing
        parts: dict[str, Component | None] = {}
        for phase in chosen:
            component = usual_component(phase, treatment)
            if component is not None and component.states:
                drawn = textures.setdefault(phase, _mixed(load_phase(phase), component, rng, s.layers))
                component = replace(
                    component, mean_layers=drawn.mean_layers, exchanges=drawn.exchanges, fraction=drawn.fraction
                )
            parts[phase] = component
        level = float(rng.uniform(*s.background_counts))
        settings = MountSettings(
            low=s.two_theta[0], high=s.two_theta[1], step=s.step, peak_counts=float(rng.uniform(*s.peak_counts)),
            background_counts=level, low_angle_rise=float(rng.uniform(2, 7)), displacement=float(rng.normal(0, s.displacement)),
            orientation_spread=spread, spread_factors=factors, neutral_share=neutral,
            hump=(float(rng.uniform(21, 27)), float(rng.uniform(3, 6)), level * float(rng.uniform(*s.hump))),
        )  # fmt: skip
        scan = simulate_scan(weights, parts, treatment, settings, rng, radiation=s.radiation, instrument=instrument)
        if not dropped:
            scans.append(scan)
    return Sample(f"trial {number}", tuple(scans)), weights


def _outcome(number: int, sample: Sample, weights: dict[str, float], result: SampleResult, seconds: float) -> TrialOutcome:
    plates = {phase: w for phase, w in weights.items() if load_phase(phase).is_sheet_silicate}
    total = sum(plates.values())
    rows = []
    for row in result.proportions.phases:
        if row.status == "not_detected" and row.phase not in weights:
            continue
        true = 100 * plates[row.phase] / total if row.phase in plates else (float("nan") if row.phase in weights else 0.0)
        rows.append(
            TrialPhase(row.phase, true, row.status, row.weight_percent, row.low95, row.high95, row.standard_error)
        )
    treatments = tuple(scan.treatment.name for scan in sample.scans)
    return TrialOutcome(number, tuple(rows), treatments, result.proportions.quality.reduced_chi_square, round(seconds, 3))


def _one(specification: TrialSpecification, seed: int, number: int) -> TrialOutcome:
    import time

    sample, weights = trial_sample(specification, seed, number)
    start = time.process_time()
    result = analyse_sample(sample, Settings(curves=False))
    return _outcome(number, sample, weights, result, time.process_time() - start)


def _as_record(outcome: TrialOutcome) -> dict[str, object]:
    phases = [[p.phase, None if np.isnan(p.true_percent) else p.true_percent, p.status, p.weight_percent, p.low95, p.high95,
               p.standard_error] for p in outcome.phases]  # fmt: skip
    return {
        "number": outcome.number, "phases": phases, "treatments": list(outcome.treatments),
        "reduced_chi_square": outcome.reduced_chi_square, "seconds": outcome.seconds,
    }  # fmt: skip


def _from_record(record: dict[str, object]) -> TrialOutcome:
    phases = tuple(
        TrialPhase(p[0], float("nan") if p[1] is None else p[1], *p[2:]) for p in record["phases"]  # type: ignore[attr-defined]
    )
    return TrialOutcome(
        record["number"], phases, tuple(record["treatments"]), record["reduced_chi_square"], record["seconds"]  # type: ignore[arg-type]
    )


def run_trial(
    specification: TrialSpecification,
    folder: str | Path,
    *,
    samples: int = 100,
    seed: int = 1,
    workers: int | None = None,
    on_progress: Callable[[int, int], None] | None = None,
) -> Sequence[TrialOutcome]:
    """Simulate and analyse samples; what was done before with the same specification, seed and version is not done again.

    Parameters
    ----------
    specification : TrialSpecification
    folder : path
        One small file per sample is kept here.
    samples : int
    seed : int
    workers : int, optional
        Processes.
    on_progress : callable, optional
        Called with (done, all).

    Returns
    -------
    sequence of TrialOutcome
        By number.
    """
    key = sha256(f"{specification.model_dump_json()}|{seed}|{__version__}".encode()).hexdigest()[:16]
    kept = Path(folder) / f"trial-{key}"
    kept.mkdir(parents=True, exist_ok=True)
    done = dict(_kept(kept, samples))
    missing = [number for number in range(samples) if number not in done]
    executor = executor_for(workers, len(missing))
    for number, outcome in executor.map_unordered(partial(_one, specification, seed), missing):
        if isinstance(outcome, Exception):
            raise outcome
        write_atomically(kept / f"{number:06d}.json", json.dumps(_as_record(outcome)))
        done[number] = outcome
        if on_progress is not None:
            on_progress(len(done), samples)
    return [done[number] for number in range(samples)]


def _kept(folder: Path, samples: int) -> Iterator[tuple[int, TrialOutcome]]:
    for path in folder.glob("*.json"):
        number = int(path.stem)
        if number < samples:
            yield number, _from_record(json.loads(path.read_text(encoding="utf-8")))
