"""A laboratory's calibration line for width indices: given as slope and intercept, or fitted to standards."""

from __future__ import annotations

import csv
import tomllib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from pydantic import BaseModel, ConfigDict, Field, ValidationError

from xrdmica.errors import XrdmicaError
from xrdmica.scans.read.decode import text_lines

__all__ = ["WidthCalibration", "fit_standards", "load_width_calibration"]

FloatArray = NDArray[np.float64]
_HELP = "give a TOML file with slope and intercept, or a CSV file of standards with columns measured and reference"


@dataclass(frozen=True)
class WidthCalibration:
    """reference = slope x measured + intercept, for widths in degrees two-theta (Cu).

    Attributes
    ----------
    slope, intercept : float
        Intercept in degrees.
    slope_error, intercept_error : float
        Standard errors.
    correlation : float
        Of the two.
    source : str
        Where the line comes from.
    """

    slope: float
    intercept: float
    slope_error: float = 0.0
    intercept_error: float = 0.0
    correlation: float = 0.0
    source: str = ""

    def apply(self, width: float, error: float) -> tuple[float, float]:
        """A measured width and its error on the reference scale [degree]."""
        value = self.slope * width + self.intercept
        shared = 2 * self.correlation * self.slope_error * self.intercept_error * width
        variance = (self.slope * error) ** 2 + (self.slope_error * width) ** 2 + self.intercept_error**2 + shared
        return value, float(np.sqrt(max(variance, 0.0)))


class _Line(BaseModel):
    model_config = ConfigDict(extra="forbid")

    slope: float = Field(gt=0.1, lt=10)
    intercept: float = Field(gt=-1, lt=1)
    slope_error: float = Field(default=0.0, ge=0)
    intercept_error: float = Field(default=0.0, ge=0)


def fit_standards(
    measured: FloatArray, reference: FloatArray, errors: FloatArray | None = None, source: str = ""
) -> WidthCalibration:
    """Weighted least-squares line through standards.

    Parameters
    ----------
    measured, reference : ndarray, shape (n,)
        Widths found here and certified widths [degree, Cu], three standards or more.
    errors : ndarray, shape (n,), optional
        Standard errors of `measured` [degree]; equal weights without.
    source : str

    Raises
    ------
    XrdmicaError
        If there are fewer than three standards, or all have the same width.
    """
    if measured.size < 3 or np.ptp(measured) < 1e-6:
        raise XrdmicaError(f"{source or 'standards'}: a line needs three standards of different width", fix=_HELP)
    design = np.column_stack([measured, np.ones_like(measured)])
    first = np.linalg.lstsq(design, reference, rcond=None)[0]
    # errors of the measured widths act on the reference scale through the slope
    weight = np.ones_like(measured) if errors is None else 1.0 / (np.abs(first[0]) * np.maximum(errors, 1e-6))
    scaled, target = design * weight[:, None], reference * weight
    line = np.linalg.lstsq(scaled, target, rcond=None)[0]
    rest = target - scaled @ line
    spread = float(rest @ rest) / (measured.size - 2)
    covariance = np.linalg.inv(scaled.T @ scaled) * (spread if errors is None else max(spread, 1.0))
    deviations = np.sqrt(np.diag(covariance))
    correlation = float(covariance[0, 1] / (deviations[0] * deviations[1])) if deviations.all() else 0.0
    return WidthCalibration(
        float(line[0]), float(line[1]), float(deviations[0]), float(deviations[1]), correlation,
        f"{measured.size} standards{f' of {source}' if source else ''}",
    )  # fmt: skip


def load_width_calibration(path: str | Path) -> WidthCalibration:
    """Read a calibration line: TOML with slope and intercept, or CSV of standards.

    Raises
    ------
    XrdmicaError
        With one sentence that names file and row or key.
    """
    path = Path(path)
    try:
        data = path.read_bytes()
    except OSError as error:
        raise XrdmicaError(f"{path}: cannot be read", why=error.strerror or str(error), fix="check the path") from error
    if path.suffix.lower() == ".toml":
        try:
            line = _Line.model_validate(tomllib.loads(data.decode("utf-8-sig")))
        except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
            raise XrdmicaError(f"{path}: not valid TOML", why=str(error), fix=_HELP) from error
        except ValidationError as error:
            first = error.errors()[0]
            raise XrdmicaError(f"{path}: {'.'.join(map(str, first['loc']))}: {first['msg']}", fix=_HELP) from error
        return WidthCalibration(line.slope, line.intercept, line.slope_error, line.intercept_error, 0.0, path.name)
    return _from_table(path, data)


def _from_table(path: Path, data: bytes) -> WidthCalibration:
    lines = [line for line in text_lines(data) if line.strip() and not line.lstrip().startswith("#")]
    mark = ";" if lines and lines[0].count(";") else "\t" if lines and lines[0].count("\t") else ","
    rows = list(csv.DictReader(lines, delimiter=mark))
    heads = {str(name).strip().lower(): name for name in (rows[0] if rows else {})}
    if not {"measured", "reference"} <= set(heads):
        raise XrdmicaError(f"{path}: no columns measured and reference", fix=_HELP)
    table = []
    for number, row in enumerate(rows, 2):
        cells = [str(row.get(heads[name]) or "") for name in ("measured", "reference", "error") if name in heads]
        try:
            table.append([float(cell.replace(",", ".") if mark != "," else cell) for cell in cells])
        except ValueError:
            raise XrdmicaError(f"{path}, row {number}: {', '.join(cells)!r} are no numbers", fix=_HELP) from None
    values = np.array(table)
    errors = values[:, 2] if values.shape[1] > 2 else None
    return fit_standards(values[:, 0], values[:, 1], errors, path.name)
