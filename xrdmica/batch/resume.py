"""What a result was made from, as one check sum in the result itself, and whether a result on disk is still good."""

from __future__ import annotations

import dataclasses
import hashlib
import json
import platform
from collections.abc import Callable, Mapping, Sequence
from importlib import metadata
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from xrdmica._version import __version__
from xrdmica.errors import XrdmicaError
from xrdmica.paths import data_folder
from xrdmica.results import SampleResult

__all__ = ["FINGERPRINT", "Circumstances", "circumstances", "digests_of", "fingerprint_of", "plain", "read_head"]

FINGERPRINT = "fingerprint"  # key among the settings of a result
_PACKAGES = ("numpy", "scipy", "lmfit", "pymatgen", "matplotlib", "xraydb", "pybaselines", "gemmi", "pydantic")
_CURVES = '\n  "curves": ['
_BLOCK = 1 << 16


@dataclasses.dataclass(frozen=True)
class Circumstances:
    """Everything that all results of a run depend on, apart from the samples.

    Attributes
    ----------
    version, python : str
        Of the program and the interpreter.
    packages : dict
        Package -> version, None when it is not installed.
    structures_sha256 : str or None
        Over all phase files.
    settings : dict
        Effective settings, plain values.
    files_sha256 : dict
        Setting -> check sum of the file it names, such as an instrument file.
    analysis : str
        Which function analyses.
    """

    version: str
    python: str
    packages: dict[str, str | None]
    structures_sha256: str | None
    settings: dict[str, Any]
    files_sha256: dict[str, str]
    analysis: str

    def digest(self) -> str:
        """One check sum over all of it."""
        # where a settings file stands does not matter, what is in it does
        settings = {k: self.files_sha256.get(k, v) for k, v in self.settings.items()}
        return _sha(json.dumps({**dataclasses.asdict(self), "settings": settings}, sort_keys=True))


def circumstances(settings: Any, analyse: Callable[..., Any]) -> Circumstances:
    """Take down what results depend on now.

    Parameters
    ----------
    settings : Settings
        Any dataclass with plain values.
    analyse : callable
        The function that analyses a sample.
    """
    values = {field.name: plain(getattr(settings, field.name)) for field in dataclasses.fields(settings)}
    files = {}
    for name, value in values.items():
        if isinstance(value, str) and Path(value).suffix and Path(value).is_file():
            files[name] = hashlib.sha256(Path(value).read_bytes()).hexdigest()
    name = f"{getattr(analyse, '__module__', '')}.{getattr(analyse, '__qualname__', type(analyse).__name__)}"
    return Circumstances(
        __version__, platform.python_version(), _package_versions(), structures_digest(), values, files, name
    )


def digests_of(files: Sequence[Path]) -> tuple[bytes | None, ...]:
    """SHA-256 of each file; None for one that cannot be read, whose sample will fail and say why."""
    out: list[bytes | None] = []
    for path in files:
        try:
            with path.open("rb") as stream:
                out.append(hashlib.file_digest(stream, "sha256").digest())
        except OSError:
            out.append(None)
    return tuple(out)


def fingerprint_of(entry: Any, digests: Sequence[bytes | None], common: str) -> str:
    """One check sum over a sample: contents and circumstances of its files, what the sheet says, and what all share.

    Parameters
    ----------
    entry : SampleEntry
        The sample.
    digests : sequence of bytes or None
        From `digests_of`.
    common : str
        From `Circumstances.digest`.
    """
    rows = [
        {
            **{f.name: plain(getattr(row, f.name)) for f in dataclasses.fields(row) if f.name not in ("path", "line")},
            "file": Path(row.path).name,
            "sha256": digest.hex() if digest else None,
        }
        for row, digest in zip(entry.rows, digests, strict=True)
    ]
    sample = {
        "name": entry.name, "details": plain(getattr(entry, "details", {})), "rows": rows, "common": common,
        "chemistry_sha256": _analysis_digest(entry),
    }  # fmt: skip
    return _sha(json.dumps(sample, sort_keys=True))


def _analysis_digest(entry: Any) -> str | None:
    """SHA-256 of the table of oxides that the sheet names; None without one."""
    named = str(getattr(entry, "details", {}).get("chemistry", "")).strip()
    if not named or not entry.rows:
        return None
    (digest,) = digests_of([Path(entry.rows[0].path).parent / named])
    return digest.hex() if digest else None


def read_head(path: Path) -> SampleResult | None:
    """A result file without its curves, which are most of it; None when it is missing, unfinished or of another version."""
    try:
        text = _head_text(path)
        return SampleResult.model_validate_json(text) if text is not None else None
    except (OSError, UnicodeDecodeError, ValidationError):
        return None


def _head_text(path: Path) -> str | None:
    """Everything before the curves, completed; looks also at the end, which is missing when the file was cut."""
    with path.open("rb") as stream:
        data = b""
        mark = _CURVES.encode()
        end = -1
        while end < 0:
            block = stream.read(_BLOCK)
            if not block:
                return None
            start = max(0, len(data) - len(mark))
            data += block
            end = data.find(mark, start)
        stream.seek(-3, 2)
        if stream.read() != b"\n}\n":
            return None
    return data[:end].decode("utf-8") + _CURVES + "]\n}\n"


def plain(value: Any) -> Any:
    """The value in terms of JSON, the same for equal values."""
    if value is None or isinstance(value, bool | int | float | str):
        return value
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, tuple | list):
        return [plain(item) for item in value]
    if hasattr(value, "model_dump"):
        return value.model_dump(mode="json")
    return value.name if isinstance(value, Path) else str(value)


def _sha(text: str) -> str:
    return hashlib.sha256(text.encode("utf-8", errors="surrogatepass")).hexdigest()


def _package_versions() -> dict[str, str | None]:
    versions: dict[str, str | None] = {}
    for name in _PACKAGES:
        try:
            versions[name] = metadata.version(name)
        except metadata.PackageNotFoundError:
            versions[name] = None
    return versions


def structures_digest() -> str | None:
    """One check sum over all phase files: results depend on them as much as on the program."""
    try:
        folder = data_folder("structures")
    except XrdmicaError:
        return None
    digest = hashlib.sha256()
    for path in sorted(folder.glob("*.toml")):
        digest.update(path.name.encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()
