"""Write a scan as a table, and any text without leaving half a file behind."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from xrdmica.errors import XrdmicaError
from xrdmica.scans.scan import Scan

__all__ = ["write_atomically", "write_scan_csv"]


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
