"""Runs that are killed, interrupted, or run out of disk: repeated, they end with the files of a run that was left alone."""

from __future__ import annotations

import errno
import os
import random
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

import fake_batch
import fake_quick

import xrdmica.batch.store
from xrdmica.batch.run import run_batch
from xrdmica.errors import XrdmicaError

pytestmark = pytest.mark.skipif(sys.platform == "win32", reason="sends signals")

ROOT = Path(__file__).resolve().parents[2]
HELPERS = ROOT / "tests" / "helpers"
COUNT = 40


def start(out: Path, workers: int, *options: str, count: int = COUNT) -> subprocess.Popen[bytes]:
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(ROOT), str(HELPERS)]), "PYTHONHASHSEED": "random"}
    command = [sys.executable, str(HELPERS / "fake_run.py"), str(out), str(count), str(workers), *options]
    # a process group of its own, so that a signal for the run does not reach the tests
    return subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, env=environment, start_new_session=True)


def complete(out: Path, workers: int, *options: str, count: int = COUNT) -> None:
    done = start(out, workers, *options, count=count)
    _, errors = done.communicate(timeout=120)
    assert done.returncode == 0, errors.decode()


def snapshot(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


@pytest.fixture(scope="module")
def reference(tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    out = tmp_path_factory.mktemp("reference") / "out"
    complete(out, 0, "report=1")
    files = snapshot(out)
    assert {"run.json", "failures.csv", "S0000.json", "S0000.png", "S0000.html", "shared.js", "index.html"} <= set(files)
    return files


@pytest.mark.parametrize("stale", [False, True])
@pytest.mark.parametrize("workers", [0, 2])
def test_killed_at_random_moments(tmp_path: Path, reference: dict[str, bytes], workers: int, stale: bool) -> None:
    """SIGKILL seven times on the way (28 times in all), in one process and with workers, also over results of other settings:
    while the program starts, while samples come and are written, and while tables and figures are made."""
    chance = random.Random(f"{workers} {stale}")
    out = tmp_path / "out"
    if stale:
        complete(out, 0, "report=1", "shade=3")
    finished = sum(b'"status": "done"' in line for line in reference["run.json"].splitlines())
    lines = killed = 0
    for moment in range(7):
        run = start(out, workers, "report=1")
        assert run.stdout is not None
        if moment in (5, 6):  # after the last sample
            lines, delay = finished, chance.uniform(0.0, 0.4)
        else:
            lines, delay = min(lines + chance.randrange(moment > 0, 9), finished - 2), chance.uniform(0.0, 0.02)
        for _ in range(lines):
            run.stdout.readline()
        time.sleep(delay if lines else chance.uniform(0.0, 0.5))
        run.kill()
        killed += run.wait() == -signal.SIGKILL  # a quick machine may have come to the end before
        run.communicate()
    assert killed >= 5
    complete(out, workers, "report=1")
    assert snapshot(out) == reference


def test_orphans_end_at_once(tmp_path: Path) -> None:
    """Workers of a killed run do not go on in the background."""
    run = start(tmp_path / "out", 2, count=2000)
    assert run.stdout is not None
    run.stdout.readline()
    listed = subprocess.run(["ps", "-o", "pid=", "--ppid", str(run.pid)], capture_output=True, text=True, check=False)
    workers = [int(pid) for pid in listed.stdout.split()]
    assert len(workers) == 2
    run.kill()
    run.communicate()
    end = time.monotonic() + 10
    while any(_lives(pid) for pid in workers) and time.monotonic() < end:
        time.sleep(0.02)
    assert not any(_lives(pid) for pid in workers)


def _lives(pid: int) -> bool:
    try:
        return Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()[0] not in "ZX"
    except OSError:
        return False


@pytest.mark.parametrize("workers", [0, 2])
def test_interrupted_by_the_user(tmp_path: Path, reference: dict[str, bytes], workers: int) -> None:
    """Ctrl-C reaches the whole process group; what is finished stays, the lock goes, a repeat does the rest."""
    out = tmp_path / "out"
    run = start(out, workers, "report=1")
    assert run.stdout is not None
    for _ in range(5):
        run.stdout.readline()
    os.killpg(run.pid, signal.SIGINT)
    _, errors = run.communicate(timeout=30)
    assert run.returncode == 130, errors.decode()
    assert len(list(out.glob("S*.json"))) >= 5
    assert not (out / ".xrdmica-lock").exists()
    assert not (out / "run.json").exists()
    complete(out, workers, "report=1")
    assert snapshot(out) == reference


def go(out: Path, count: int, **options):
    options = {"settings": fake_quick.QuickSettings(), "analyse": fake_quick.quick, "figures": False} | options
    return run_batch([fake_batch.FakeEntry(f"S{k}") for k in range(count)], out, **options)


def test_disk_full_for_a_while(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Writing stops at every possible place in turn; a repeat on a disk with room ends with the right files."""
    list(go(tmp_path / "right", 5))
    right = snapshot(tmp_path / "right")
    real = xrdmica.batch.store.os.fsync
    for room in range(40):
        out = tmp_path / f"out{room}"
        left = [room]

        def fsync(handle: int, left: list[int] = left) -> None:
            left[0] -= 1
            if left[0] < 0:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            real(handle)

        words = ""
        with monkeypatch.context() as patch:
            patch.setattr(xrdmica.batch.store.os, "fsync", fsync)
            try:
                list(go(out, 5))
            except XrdmicaError as error:
                words = str(error)
        full = bool(words)
        assert not full or ("No space left" in words and "what is finished is kept" in words)
        assert not list(out.glob(".*"))
        assert (out / "run.json").exists() != full
        list(go(out, 5))
        assert snapshot(out) == right
        if not full:
            break
    assert room > 8
    assert not full


@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() != 0, reason="mounting a small disk needs root")
def test_small_disk(tmp_path: Path) -> None:
    """A real file system without room, then with."""
    disk = tmp_path / "disk"
    disk.mkdir()
    if subprocess.run(["mount", "-t", "tmpfs", "-o", "size=200k", "tmpfs", str(disk)], capture_output=True).returncode:
        pytest.skip("no small disk can be mounted here")
    try:
        (disk / "ballast").write_bytes(bytes(100_000))
        with pytest.raises(XrdmicaError, match="No space left"):
            list(go(disk / "out", 12))
        kept = len(list((disk / "out").glob("*.json")))
        assert 0 < kept < 12
        assert subprocess.run(["mount", "-o", "remount,size=4m", str(disk)], capture_output=True).returncode == 0
        told = []
        list(go(disk / "out", 12, on_progress=told.append))
        assert sum(progress.kept for progress in told) == kept
        list(go(tmp_path / "right", 12))
        assert snapshot(disk / "out") == snapshot(tmp_path / "right")
    finally:
        subprocess.run(["umount", str(disk)], check=True)
