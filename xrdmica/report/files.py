"""Writing results: one JSON per sample and CSV tables, each file whole or not at all."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import math
import re
import unicodedata
from collections.abc import Iterable, Sequence
from pathlib import Path

from pydantic import ValidationError

from xrdmica.errors import XrdmicaError
from xrdmica.report.rows import (
    EVIDENCE_HEADER,
    FAILURES_HEADER,
    GROUPS_HEADER,
    PROPORTIONS_HEADER,
    SUMMARY_HEADER,
    Cell,
    all_notes,
    evidence_rows,
    failures_rows,
    groups_rows,
    proportions_rows,
    summary_rows,
)
from xrdmica.results import Curve, SampleResult
from xrdmica.scans.write import write_atomically

__all__ = [
    "EVIDENCE_HEADER", "FAILURES_HEADER", "GROUPS_HEADER", "PROPORTIONS_HEADER", "SUMMARY_HEADER", "all_notes",
    "evidence_rows", "failures_rows", "file_stem", "groups_rows", "plan_stems", "proportions_rows", "read_result",
    "result_text", "sample_of_file", "summary_rows", "table_cell", "write_bytes", "write_csv", "write_result", "write_text",
]  # fmt: skip

_RESERVED = frozenset({"run", "index"})  # run.json is the record of the batch, index the front page
_DEVICES = frozenset({"con", "prn", "aux", "nul", *(f"{port}{n}" for port in ("com", "lpt") for n in range(1, 10))})
_STEM_BYTES = 120  # file systems allow 255 bytes for a name; suffixes and the temporary file need some of them
_NUMBER = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")


# ---------------------------------------------------------------- whole files


def write_bytes(path: Path, content: bytes) -> Path:
    """Write a file whole or not at all: a temporary file beside the target takes its place when it is complete.

    Parameters
    ----------
    path : pathlib.Path
        Target; its folder is made when it does not exist.
    content : bytes
        What to write.

    Returns
    -------
    pathlib.Path
        The target.

    Raises
    ------
    XrdmicaError
        If the folder cannot be made or written, or the disk is full.
    """
    path = Path(path)
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise XrdmicaError(
            f"{path}: cannot be written", why=error.strerror or str(error),
            fix="choose a folder you may write to, on a disk with space",
        ) from error  # fmt: skip
    write_atomically(path, content)
    return path


def write_text(path: Path, text: str) -> Path:
    """Write UTF-8 text whole or not at all; see `write_bytes`."""
    return write_bytes(path, text.encode("utf-8"))


# ---------------------------------------------------------------- names


def file_stem(sample: str) -> str:
    """Turn a sample name into a file name without suffix that every common file system accepts.

    Letters of any script stay. Path separators, characters that some systems refuse, control and invisible characters
    become ``_``; leading dots go, so that no hidden file and no parent folder results; long names are shortened and
    end in a check sum.
    """
    text = unicodedata.normalize("NFC", sample)
    text = "".join("_" if c in '/\\:*?"<>|' or (unicodedata.category(c)[0] in "CZ" and c != " ") else c for c in text)
    text = re.sub(r"^[.\s]+", lambda m: "_" * len(m.group()), text).rstrip(". ")
    if len(text.encode()) > _STEM_BYTES:
        kept = text.encode()[: _STEM_BYTES - 9].decode(errors="ignore").rstrip(". ")
        text = f"{kept}-{_check_sum(sample)}"
    if not text:
        return f"sample-{_check_sum(sample)}"
    if text.split(".")[0].casefold() in _DEVICES:
        return f"_{text}"
    return f"{text}_" if text.casefold() in _RESERVED else text


def _check_sum(sample: str) -> str:
    return hashlib.sha256(sample.encode(errors="surrogatepass")).hexdigest()[:8]


def sample_of_file(path: Path) -> str | None:
    """Name of the sample whose result a file holds, read from its head only; None when it holds no result."""
    try:
        with path.open(encoding="utf-8") as stream:
            head = stream.read(65536)
    except (OSError, UnicodeDecodeError):
        return None
    start = re.match(r'\s*\{\s*"sample"\s*:\s*', head)
    if start is None:
        return None
    try:
        name, _ = json.JSONDecoder().raw_decode(head, start.end())
    except json.JSONDecodeError:
        return None
    return name if isinstance(name, str) else None


def plan_stems(samples: Sequence[str], folder: Path | None = None) -> dict[str, str]:
    """Give every sample a file name of its own, also on file systems that ignore case.

    Parameters
    ----------
    samples : sequence of str
        Sample names.
    folder : pathlib.Path, optional
        Folder with earlier results: a file that belongs to another sample keeps its name.

    Returns
    -------
    dict
        Sample name -> file name without suffix.
    """
    plain = {sample: file_stem(sample) for sample in samples}
    rivals: dict[str, list[str]] = {}
    for sample, stem in plain.items():
        rivals.setdefault(stem.casefold(), []).append(sample)
    files = folder.glob("*.json") if folder is not None and folder.is_dir() else ()
    # an empty file is what a power cut may leave: it belongs to nobody
    taken = {path.stem.casefold(): path for path in files if path.stat().st_size}
    out = {}
    for sample, stem in plain.items():
        key = stem.casefold()
        foreign = key in taken and sample_of_file(taken[key]) != sample
        # among rivals the one whose name is the file name as it stands has the first right to it
        unchanged = [rival for rival in rivals[key] if plain[rival] == rival]
        free = len(rivals[key]) == 1 or unchanged == [sample]
        out[sample] = stem if free and not foreign else f"{stem}-{_check_sum(sample)}"
    return out


# ---------------------------------------------------------------- results


def _digits(values: Iterable[float], n: int) -> tuple[float, ...]:
    return tuple(float(f"{v:.{n}g}") for v in values)


def _shorter(curve: Curve) -> Curve:
    """The curve with as many digits as the measurement carries: seven for intensities, eight for angles."""
    return curve.model_copy(
        update={
            "two_theta": _digits(curve.two_theta, 8),
            "observed": _digits(curve.observed, 7),
            "calculated": _digits(curve.calculated, 6),
            "background": _digits(curve.background, 6),
            "contributions": {phase: _digits(values, 5) for phase, values in curve.contributions.items()},
        }
    )


def result_text(result: SampleResult) -> str:
    """The result as JSON: indented for readers, with one line per curve because curves are long.

    Parameters
    ----------
    result : SampleResult
        Finished sample.

    Returns
    -------
    str
        JSON text that `read_result` reads back.

    Raises
    ------
    XrdmicaError
        If the result holds a number that JSON cannot hold (not finite) where one is needed.
    """
    head = result.model_dump_json(indent=2, exclude={"curves"})
    curves = ",\n".join("    " + _shorter(curve).model_dump_json() for curve in result.curves)
    text = head.removesuffix("\n}") + (f',\n  "curves": [\n{curves}\n  ]' if curves else ',\n  "curves": []') + "\n}\n"
    try:
        SampleResult.model_validate_json(text)
    except ValidationError as error:
        where = ".".join(str(part) for part in error.errors()[0]["loc"])
        raise XrdmicaError(
            f"sample {result.sample}: the result holds a number that is not finite at {where}",
            fix="look at the scan there; values that are not known are left out",
        ) from error
    return text


def write_result(result: SampleResult, folder: Path, *, stem: str | None = None) -> Path:
    """Write ``<sample>.json``.

    Parameters
    ----------
    result : SampleResult
        Finished sample.
    folder : pathlib.Path
        Where to; made when it does not exist.
    stem : str, optional
        File name without suffix; by default made from the sample name so that no result of another sample is lost.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    XrdmicaError
        If the file cannot be written.
    """
    folder = Path(folder)
    name = stem if stem is not None else plan_stems([result.sample], folder)[result.sample]
    return write_text(folder / f"{name}.json", result_text(result))


def read_result(path: Path) -> SampleResult:
    """Read a ``<sample>.json`` back.

    Raises
    ------
    XrdmicaError
        If the file cannot be read or is no result of this program; the message names the key.
    """
    path = Path(path)
    again = "give a <sample>.json that `xrdmica batch` or `xrdmica estimate --json` wrote, or make it again"
    try:
        text = path.read_text(encoding="utf-8-sig")
    except OSError as error:
        raise XrdmicaError(f"{path}: cannot be read", why=error.strerror or str(error), fix="check the path") from error
    except UnicodeDecodeError as error:
        raise XrdmicaError(f"{path}: is not UTF-8 text", fix=again) from error
    try:
        return SampleResult.model_validate_json(text)
    except ValidationError as error:
        first = error.errors()[0]
        key = ".".join(str(part) for part in first["loc"])
        where = f"{path}: {key}" if key else f"{path}"
        raise XrdmicaError(f"{where}: not a result file of this version", why=first["msg"], fix=again) from error


# ---------------------------------------------------------------- tables


def table_cell(value: Cell) -> str:
    """One cell: unknown stays empty, text cannot start a spreadsheet formula."""
    if value is None:
        return ""
    if isinstance(value, float):
        return _number(value)
    text = str(value)
    if text[:1] in ("=", "+", "-", "@", "\t", "\r", "\n") and not _NUMBER.fullmatch(text.strip()):
        text = "'" + text
    # csv quotes line feeds; a lone carriage return it does not quote, and readers take it for the end of the row
    return text.replace("\r\n", "\n").replace("\r", "\n")


def _number(value: float) -> str:
    """Two decimals from 1 on (weight percent add up to 100), three digits below; no exponent; not finite is unknown."""
    if not math.isfinite(value):
        return ""
    decimals = 2 if abs(value) >= 1 or value == 0 else min(12, 2 - math.floor(math.log10(abs(value))))
    text = f"{value:.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def write_csv(path: Path, header: Sequence[str], rows: Iterable[Sequence[Cell]]) -> Path:
    """Write a comma-separated table in UTF-8, whole or not at all.

    Parameters
    ----------
    path : pathlib.Path
        Target.
    header : sequence of str
        Column names.
    rows : iterable of sequences
        Text, numbers, or None for what is not known (an empty cell). Text that a spreadsheet would take for a formula
        gets an apostrophe in front.

    Returns
    -------
    pathlib.Path
        The target.

    Raises
    ------
    XrdmicaError
        If the file cannot be written.
    """
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer, lineterminator="\n")
    writer.writerow([table_cell(name) for name in header])
    for row in rows:
        if len(row) != len(header):
            raise ValueError(f"a row of {len(row)} cells under {len(header)} columns")
        writer.writerow([table_cell(value) for value in row])
    return write_bytes(path, buffer.getvalue().encode("utf-8", errors="replace"))
