"""Executors: every item comes back once, whatever happens to the process it was in."""

from __future__ import annotations

import os
import sys
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "helpers"))

import fake_batch

from xrdmica.batch.executors import InlineExecutor, ProcessesExecutor, WorkerError, available_cores, executor_for
from xrdmica.errors import FitError, XrdmicaError


@pytest.mark.parametrize("executor", [InlineExecutor(), ProcessesExecutor(2)])
def test_every_item_comes_back_once(executor) -> None:
    assert sorted(executor.map_unordered(fake_batch.double, range(9))) == [(k, 2 * k) for k in range(9)]
    assert list(executor.map_unordered(fake_batch.double, [])) == []


@pytest.mark.parametrize("executor", [InlineExecutor(), ProcessesExecutor(2)])
def test_an_exception_is_a_value(executor) -> None:
    ((item, error),) = executor.map_unordered(fake_batch.raise_odd, [4])
    assert item == 4
    assert isinstance(error, WorkerError)
    assert str(error) == "UnpickleableError: 4 and 4"
    assert "raise_odd" in error.trace


def test_library_errors_keep_their_kind() -> None:
    entry = fake_batch.FakeEntry("bad")
    ((_, error),) = ProcessesExecutor(1).map_unordered(fake_batch.load_and_analyse, [entry])
    assert isinstance(error, XrdmicaError)
    assert type(error) is FitError
    assert error.fix == "measure it again"


def test_a_dead_worker_spoils_only_its_own_item() -> None:
    outcome = dict(ProcessesExecutor(2).map_unordered(fake_batch.die_or_double, range(8)))
    assert isinstance(outcome[3], WorkerError)
    assert "died" in str(outcome[3])
    assert {k: v for k, v in outcome.items() if k != 3} == {k: 2 * k for k in range(8) if k != 3}


def test_an_item_is_tried_again_alone(tmp_path: Path) -> None:
    marker = str(tmp_path / "marker")
    assert list(ProcessesExecutor(1).map_unordered(fake_batch.die_once, [marker])) == [(marker, "second")]


def test_workers_use_one_thread_and_the_environment_stays(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OMP_NUM_THREADS", "5")
    monkeypatch.delenv("OPENBLAS_NUM_THREADS", raising=False)
    names = ["OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"]
    assert dict(ProcessesExecutor(1).map_unordered(fake_batch.thread_variable, names)) == dict.fromkeys(names, "1")
    assert os.environ["OMP_NUM_THREADS"] == "5"
    assert "OPENBLAS_NUM_THREADS" not in os.environ


@pytest.mark.skipif(sys.platform == "win32", reason="asks for processes by signal 0")
def test_giving_up_ends_the_workers() -> None:
    results = ProcessesExecutor(2).map_unordered(fake_batch.process_id, range(100))
    mine = {next(results)[1] for _ in range(10)}
    assert all(_runs(pid) for pid in mine)
    results.close()
    assert not any(_runs(pid) for pid in mine)


def _runs(pid: int | None) -> bool:
    try:
        os.kill(pid or 0, 0)
    except ProcessLookupError:
        return False
    return True


def test_choice_of_executor() -> None:
    assert isinstance(executor_for(None, 10), InlineExecutor)
    assert isinstance(executor_for(4, 1), InlineExecutor)
    several = executor_for(4, 3)
    assert isinstance(several, ProcessesExecutor)
    assert several.workers == 3
    assert available_cores() >= 1
    with pytest.raises(XrdmicaError, match="at least 1"):
        ProcessesExecutor(0)
