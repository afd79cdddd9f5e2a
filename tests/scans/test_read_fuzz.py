"""Damaged files end in a Scan or in a sentence, never in anything else."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np

from tests.scans.scan_texts import angles, counts, table
from xrdmica.errors import XrdmicaError
from xrdmica.scans.read import read_scan
from xrdmica.scans.scan import Scan

CASES = 3000
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


def test_damaged_files(tmp_path: Path) -> None:
    rng = np.random.default_rng(20240229)
    originals = seeds()
    file = tmp_path / "scan.dat"
    read = 0
    sentences: list[str] = []
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        for number in range(CASES):
            file.write_bytes(mutated(originals[number % len(originals)], rng))
            try:
                scan = read_scan(file)
            except XrdmicaError as problem:
                sentences.append(str(problem))
                continue
            assert isinstance(scan, Scan)
            assert np.all(np.isfinite(scan.two_theta))
            assert np.all(np.diff(scan.two_theta) > 0)
            assert np.all(np.isfinite(scan.counts))
            assert np.all(scan.counts >= 0)
            assert np.all(scan.sigma > 0)
            read += 1
    assert read > 0.1 * CASES
    assert len(sentences) > 0.1 * CASES
    assert not any("\n" in sentence for sentence in sentences)
