"""Measure files one after another or in several processes, in the order given; one that fails stops no other."""

from __future__ import annotations

import multiprocessing
import multiprocessing.process
import os
import signal
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from contextlib import contextmanager
from dataclasses import dataclass, replace

from qmeter.cli.say import bug, say_where
from qmeter.errors import NothingRangError, QmeterError, UsageError
from qmeter.estimate.modes import Measurement, Settings
from qmeter.show.document import Failure

STDIN = "-"
_ONE_THREAD = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
"""one process a core, so one thread a process"""


@dataclass(frozen=True, slots=True)
class Job:
    """One file, and what is asked of it."""

    file: str
    from_s: float | None
    to_s: float | None
    settings: Settings
    mounting: str | None = None


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of a job: a measurement, or a failure with the exit status it asks for."""

    measurement: Measurement | None = None
    failure: Failure | None = None
    exit_status: int = 0


def measure_file(job: Job) -> Outcome:
    """Read and measure one file; every error but a wrong option becomes an outcome."""
    try:
        from qmeter.sound.files import Recording

        recording = Recording.load(job.file, from_s=job.from_s, to_s=job.to_s)
        from qmeter.estimate.measure import measure  # loads SciPy: not for a file that cannot be read

        measurement = measure(recording, job.settings)
    except UsageError:
        raise
    except QmeterError as error:
        return _failed(job, error.code, error.says, error.exit_status)
    except MemoryError:
        return _failed(job, "out-of-memory", f"{job.file} needs more memory than there is. Measure a part of it, with --from and --to.", 4)
    except Exception as error:  # noqa: BLE001  a bug met in one file must not cost the others
        say_where(error)
        return _failed(job, "bug", f"{job.file} could not be measured. {bug(error)}", 1)
    return Outcome(replace(measurement, file=job.file, mounting=job.mounting))


def _failed(job: Job, code: str, says: str, exit_status: int) -> Outcome:
    return Outcome(failure=Failure(job.file, code, says), exit_status=exit_status)


def exit_status(outcomes: Sequence[Outcome]) -> int:
    """0 when anything rang in any file; 3 when nothing did; 4 when a file could not be read; 1 after a bug."""
    worst = {outcome.exit_status for outcome in outcomes} - {0, NothingRangError.exit_status}
    if worst:
        return 1 if 1 in worst else max(worst)
    rang = any(outcome.measurement is not None and outcome.measurement.modes for outcome in outcomes)
    return 0 if rang else NothingRangError.exit_status


def run(jobs: Sequence[Job], processes: int, on_done: Callable[[], None] = lambda: None) -> Iterator[Outcome]:
    """Outcomes in the order of the jobs; `on_done` is called whenever one is finished, in whatever order (perhaps in a thread)."""
    elsewhere = [job for job in jobs if job.file != STDIN]
    if min(processes, len(elsewhere)) < 2:
        for job in jobs:
            outcome = measure_file(job)
            on_done()
            yield outcome
        return
    with _workers(min(processes, len(elsewhere))) as pool:
        futures: dict[int, Future[Outcome]] = {}
        for place, job in enumerate(jobs):
            if job.file != STDIN:  # standard input belongs to this process
                futures[place] = pool.submit(measure_file, job)
                futures[place].add_done_callback(lambda _: on_done())
        for place, job in enumerate(jobs):
            if place in futures:
                yield _result(job, futures.pop(place))
            else:
                outcome = measure_file(job)
                on_done()
                yield outcome


def _result(job: Job, future: Future[Outcome]) -> Outcome:
    try:
        return future.result()
    except BrokenProcessPool:
        says = f"{job.file} was lost: a working process ended before its time, most often for want of memory. Try again with --jobs 1."
        return _failed(job, "process-lost", says, 1)


@contextmanager
def _workers(count: int) -> Iterator[ProcessPoolExecutor]:
    """Fresh processes with one thread each; on any way out that is not the end of the work they are stopped at once."""
    before = {name: os.environ.get(name) for name in _ONE_THREAD}
    os.environ.update(dict.fromkeys(_ONE_THREAD, "1"))
    known = set(multiprocessing.active_children())
    pool = ProcessPoolExecutor(count, mp_context=multiprocessing.get_context("spawn"), initializer=_ignore_interrupt)
    try:
        yield pool
        pool.shutdown()
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        _stop(known)
        raise
    finally:
        for name, value in before.items():
            if value is None:
                os.environ.pop(name, None)
            else:
                os.environ[name] = value


def _stop(known: set[multiprocessing.process.BaseProcess]) -> None:
    """End every child process but the known ones; twice, since one may have been on its way while the first were ended."""
    for _ in range(2):
        mine = [process for process in multiprocessing.active_children() if process not in known]
        for process in mine:
            process.terminate()
        for process in mine:
            process.join(5)
            if process.is_alive():
                process.kill()
                process.join(5)


def _ignore_interrupt() -> None:
    """Ctrl-C reaches every process of the terminal; the first one alone answers it."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
