"""From what the first column of a file holds (spacings, q, theta, radians) to two-theta in degrees."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from xrdmica.errors import ScanError
from xrdmica.radiation import Radiation
from xrdmica.scans.read.raw import AXES, Axis, RawScan

__all__ = ["to_two_theta"]

_WORDS: dict[Axis, str] = {
    "two_theta": "two-theta in degrees", "theta": "theta, not two-theta", "radians": "angles in radians",
    "d": "d-spacings, not two-theta", "q": "values of q, not two-theta",
}  # fmt: skip


def to_two_theta(raw: RawScan, source: str, axis: Axis | None, radiation: Radiation | None) -> RawScan:
    """Bring a scan to two-theta in degrees.

    Parameters
    ----------
    raw : RawScan
        From a reader; `raw.axis` is what the file says its column is, None when it says nothing.
    source : str
        For messages.
    axis : str or None
        What the user says the column is; None for two-theta in degrees.
    radiation : Radiation or None
        Tube given by the user; else that of the header, else Cu. Spacings and q belong to its mean wavelength.

    Raises
    ------
    ScanError
        If the file says that the column is something else than the user, or values cannot be reached.
    """
    if axis is not None and axis not in AXES:
        raise ScanError(f"{source}: axis {axis!r} is not known", fix=f"choose one of {', '.join(AXES)}")
    asked: Axis = axis or "two_theta"
    if raw.axis is not None and raw.axis != asked:
        name = f"column {raw.axis_name!r}" if raw.axis_name else "the scan"
        where = f"{source}, line {raw.axis_line}" if raw.axis_line else source
        fix = f"add the option --axis {raw.axis} to have them converted"
        if raw.axis == "two_theta":
            fix = "leave out the option --axis"
        raise ScanError(f"{where}: {name} holds {_WORDS[raw.axis]}", fix=fix)
    values = raw.two_theta
    if asked == "two_theta":
        return raw
    if asked in ("theta", "radians"):
        return replace(raw, two_theta=2 * values if asked == "theta" else np.degrees(values)).noted(
            "two-theta is twice the theta of the file" if asked == "theta" else "angles were converted from radians to degrees"
        )
    bad = ~(np.isfinite(values) & (values > 0))
    if bad.any():
        raise ScanError(
            f"{source}, {raw.place(int(np.argmax(bad)))}: {values[int(np.argmax(bad))]:g} is no {asked} value",
            fix="remove the points that were not measured",
        )
    tube = radiation or raw.radiation or Radiation.tube("Cu")
    spacing = values if asked == "d" else 2 * np.pi / (values * raw.axis_scale)
    sine = tube.mean_wavelength / (2 * spacing)
    far = sine >= 1
    if far.any():
        at = int(np.argmax(far))
        raise ScanError(
            f"{source}, {raw.place(at)}: {asked} = {values[at]:g} cannot be reached with {tube.name}",
            fix="say the right radiation with --radiation and the right axis with --axis",
        )
    return replace(raw, two_theta=2 * np.degrees(np.arcsin(sine))).noted(
        f"two-theta was computed from {asked} with {tube.mean_wavelength:.5f} angstrom"
    )
