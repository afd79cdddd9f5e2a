"""Write a scan as a table, and any text without leaving half a file behind."""

from __future__ import annotations

import json
import math
import os
import re
import tempfile
from pathlib import Path

from xrdmica.errors import XrdmicaError
from xrdmica.radiation import Radiation
from xrdmica.scans.scan import Scan

__all__ = ["JSON_FORMAT", "write_atomically", "write_scan_cif", "write_scan_csv", "write_scan_json"]

JSON_FORMAT = "xrdmica scan 1"


def write_atomically(path: str | Path, content: str | bytes) -> None:
    """Write a file through a temporary one beside it, so that a reader never sees half of it.

    Parameters
    ----------
    path : str or Path
        The file.
    content : str or bytes
        Text is written as UTF-8.

    Raises
    ------
    XrdmicaError
        If the folder is missing or cannot be written.
    """
    path = Path(path)
    data = content.encode("utf-8") if isinstance(content, str) else content
    temporary: str | None = None
    try:
        handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.", suffix=".part")
        with os.fdopen(handle, "wb") as stream:
            stream.write(data)
        mask = os.umask(0)
        os.umask(mask)
        Path(temporary).chmod(0o666 & ~mask)
        Path(temporary).replace(path)
    except OSError as problem:
        if temporary is not None:
            Path(temporary).unlink(missing_ok=True)
        raise XrdmicaError(
            f"{path}: cannot be written",
            why=problem.strerror or str(problem),
            fix="choose a folder that exists and can be written",
        ) from None


def write_scan_csv(scan: Scan, path: str | Path) -> None:
    """Write a scan as CSV with its standard errors; `read_scan` gives the same numbers and tube back.

    Parameters
    ----------
    scan : Scan
        The scan.
    path : str or Path
        The file; replaced when it exists.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    tube = scan.radiation
    key = "radiation" if tube.name[0].isalpha() else "single wavelength" if len(tube.wavelengths) == 1 else "wavelength"
    value = tube.name if key == "radiation" else repr(tube.wavelength)
    lines = [f"# {key}: {value}", f"# mount: {scan.mount}", f"# treatment: {scan.treatment.name}", "two_theta,counts,sigma"]
    rows = zip(scan.two_theta.tolist(), scan.counts.tolist(), scan.sigma.tolist(), strict=True)
    lines += [f"{angle!r},{counts!r},{sigma!r}" for angle, counts, sigma in rows]
    write_atomically(path, "\n".join(lines) + "\n")


def write_scan_json(scan: Scan, path: str | Path) -> None:
    """Write a scan as JSON with everything that is known of it; `read_scan` gives the same scan back.

    Parameters
    ----------
    scan : Scan
        The scan.
    path : str or Path
        The file; replaced when it exists.

    Raises
    ------
    XrdmicaError
        If it cannot be written.
    """
    tube = scan.radiation
    content = {
        "format": JSON_FORMAT,
        "source": scan.source,
        "radiation": {
            "name": tube.name, "wavelengths": tube.wavelengths, "weights": tube.weights, "origin": scan.radiation_origin,
        },
        "mount": scan.mount,
        "treatment": scan.treatment.name,
        "notes": scan.notes,
        "metadata": dict(scan.metadata),
        "two_theta": scan.two_theta.tolist(),
        "counts": scan.counts.tolist(),
        "sigma": scan.sigma.tolist(),
    }
    write_atomically(path, json.dumps(content, ensure_ascii=False, allow_nan=False) + "\n")


def write_scan_cif(scan: Scan, path: str | Path) -> None:
    """Write a scan as powder CIF; `read_scan` gives it back, standard errors to three digits.

    Parameters
    ----------
    scan : Scan
        The scan.
    path : str or Path
        The file; replaced when it exists.

    Raises
    ------
    XrdmicaError
        If it cannot be written.

    References
    ----------
    Tags of the powder dictionary of the International Union of Crystallography.
    """
    name = re.sub(r"[^A-Za-z0-9_\-]+", "_", Path(scan.source).stem or "scan")
    lines = [f"data_{name}", f"_pd_spec_description 'mount {scan.mount}, treatment {scan.treatment.name}'"]
    lines += [f"_diffrn_radiation_type '{_radiation_type(scan.radiation)}'", "", "loop_"]
    lines += ["_diffrn_radiation_wavelength_id", "_diffrn_radiation_wavelength", "_diffrn_radiation_wavelength_wt"]
    waves = zip(scan.radiation.wavelengths, scan.radiation.weights, strict=True)
    lines += [f"{number} {wave!r} {weight:.6f}" for number, (wave, weight) in enumerate(waves, 1)]
    lines += ["", f"_pd_meas_number_of_points {scan.two_theta.size}", ""]
    lines += ["loop_", "_pd_meas_2theta_scan", "_pd_meas_intensity_total"]
    rows = zip(scan.two_theta.tolist(), scan.counts.tolist(), scan.sigma.tolist(), strict=True)
    lines += [f"{angle!r} {_with_error(value, error)}" for angle, value, error in rows]
    write_atomically(path, "\n".join(lines) + "\n")


def _radiation_type(tube: Radiation) -> str:
    if not tube.name[0].isalpha():
        return "single wavelength"
    return f"{tube.name[:2]} K\\a~1~" if len(tube.wavelengths) == 1 else f"{tube.name} K\\a"


def _with_error(value: float, error: float) -> str:
    """A number with its standard error behind it in the way of CIF: ``1125.00(3354)``."""
    decimals = max(0, min(12, 2 - math.floor(math.log10(error))))
    return f"{value:.{decimals}f}({round(error * 10**decimals)})"
