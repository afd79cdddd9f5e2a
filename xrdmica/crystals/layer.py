"""A layer as atoms on a line: what basal reflections see."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from xrdmica.chemistry.formula import SiteFormula
from xrdmica.crystals.library import Phase, Plane, State
from xrdmica.errors import StructureError

__all__ = ["Layer", "build_layer", "exchanges_of", "formula_with"]


@dataclass(frozen=True, eq=False)
class Layer:
    """Atoms of one layer and its share of the interlayer, projected on the stacking direction.

    Attributes
    ----------
    z : ndarray, shape (m,)
        Heights from the middle of the layer [angstrom].
    counts : ndarray, shape (m,)
        Atoms per formula unit at each height.
    ions : tuple of str, length m
        Ion at each height, such as ``"Mg2+"`` or ``"O2-"``.
    b_iso : ndarray, shape (m,)
        Isotropic displacement parameter B [angstrom^2].
    spacing : float
        Distance from this layer to the next one [angstrom].
    area : float
        In-plane area per formula unit [angstrom^2].
    molar_mass : float
        Dry mass of a formula unit (structural OH counts, interlayer water and organic molecules do not) [g/mol].
    """

    z: NDArray[np.float64]
    counts: NDArray[np.float64]
    ions: tuple[str, ...]
    b_iso: NDArray[np.float64]
    spacing: float
    area: float
    molar_mass: float

    @cached_property
    def centrosymmetric(self) -> bool:
        """Whether every atom has a twin at the opposite height."""
        content: dict[tuple[str, float], float] = {}
        for ion, height, count in zip(self.ions, self.z, self.counts, strict=True):
            for key, sign in (((ion, round(float(height), 5)), 1.0), ((ion, -round(float(height), 5)), -1.0)):
                content[key] = content.get(key, 0.0) + sign * float(count)
        return all(abs(rest) < 1e-9 for rest in content.values())


    @cached_property
    def symmetric_when_stacked(self) -> bool:
        """Whether a crystal of this layer alone has a mirror at the layer's middle: every atom has a twin, whole spacings off."""
        kinds = np.array(self.ions)
        here, twin = (
            (np.abs(gap - self.spacing * np.rint(gap / self.spacing)) < 1e-4) & (kinds[:, None] == kinds)
            for gap in (self.z[:, None] - self.z, self.z[:, None] + self.z)
        )
        return bool(np.allclose(twin @ self.counts, here @ self.counts, rtol=0, atol=1e-9))


def formula_with(phase: Phase, exchanges: Mapping[str, float]) -> SiteFormula:
    """The phase's formula with its exchange variables set.

    Parameters
    ----------
    phase : Phase
        A sheet silicate with a formula of its own.
    exchanges : mapping
        Variable id -> amount of the entering ion [atoms per formula unit].

    Raises
    ------
    StructureError
        If the phase has no such variable or the amount does not fit on the site.
    """
    formula = phase.site_formula
    for name, amount in exchanges.items():
        variable = phase.variable(name)
        if variable is None or variable.site is None or variable.out is None or variable.into is None:
            raise StructureError(f"{phase.id} has no exchange variable {name!r}", fix="see `xrdmica phases --show`")
        site = formula.site(variable.site)
        change = amount - site.get(variable.into, 0.0)
        if abs(change) < 1e-12:
            continue
        out, into = (variable.out, variable.into) if change >= 0 else (variable.into, variable.out)
        if site.get(out, 0.0) < abs(change) - 1e-9:
            raise StructureError(
                f"{phase.id}: {name} = {amount:g} does not fit on the {variable.site} site",
                fix=f"keep it between {variable.minimum:g} and {variable.maximum:g}",
            )
        formula = formula.exchanged(variable.site, out, into, abs(change))
        for other in variable.also:
            leaves, enters = (other.out, other.into) if change > 0 else (other.into, other.out)
            formula = formula.exchanged(other.site, leaves, enters, abs(change) * other.ratio)
    return formula


def exchanges_of(phase: Phase, formula: SiteFormula) -> dict[str, float]:
    """Values of a phase's exchange variables that come nearest to a known formula.

    Parameters
    ----------
    phase : Phase
    formula : SiteFormula
        Of the same layer type.

    Raises
    ------
    StructureError
        If the formula has another layer type than the phase.
    """
    if formula.layer_type != phase.layer_type:
        raise StructureError(
            f"{phase.id}: the formula given has a {formula.layer_type} layer, not {phase.layer_type}", fix="give one of it"
        )
    out = {}
    for variable in phase.variables:
        if variable.kind == "exchange" and variable.site is not None and variable.into is not None:
            amount = formula.site(variable.site).get(variable.into, 0.0)
            out[variable.id] = min(max(amount, variable.minimum), variable.maximum)
    return out


def build_layer(
    phase: Phase,
    state: State,
    *,
    exchanges: Mapping[str, float] | None = None,
    spacing: float | None = None,
    one_sided: bool = False,
) -> Layer:
    """Atoms on a line for a phase in one state.

    Parameters
    ----------
    phase : Phase
        A phase with a layer of its own.
    state : State
        One of its states that is not lost.
    exchanges : mapping, optional
        Exchange variables that differ from the file.
    spacing : float, optional
        Basal spacing [angstrom] in place of the state's usual one; the interlayer content moves with its middle.
    one_sided : bool
        Put all of the interlayer above the layer instead of half on either side: what interstratified stacks need,
        where the interlayer below belongs to another layer.

    Returns
    -------
    Layer

    Raises
    ------
    StructureError
        If the phase has no layer or the state gives no basal lines.
    """
    if phase.layer is None or state.lost or state.spacing is None:
        raise StructureError(f"{phase.id} has no basal lines in state {state.id!r}", fix="leave it out of this scan")
    formula = formula_with(phase, exchanges or {})
    distance = state.spacing if spacing is None else spacing
    rows: list[tuple[float, float, str, float]] = []
    for plane in (*phase.layer.planes, *state.planes):
        content = _content(plane, formula)
        for height, share in _heights(plane, distance, phase.layer.mirrored, one_sided):
            rows += [(height, share * count, ion, plane.b_iso) for ion, count in content.items() if count > 0]
    z, counts, ions, b_iso = zip(*rows, strict=True)
    return Layer(np.array(z), np.array(counts), ions, np.array(b_iso), distance, phase.area, formula.molar_mass)


def _content(plane: Plane, formula: SiteFormula) -> Mapping[str, float]:
    if plane.role is None:
        return plane.ions
    return {ion: plane.share * count for ion, count in formula.site(plane.role).items()}


def _heights(plane: Plane, spacing: float, mirrored: bool, one_sided: bool) -> list[tuple[float, float]]:
    """Heights of a plane with the factor on its listed counts."""
    if plane.z is not None:
        twin = mirrored and plane.z > 0
        return [(plane.z, 1.0), (-plane.z, 1.0)] if twin else [(plane.z, 1.0)]
    below = plane.below_middle or 0.0
    upper = spacing / 2 - below
    if not mirrored:
        return [(upper, 1.0)]
    # below the middle, and the mirror image: above the middle of the next interlayer down, or of this one when one-sided
    return [(upper, 1.0), (upper + 2 * below if one_sided else -upper, 1.0)]
