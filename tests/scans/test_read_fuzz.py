"""Damaged files end in a Scan or in a sentence, never in anything else."""

from __future__ import annotations

import gzip
import json
import warnings
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.scans.scan_texts import angles, counts, table
from xrdmica.errors import XrdmicaError
from xrdmica.scans.read import nexus, read_scan
from xrdmica.scans.scan import Scan

CASES = 20_000  # over all readers, about half a minute
CASES_HDF5 = 24  # each is opened in a process of its own
SPECIAL = [
    b"\x00", b"\xff", b"\n", b"\r", b",", b";", b"\t", b" ", b"-", b"e", b"nan", b'"', b"'", b"1e400", b"\xef\xbb\xbf",
    b"loop_", b"_",
]  # fmt: skip


def seeds() -> list[bytes]:
    cif = "data_s\n_diffrn_radiation_wavelength 1.5406\n_pd_meas_2theta_range_min 3\n_pd_meas_2theta_range_max 8.95\n"
    cif += "_pd_meas_2theta_range_inc 0.05\nloop_\n_pd_meas_counts_total\n" + "\n".join(f"{c:.0f}" for c in counts())
    wide = "no;2theta;d;counts;date\n" + "\n".join(
        f"{i};{a};{0.77 / np.sin(np.radians(a / 2)):.4f};{c};01.02.2024"
        for i, (a, c) in enumerate(zip(angles(), counts(), strict=True))
    )
    return [
        table().encode(), table(",", header="Anode: Cu\nTime per step: 3\n2theta,cps\n").encode(),
        table(";", end="\r\n").encode(),
        table("\t").replace(".", ",").encode("utf-16"), cif.encode(), wide.encode(),
    ]  # fmt: skip


def more_seeds() -> list[bytes]:
    texts = [f"{c:.0f}" for c in counts()]
    listed = " ".join(texts)
    ends = "<start2Theta>3.0</start2Theta><end2Theta>8.95</end2Theta>"
    xml = f"<s target='Co'><axis unit='deg'>{ends}</axis><counts>{listed}</counts></s>"
    other = '<?xml version="1.0" encoding="UTF-8"?>' + xml.replace("deg", "rad").replace("counts>", "intensities>")
    blocks = "\n".join(" ".join(texts[i : i + 10]) for i in range(0, len(texts), 10))
    pairs = zip(angles(), counts(), strict=True)
    spacings = "d;counts\n" + "\n".join(f"{0.77 / np.sin(np.radians(a / 2)):.5f};{c}" for a, c in pairs)
    columns = "2theta;A;B;C\n" + "\n".join(f"{a};{c};{c};{c}" for a, c in zip(angles(), counts(), strict=True))
    japanese = "試料名: 粘土\n" + table("\t")
    own = json.dumps({
        "format": "xrdmica scan 1", "radiation": {"name": "Cu", "wavelengths": [1.5406], "weights": [1.0], "origin": "option"},
        "mount": "random", "treatment": "none", "notes": [], "metadata": {}, "two_theta": angles().tolist(),
        "counts": counts().tolist(), "sigma": np.sqrt(counts()).round(3).tolist(),
    })  # fmt: skip
    return [
        own.encode(), xml.encode(), other.encode(),
        ("3.0 0.05 8.95\n" + blocks).encode(), ("start=3\nstep=0.05\n" + "\n".join(texts)).encode(),
        spacings.encode(), columns.encode(), japanese.encode("cp932"), gzip.compress(table().encode()),
    ]  # fmt: skip


def mutated(data: bytes, rng: np.random.Generator) -> bytes:
    out = bytearray(data)
    for _ in range(int(rng.integers(1, 8))):
        at = int(rng.integers(0, max(len(out), 1)))
        kind = int(rng.integers(0, 5))
        if kind == 0 and out:
            out[min(at, len(out) - 1)] = int(rng.integers(0, 256))
        elif kind == 1:
            del out[at : at + int(rng.integers(1, 200))]
        elif kind == 2:
            out[at:at] = SPECIAL[int(rng.integers(0, len(SPECIAL)))]
        elif kind == 3:
            piece = out[at : at + int(rng.integers(1, 300))]
            where = int(rng.integers(0, len(out) + 1))
            out[where:where] = piece
        else:
            out = out[:at]
    return bytes(out)


def overwritten(data: bytes, rng: np.random.Generator) -> bytes:
    """A few bytes changed in place, since everything in HDF5 is found by its offset."""
    out = bytearray(data)
    for at in rng.integers(0, len(out), int(rng.integers(1, 4))):
        out[int(at)] = int(rng.integers(0, 256))
    return bytes(out)


def run(
    originals: list[bytes], cases: int, tmp_path: Path, damage: Callable[[bytes, np.random.Generator], bytes] = mutated
) -> tuple[int, list[str]]:
    """How many cases still give a scan, and the sentences of the others."""
    rng = np.random.default_rng(20240229)
    file = tmp_path / "scan.dat"
    read = 0
    sentences: list[str] = []
    options: list[dict[str, Any]] = [
        {}, {}, {}, {"axis": "d"}, {"axis": "q"}, {"axis": "radians"}, {"column": "2"}, {"column": "B"},
    ]  # fmt: skip
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for number in range(cases):
            data = damage(originals[number % len(originals)], rng)
            file.write_bytes(data)
            try:
                scan = read_scan(file, **options[(number // len(originals)) % len(options)])
            except XrdmicaError as problem:
                sentences.append(str(problem))
                continue
            except Exception:
                (tmp_path / "culprit").write_bytes(data)
                raise
            assert isinstance(scan, Scan)
            assert np.all(np.isfinite(scan.two_theta))
            assert np.all(np.diff(scan.two_theta) > 0)
            assert np.all(np.isfinite(scan.counts))
            assert np.all(scan.counts >= 0)
            assert np.all(scan.sigma > 0)
            read += 1
    assert not any("\n" in sentence for sentence in sentences)
    assert all(str(file) in sentence for sentence in sentences)
    return read, sentences


def test_damaged_files(tmp_path: Path) -> None:
    read, sentences = run([*seeds(), *more_seeds()], CASES, tmp_path)
    assert read > 0.05 * CASES
    assert len(sentences) > 0.1 * CASES


def test_damaged_hdf5(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    h5py = pytest.importorskip("h5py")
    monkeypatch.setattr(nexus, "PATIENCE", 8.0)
    originals = []
    for earliest in (True, False):
        with h5py.File(tmp_path / "seed.h5", "w", libver="earliest" if earliest else "latest") as file:
            group = file.create_group("entry/data")
            group.attrs["signal"], group.attrs["axes"] = "counts", "two_theta"
            group["two_theta"] = angles()
            group.create_dataset("counts", data=counts(), compression=None if earliest else "gzip")
            file["entry/wavelength"] = 1.5406
        originals.append((tmp_path / "seed.h5").read_bytes())
    read, sentences = run(originals, CASES_HDF5, tmp_path, overwritten)
    assert read + len(sentences) == CASES_HDF5
    assert read > 0
