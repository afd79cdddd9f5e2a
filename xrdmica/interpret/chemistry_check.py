"""Whether an oxide analysis of the sample agrees with its phases and proportions, and what would bring the two together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.chemistry.oxide_table import read_oxide_table
from xrdmica.chemistry.oxides import oxide_percent
from xrdmica.crystals.layer import formula_with
from xrdmica.crystals.library import Phase, load_phase
from xrdmica.errors import XrdmicaError
from xrdmica.results import ChemistryCheck, OxideMisfit, PhaseWeight, Proportions

__all__ = ["check_chemistry", "read_analysis"]

FloatArray = NDArray[np.float64]
# oxides that are compared, iron as Fe2O3; water and what burns off are left out of both sides
_OXIDES = ("SiO2", "TiO2", "Al2O3", "Fe2O3", "MnO", "MgO", "CaO", "Na2O", "K2O")
_FERRIC = 1.11134  # Fe2O3 per FeO by weight
_RELATIVE, _LEAST = 0.02, 0.10  # analytical error where none is given: 2 % of the value and 0.1 wt %, common practice
_MODEL = 0.3  # wt %: what phases below their detection limits add
_FAR = 3.0  # sigma
_MISSING = ("quartz", "microcline", "albite", "calcite", "dolomite", "gypsum", "goethite", "hematite", "siderite", "anatase")
_ENOUGH = 0.5  # share of the misfit that a remedy must take away


@dataclass(frozen=True)
class _Parts:
    """What the phases bring: oxides per unit weight of each phase, and how composition may move them."""

    phases: tuple[str, ...]
    oxides: FloatArray  # (o, j) wt % of oxide per unit weight
    moves: FloatArray  # (o, v) change over one standard deviation of each composition variable, per unit weight
    owner: tuple[int, ...]
    variables: tuple[str, ...]


def read_analysis(path: str | Path, sample: str) -> dict[str, tuple[float, float | None]]:
    """The analysis of one sample out of a table of oxides.

    Parameters
    ----------
    path : str or Path
        Table that `xrdmica formula --oxides` reads.
    sample : str
        Its row is named like the sample; a table with a single analysis needs no name.

    Returns
    -------
    dict
        Oxide -> (wt %, one standard error or None).

    Raises
    ------
    XrdmicaError
        If the table cannot be read or has no such analysis.
    """
    analyses, problems = read_oxide_table(path)
    chosen = [one for one in analyses if one.name.strip().lower() == sample.strip().lower()]
    if not chosen and len(analyses) == 1 and not problems:
        chosen = list(analyses)
    if not chosen:
        if problems:
            raise problems[0]
        names = ", ".join(one.name for one in analyses[:5])
        raise XrdmicaError(f"{path}: has no analysis called {sample!r}", fix=f"name the row like the sample; there are {names}")
    one = chosen[0]
    return {name: (value, one.sigma.get(name)) for name, value in one.percent.items()}


def _iron_as_ferric(oxides: Mapping[str, float]) -> dict[str, float]:
    out = {name: value for name, value in oxides.items() if name in _OXIDES}
    ferrous = oxides.get("FeO", 0.0) + oxides.get("FeOt", 0.0)
    out["Fe2O3"] = out.get("Fe2O3", 0.0) + oxides.get("Fe2O3t", 0.0) + _FERRIC * ferrous
    return out


def _phase_oxides(phase: Phase, exchanges: Mapping[str, float], formulas: Mapping[str, SiteFormula]) -> FloatArray:
    """Oxides of a phase [wt %], shape (o,)."""
    if phase.id in formulas:
        found = oxide_percent(formulas[phase.id])
    elif phase.formula.framework:
        found = _framework_oxides(phase)
    elif phase.stack is not None:
        share = phase.stack.fraction[1]
        one, two = (_phase_oxides(load_phase(kind), {}, formulas) for kind in (phase.stack.first, phase.stack.second))
        return np.asarray(share * one + (1 - share) * two)
    else:
        usual = {v.id: v.typical for v in phase.variables if v.kind == "exchange"}
        found = oxide_percent(formula_with(phase, {**usual, **exchanges}))
    ferric = _iron_as_ferric(found)
    return np.array([ferric.get(name, 0.0) for name in _OXIDES])


def _framework_oxides(phase: Phase) -> dict[str, float]:
    """Oxides of a phase without layers, from its formula; carbon, sulfur and water are not among them."""
    from xrdmica.chemistry.ions import mass_of
    from xrdmica.chemistry.oxides import OXIDE_OF

    total = phase.molar_mass
    out: dict[str, float] = {}
    for ion, n in phase.formula.framework.items():
        if ion in OXIDE_OF:
            name, cations, oxygens = OXIDE_OF[ion]
            weight = n * (mass_of(ion) + mass_of("O2-") * oxygens / cations)
            out[name] = out.get(name, 0.0) + 100 * weight / total
    return out


def _parts(phases: Sequence[str], formulas: Mapping[str, SiteFormula]) -> _Parts:
    columns, moves, owner, names = [], [], [], []
    for j, name in enumerate(phases):
        phase = load_phase(name)
        usual = _phase_oxides(phase, {}, formulas)
        columns.append(usual)
        if name in formulas or phase.formula.framework or phase.stack is not None:
            continue
        for variable in phase.variables:
            if variable.kind != "exchange" or variable.maximum <= variable.minimum:
                continue
            ends = [_phase_oxides(phase, {variable.id: value}, formulas) for value in (variable.minimum, variable.maximum)]
            # the range of the file as a uniform distribution: its standard deviation is the width over root 12
            moves.append((ends[1] - ends[0]) / np.sqrt(12))
            owner.append(j)
            names.append(f"{variable.into} for {variable.out} in {phase.name}")
    empty = np.zeros((len(_OXIDES), 0))
    oxides, changes = (np.array(rows).T if rows else empty for rows in (columns, moves))
    return _Parts(tuple(phases), oxides, changes, tuple(owner), tuple(names))


def check_chemistry(
    proportions: Proportions,
    analysis: Mapping[str, tuple[float, float | None]],
    *,
    companions: Sequence[str] = (),
    formulas: Mapping[str, SiteFormula] | None = None,
    joint: bool = False,
) -> ChemistryCheck:
    """Compare the oxides that the phases imply with an analysis.

    Parameters
    ----------
    proportions : Proportions
        Weights of the fitted phases with their standard errors.
    analysis : mapping
        Oxide -> (wt %, standard error or None).
    companions : sequence of str
        Phases seen but outside the 100 %, whose amounts are left free.
    formulas : mapping, optional
        Phase id -> known mineral formula (microprobe), in place of the library's composition and its range.
    joint : bool
        Whether to give weights that scans and analysis support together.

    Returns
    -------
    ChemistryCheck
        Both sides are normalised to the oxides compared, without water and loss on ignition, iron as Fe2O3. Misfits hold the
        errors of the analysis, of the proportions and of the compositions' ranges.

    Raises
    ------
    XrdmicaError
        If the analysis has fewer than four of the oxides compared.
    """
    rows = [row for row in proportions.phases if row.weight_percent is not None and row.weight_percent > 0]
    if not rows:
        return ChemistryCheck(agrees=None, text="no proportions to compare the analysis with")
    measured, sigma, known = _measured(analysis)
    free = [name for name in companions if name not in {row.phase for row in rows}]
    parts = _parts([*(row.phase for row in rows), *free], formulas or {})
    solution = _solve(parts, rows, len(free), measured, sigma, known)
    implied, spread = solution.implied, solution.spread
    total = np.sqrt(sigma**2 + spread**2)
    misfit = (measured - implied) / total
    oxides = tuple(
        OxideMisfit(
            oxide=name, measured=round(float(measured[i]), 2), measured_error=round(float(sigma[i]), 2),
            implied=round(float(implied[i]), 2), implied_low=round(float(max(implied[i] - 1.96 * spread[i], 0.0)), 2),
            implied_high=round(float(implied[i] + 1.96 * spread[i]), 2), misfit_sigma=round(float(misfit[i]), 2),
        )
        for i, name in enumerate(_OXIDES) if known[i]
    )  # fmt: skip
    worst = float(np.abs(misfit[known]).max())
    agrees = worst < _FAR and float(np.sqrt(np.mean(misfit[known] ** 2))) < 2.0
    remedies = () if agrees else _remedies(parts, rows, len(free), measured, sigma, known, misfit)
    return ChemistryCheck(
        agrees=agrees, text=_words(agrees, oxides, solution), oxides=oxides, reconcile=remedies,
        joint=_joint(rows, solution) if joint and agrees else (),
        notes=(
            *(("no joint estimate: scans and analysis have to agree first",) if joint and not agrees else ()),
            "both sides without water and loss on ignition, iron as Fe2O3, normalised to the oxides compared",
            f"compositions may vary over the ranges of the phase files{', but not of the formulas given' if formulas else ''}",
        ),
    )  # fmt: skip


def _measured(analysis: Mapping[str, tuple[float, float | None]]) -> tuple[FloatArray, FloatArray, NDArray[np.bool_]]:
    """Measured oxides normalised to 100, their errors, and which there are; shapes (o,)."""
    values = _iron_as_ferric({name: pair[0] for name, pair in analysis.items()})
    iron = any(name in analysis for name in ("FeO", "FeOt", "Fe2O3", "Fe2O3t"))
    known = np.array([name in values and (name != "Fe2O3" or iron) for name in _OXIDES])
    if known.sum() < 4:
        raise XrdmicaError("the analysis has fewer than four oxides that can be compared", fix=f"give {', '.join(_OXIDES)}")
    measured = np.array([values.get(name, 0.0) if there else 0.0 for name, there in zip(_OXIDES, known, strict=True)])
    given = [analysis.get(name, (0.0, None))[1] for name in _OXIDES]
    sigma = np.array([
        error if error else float(np.hypot(_RELATIVE * value, _LEAST)) for value, error in zip(measured, given, strict=True)
    ])  # fmt: skip
    scale = 100.0 / float(measured.sum())
    return measured * scale, np.hypot(sigma * scale, _MODEL), known


@dataclass(frozen=True)
class _Solution:
    implied: FloatArray  # (o,) as the scans have it, companions fitted
    spread: FloatArray  # (o,)
    joint_weights: FloatArray  # (j,)
    joint_errors: FloatArray  # (j,)
    settings: tuple[str, ...]  # composition variables that the joint fit moves by more than one deviation


def _solve(
    parts: _Parts, rows: Sequence[PhaseWeight], free: int, measured: FloatArray, sigma: FloatArray, known: NDArray[np.bool_]
) -> _Solution:
    """Companions and, for the joint estimate, weights and compositions by bounded least squares."""
    from scipy.optimize import lsq_linear

    closed = _closed(parts.oxides, known)
    # weights of the oxides compared: a hydroxyl-rich phase brings less of them than its own weight
    carried = np.maximum(np.where(known[:, None], parts.oxides, 0.0).sum(axis=0)[: len(rows)] / 100, 1e-3)
    dry = np.array([(row.weight_percent or 0.0) / 100 for row in rows])
    weights = dry * carried / float(dry @ carried)
    errors = np.array([max((row.standard_error or 3.0) / 100, 0.005) for row in rows]) * carried / float(dry @ carried)
    sheet = closed[:, : len(rows)]
    # companions are whatever the analysis asks for once the sheet silicates stand in their proportions
    extra = np.zeros(free)
    if free:
        base = sheet @ weights
        towards = (closed[:, len(rows) :] - base[:, None])[known] / sigma[known, None]
        extra = lsq_linear(towards, (measured - base)[known] / sigma[known], bounds=(0.0, 0.95)).x
    share = max(1.0 - float(extra.sum()), 0.05)
    implied = share * (sheet @ weights) + closed[:, len(rows) :] @ extra
    variance = ((share * sheet * errors) ** 2).sum(axis=1)
    amounts = np.concatenate([share * weights, extra])
    moved = parts.moves * amounts[list(parts.owner)] if parts.owner else np.zeros((len(_OXIDES), 0))
    variance = variance + (moved**2).sum(axis=1)
    # unknowns: weights of the sheet silicates, companions, compositions in standard deviations; priors from the scans
    unknown = np.hstack([share * sheet, closed[:, len(rows) :], moved])
    prior = np.concatenate([1.0 / errors, np.full(free, 1e-3), np.ones(moved.shape[1])])
    centre = np.concatenate([weights, extra, np.zeros(moved.shape[1])])
    system = np.vstack([unknown[known] / sigma[known, None], np.diag(prior)])
    target = np.concatenate([measured[known] / sigma[known], prior * centre])
    low = np.concatenate([np.zeros(len(rows) + free), np.full(moved.shape[1], -1.73)])
    high = np.concatenate([np.ones(len(rows) + free), np.full(moved.shape[1], 1.73)])
    found = lsq_linear(system, target, bounds=(low, high))
    covariance = np.linalg.pinv(system.T @ system)
    joint = found.x[: len(rows)] / carried
    steps = found.x[len(rows) + free :]
    settings = tuple(name for name, step in zip(parts.variables, steps, strict=True) if abs(step) > 1.0)
    total = max(float(joint.sum()), 1e-9)
    return _Solution(
        implied, np.sqrt(variance), joint / total, np.sqrt(np.diag(covariance))[: len(rows)] / carried / total, settings
    )


def _closed(oxides: FloatArray, known: NDArray[np.bool_]) -> FloatArray:
    """Oxides per unit weight of each phase on the water-free scale: the compared ones of every phase sum to 100."""
    kept = np.where(known[:, None], oxides, 0.0)
    total = kept.sum(axis=0)
    return np.asarray(np.divide(100 * kept, total, out=np.zeros_like(kept), where=total > 0))


def _words(agrees: bool, oxides: Sequence[OxideMisfit], solution: _Solution) -> str:
    if agrees:
        return "the analysis agrees with the phases and proportions within their errors"
    far = sorted(oxides, key=lambda o: -abs(o.misfit_sigma or 0.0))[:3]
    listed = ", ".join(
        f"{o.oxide} {o.measured:.1f} measured against {o.implied:.1f} implied ({o.misfit_sigma:+.1f} sigma)" for o in far
    )
    return f"the analysis does not agree with the phases and proportions: {listed}"


def _remedies(
    parts: _Parts, rows: Sequence[PhaseWeight], free: int, measured: FloatArray, sigma: FloatArray, known: NDArray[np.bool_],
    misfit: FloatArray,
) -> tuple[str, ...]:
    """Single changes that would take away at least half of the misfit: a composition, a missing phase."""
    from scipy.optimize import nnls

    before = float((misfit[known] ** 2).sum())
    found: list[tuple[float, str]] = []
    solution = _solve(parts, rows, free, measured, sigma, known)
    rest = measured - solution.implied
    total = np.sqrt(sigma**2 + 0.25 * solution.spread**2)
    for k, name in enumerate(parts.variables):
        direction = parts.moves[:, k]
        column = (direction / total)[known]
        size = float(column @ column)
        if size > 0:
            step = float(column @ (rest / total)[known]) / size
            left = float((((rest - step * direction) / total)[known] ** 2).sum())
            found.append((left, f"{'more' if step > 0 else 'less'} {name}"))
    for name in _MISSING:
        if name in parts.phases:
            continue
        column = _closed(_phase_oxides(load_phase(name), {}, {})[:, None], known)[:, 0] - solution.implied
        amount, _ = nnls((column / total)[known][:, None], (rest / total)[known])
        left = float((((rest - amount[0] * column) / total)[known] ** 2).sum())
        if amount[0] > 0.005:
            found.append((left, f"{100 * amount[0]:.0f} % of {load_phase(name).name}, which the proportions do not hold"))
    good = sorted(pair for pair in found if pair[0] < (1 - _ENOUGH) * before)
    nothing = "no single change explains the difference: check the analysis and what it was made on"
    return tuple(text for _, text in good[:4]) or (nothing,)


def _joint(rows: Sequence[PhaseWeight], solution: _Solution) -> tuple[PhaseWeight, ...]:
    out = []
    for row, weight, error in zip(rows, solution.joint_weights, solution.joint_errors, strict=True):
        low, high = max(weight - 1.96 * error, 0.0), min(weight + 1.96 * error, 1.0)
        out.append(row.model_copy(update={
            "weight_percent": round(100 * float(weight), 2), "low95": round(100 * float(low), 2),
            "high95": round(100 * float(high), 2), "standard_error": round(100 * float(error), 2),
        }))  # fmt: skip
    return tuple(out)
