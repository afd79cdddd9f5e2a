"""Memory stays flat however many samples a run has."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
HELPERS = ROOT / "tests" / "helpers"
COUNT = 2000


@pytest.mark.skipif(not Path("/proc/self/status").exists(), reason="reads resident memory where Linux tells it")
def test_two_thousand_samples(tmp_path: Path) -> None:
    """From sample 100 to the peak of the run less than 12 kB per sample: its names and one small row.

    A result with its curves is about ten times that, with as few points as it has here; nearly all of the test is disk.
    """
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(ROOT), str(HELPERS)])}
    command = [sys.executable, str(HELPERS / "fake_memory.py"), str(tmp_path), str(COUNT), "0"]
    done = subprocess.run(command, capture_output=True, text=True, env=environment, timeout=300, check=False)
    assert done.returncode == 0, done.stderr
    early, end, peak = map(float, done.stdout.split())
    print(f"\nresident {early:.0f} MB after 100 samples, {end:.0f} MB at the end, {peak:.0f} MB at most")
    assert (tmp_path / "all" / "summary.csv").read_text().count("\n") > COUNT * 0.9
    assert peak - early < COUNT * 12 / 1024
