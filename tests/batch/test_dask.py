"""Many machines: the same files as with processes, whatever happens to the workers of the cluster."""

from __future__ import annotations

import os
import signal
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

import fake_batch
from fake_batch import FakeEntry
from fake_quick import QuickSettings, entries, quick

from xrdmica.batch.dask_executor import DaskExecutor
from xrdmica.batch.executors import WorkerError, executor_for
from xrdmica.batch.run import Progress, run_batch
from xrdmica.errors import XrdmicaError


@pytest.fixture(scope="module")
def cluster() -> Iterator[Any]:
    distributed = pytest.importorskip("distributed", reason="needs xrdmica[cluster]")
    with distributed.LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=":0", silence_logs=50) as made:
        yield made


def go(out: Path, names: list[FakeEntry], **options) -> list[Progress]:
    told: list[Progress] = []
    options = {"settings": QuickSettings(), "analyse": quick, "figures": False} | options
    for _ in run_batch(names, out, on_progress=told.append, **options):
        pass
    return told


def snapshot(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


def test_same_files_as_with_processes(tmp_path: Path, cluster: Any) -> None:
    go(tmp_path / "processes", entries(30), workers=2)
    go(tmp_path / "dask", entries(30), scheduler=cluster.scheduler_address)
    assert snapshot(tmp_path / "dask") == snapshot(tmp_path / "processes")


def test_scheduler_of_its_own(tmp_path: Path) -> None:
    pytest.importorskip("distributed", reason="needs xrdmica[cluster]")
    go(tmp_path / "processes", entries(8), workers=2, figures=True)
    go(tmp_path / "dask", entries(8), workers=2, scheduler="local", figures=True)
    assert snapshot(tmp_path / "dask") == snapshot(tmp_path / "processes")


@pytest.mark.skipif(sys.platform == "win32", reason="sends signals")
def test_a_worker_killed_in_mid_run(tmp_path: Path, cluster: Any) -> None:
    """Its samples go to others; the files are the same."""
    names = [FakeEntry(f"slow{k}") for k in range(16)]
    options = {"settings": fake_batch.FakeSettings(), "analyse": fake_batch.analyse}
    go(tmp_path / "quiet", names, workers=2, **options)
    killed: list[int] = []

    def kill() -> None:
        time.sleep(0.8)
        pid = next(iter(cluster.workers.values())).pid
        os.kill(pid, signal.SIGKILL)
        killed.append(pid)

    killer = threading.Thread(target=kill)
    killer.start()
    go(tmp_path / "dask", names, scheduler=cluster.scheduler_address, **options)
    killer.join()
    assert killed
    assert snapshot(tmp_path / "dask") == snapshot(tmp_path / "quiet")


def test_time_limit(tmp_path: Path, cluster: Any) -> None:
    names = [FakeEntry(n) for n in ("S1", "hang", "S2", "bug", "S3")]
    told = go(tmp_path, names, scheduler=cluster.scheduler_address, time_limit=2, analyse=fake_batch.analyse)
    assert {p.sample: p.reason for p in told if not p.finished} == {
        "hang": "it was stopped after the time limit of 2 s", "bug": "ZeroDivisionError: a mistake in the program",
    }  # fmt: skip


def test_an_item_that_takes_workers_down(cluster: Any) -> None:
    executor = DaskExecutor(cluster.scheduler_address)
    outcome = dict(executor.map_unordered(fake_batch.die_or_double, range(5)))
    assert {k: v for k, v in outcome.items() if k != 3} == {0: 0, 1: 2, 2: 4, 4: 8}
    assert isinstance(outcome[3], WorkerError)
    assert "took down several workers" in str(outcome[3])


def test_arrays_travel_not_paths(tmp_path: Path, cluster: Any) -> None:
    """Files that only this machine has are read here; a file that cannot be read fails its sample."""
    entry = FakeEntry("S1")
    here = os.getpid()

    class Here(FakeEntry):
        def load(self):
            assert os.getpid() == here
            if self.name == "unreadable":
                raise XrdmicaError("x.xy: cannot be read", fix="check it")
            return entry.load()

    told = go(tmp_path, [Here("S1"), Here("unreadable")], scheduler=cluster.scheduler_address)
    assert [(p.sample, p.reason) for p in sorted(told, key=lambda p: p.index)] == [
        ("S1", None), ("unreadable", "x.xy: cannot be read: check it"),
    ]  # fmt: skip


def test_the_instrument_travels_as_values(tmp_path: Path, cluster: Any) -> None:
    """Workers elsewhere cannot read the file of the instrument either."""
    from xrdmica.diffraction.optics import Instrument

    path = tmp_path / "ours.toml"
    path.write_text('name = "ours"\n')
    settings = QuickSettings(instrument=str(path))
    told = go(tmp_path / "out", [FakeEntry("S1")], scheduler=cluster.scheduler_address, settings=settings,
              analyse=fake_batch.name_of_instrument)  # fmt: skip
    assert told[0].reason == f"TypeError: {Instrument.__name__} ours"


def test_no_scheduler(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    pytest.importorskip("distributed", reason="needs xrdmica[cluster]")
    monkeypatch.setattr("xrdmica.batch.dask_executor._REACH", 1.0)
    with pytest.raises(XrdmicaError, match="cannot be reached"):
        go(tmp_path, [FakeEntry("S1")], scheduler="tcp://127.0.0.1:1")
    with pytest.raises(XrdmicaError, match="cannot be reached"):
        go(tmp_path, [FakeEntry("S1")], scheduler="no address at all")


def test_without_dask(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(XrdmicaError, match=r"Dask is not installed.*xrdmica\[cluster\]"):
        go(tmp_path, [FakeEntry("S1")], scheduler="local")
    assert isinstance(executor_for(1, 1, scheduler="local"), DaskExecutor)
