"""Many files: in order, each with its own outcome, in one process or several, with nothing left behind."""

from __future__ import annotations

import multiprocessing
import os
import struct
import threading
import time
import wave
from pathlib import Path

import pytest

from qmeter.cli import batch
from qmeter.cli.batch import Job, Outcome
from qmeter.errors import UsageError
from qmeter.estimate.modes import Settings
from qmeter.show.document import Failure
from tests import fakes

RANG, QUIET = Outcome(fakes.bar()), Outcome(fakes.silence())
LOST = Outcome(failure=Failure("a.wav", "missing", "There is no a.wav."), exit_status=4)
BUG = Outcome(failure=Failure("a.wav", "bug", "A fault."), exit_status=1)
NOTHING = Outcome(failure=Failure("a.wav", "nothing-rang", "Nothing rang."), exit_status=3)


@pytest.mark.parametrize(
    ("outcomes", "status"),
    [
        ([RANG], 0),
        ([QUIET], 3),
        ([NOTHING], 3),
        ([QUIET, RANG], 0),
        ([NOTHING, RANG], 0),
        ([LOST, RANG], 4),
        ([LOST, QUIET], 4),
        ([NOTHING, LOST], 4),
        ([BUG, LOST, QUIET, RANG], 1),
        ([], 3),
    ],
)
def test_exit_status(outcomes: list[Outcome], status: int) -> None:
    """0 something rang, 3 nothing did, 4 wins over 3, and a bug is never hidden."""
    assert batch.exit_status(outcomes) == status


def missing(count: int, folder: Path) -> list[Job]:
    """Jobs that fail quickly, in a real worker, each in its own words."""
    return [Job(str(folder / f"{n}.wav"), None, None, Settings()) for n in range(count)]


@pytest.mark.parametrize("processes", [1, 2])
def test_order_is_kept(processes: int, tmp_path: Path) -> None:
    """Outcomes come in the order given, one a job, and each is told of once."""
    done: list[int] = []
    lock = threading.Lock()

    def on_done() -> None:
        with lock:
            done.append(1)

    jobs = missing(9, tmp_path)
    outcomes = list(batch.run(jobs, processes, on_done))
    assert [outcome.failure.file for outcome in outcomes if outcome.failure] == [job.file for job in jobs]
    assert {outcome.exit_status for outcome in outcomes} == {4}
    assert len(done) == 9


def test_nothing_is_left_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Neither a process nor a changed environment, at the end or when one stops half-way."""
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    monkeypatch.delenv("MKL_NUM_THREADS", raising=False)
    before = set(multiprocessing.active_children())
    list(batch.run(missing(4, tmp_path), 2))
    outcomes = batch.run(missing(50, tmp_path), 2)
    next(outcomes)
    outcomes.close()  # type: ignore[attr-defined]
    # the pool's own thread waits for the same processes: which of the two hears of an end first is open, so joining once proves nothing
    deadline = time.monotonic() + 20
    while set(multiprocessing.active_children()) - before and time.monotonic() < deadline:
        time.sleep(0.01)
    assert set(multiprocessing.active_children()) <= before
    assert os.environ["OMP_NUM_THREADS"] == "7"
    assert "MKL_NUM_THREADS" not in os.environ


def test_no_more_processes_than_files(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One file starts no process at all."""

    def refuse(count: int) -> None:
        raise AssertionError(f"{count} processes for one file")

    monkeypatch.setattr(batch, "_workers", refuse)
    assert len(list(batch.run(missing(1, tmp_path), 8))) == 1


def test_an_option_that_cannot_be_meant_is_no_failure_of_a_file(tmp_path: Path) -> None:
    """It stops everything: each file would say the same."""
    path = tmp_path / "a.wav"
    with wave.open(str(path), "wb") as out:
        out.setparams((1, 2, 8000, 100, "NONE", ""))
        out.writeframes(struct.pack("<100h", *range(100)))
    with pytest.raises(UsageError, match="must end after it starts"):
        list(batch.run([Job(str(path), 0.01, 0.005, Settings())], 1))
