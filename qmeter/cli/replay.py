"""`qmeter replay`: measure saved recordings."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer
from typer.core import TyperCommand

from qmeter.cli import mountings
from qmeter.cli.request import Request, check
from qmeter.cli.say import say

if TYPE_CHECKING:
    from collections.abc import Iterator, Sequence

    from rich.progress import Progress

    from qmeter.cli.batch import Job, Outcome
    from qmeter.cli.output import Output
    from qmeter.estimate.modes import Measurement
    from qmeter.show.document import Pooled

HELP = """Measure saved recordings of struck objects.

\b
Examples:
  qmeter replay plate.wav                    every mode of a tapped plate
  qmeter replay bell.wav --pitch 440         with notes, cents and beats
  qmeter replay tap.wav --near 185           one mode only
  qmeter replay *.wav --jobs 4 --csv         a spreadsheet of many files
  qmeter replay --pool hung-*.wav foam-*.wav
      --mounting 'hung=hung-*' --mounting 'foam=foam-*'
                                             one object, held in two ways

FILE is a sound file (WAV, FLAC, AIFF, CAF, OGG, MP3, M4A); - is standard
input.

Each mode is one row: frequency, Q, T60, and the cycles in which its
amplitude falls by e^-pi, each with its uncertainty at 95 %. The strip at the
right is its decay: above, the level falling, bright where it was used; below,
how far it strays from the fitted line. A straight stroke can be believed; it
frays at its end, where the noise takes over. A question mark says that there is a doubt, spelled out below the table.

\b
Exit status: 0 something rang, 2 an option cannot be meant, 3 nothing rang,
  4 a file could not be read (the others are measured all the same),
  130 interrupted.
"""


class ReplayCommand(TyperCommand):
    """Writes the usage line without the braces that Typer puts round a repeated argument."""

    def collect_usage_pieces(self, ctx: Any) -> list[str]:
        return ["[OPTIONS]", "FILE..."]


def replay(
    files: Annotated[list[str], typer.Argument(metavar="FILE", hidden=True)],
    json: Annotated[bool, typer.Option("--json", help="print the result document")] = False,
    csv: Annotated[bool, typer.Option("--csv", help="print a spreadsheet, one row a mode")] = False,
    plain: Annotated[bool, typer.Option("--plain", help="print lines without drawing, as into a pipe")] = False,
    svg: Annotated[Path | None, typer.Option(metavar="FILE", help="save the table as a picture, too")] = None,
    channel: Annotated[int | None, typer.Option(metavar="N", help="which channel, from 1; else the one that decays best")] = None,
    from_: Annotated[float | None, typer.Option("--from", metavar="S", help="begin at this second")] = None,
    to: Annotated[float | None, typer.Option("--to", metavar="S", help="end at this second")] = None,
    near: Annotated[float | None, typer.Option(metavar="HZ", help="only the mode nearest to this frequency")] = None,
    most: Annotated[int | None, typer.Option(metavar="N", help="at most so many modes, the strongest")] = None,
    range_: Annotated[tuple[float, float] | None, typer.Option("--range", metavar="LOW HIGH", help="only between these, in Hz")] = None,
    pitch: Annotated[float | None, typer.Option(metavar="HZ", help="add notes and cents; A4 rings at this, say 440")] = None,
    pool: Annotated[bool, typer.Option("--pool", help="the files are strikes of one object: pool them")] = False,
    mounting: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME=FILES", help="files of one way of holding it, with * or commas; once for each way; implies --pool"),
    ] = None,
    jobs: Annotated[int, typer.Option(metavar="N", help="measure so many files at once")] = 1,
) -> None:
    held = tuple(mounting or ())
    given = (tuple(files), channel, from_, to, near, most, range_, pitch, pool or bool(held), held, jobs, json, csv, plain, svg)
    request = Request(*given)
    check(request)
    raise typer.Exit(run(request))


replay.__doc__ = HELP


def run(request: Request) -> int:
    """Measure, print, and return the exit status."""
    from qmeter.cli import batch, output
    from qmeter.estimate.modes import Settings

    held = mountings.assign(request.files, request.mountings)
    settings = Settings(channel=request.channel, near_hz=request.near_hz, most=request.most, range_hz=request.range_hz)
    jobs = [batch.Job(file, request.from_s, request.to_s, settings, name) for file, name in zip(request.files, held, strict=True)]
    out = output.choose(request)
    outcomes = []
    for outcome in _outcomes(jobs, request.processes, out):
        outcomes.append(outcome)
        _complain(outcome)
    out.finish(outcomes, _pooled(outcomes, settings.clock_ppm) if request.pool else None)
    return batch.exit_status(outcomes)


def _outcomes(jobs: Sequence[Job], processes: int, out: Output) -> Iterator[Outcome]:
    """The outcomes in order, each shown as it comes; a progress bar meanwhile when there is somebody to see it."""
    from qmeter.cli import batch

    if len(jobs) < 2 or not sys.stderr.isatty():
        for outcome in batch.run(jobs, processes):
            out.show(outcome)
            yield outcome
        return
    progress = _progress()
    task = progress.add_task("measuring", total=len(jobs))
    with progress:
        for outcome in batch.run(jobs, processes, lambda: progress.advance(task)):
            progress.stop()  # it clears itself away, so that tables and complaints stand in order above it
            out.show(outcome)
            yield outcome
            progress.start()


def _progress() -> Progress:
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    parts = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    return Progress(*parts, console=Console(stderr=True), transient=True)


def _complain(outcome: Outcome) -> None:
    if outcome.failure is not None:
        say(outcome.failure.says)
    elif outcome.measurement is not None and not outcome.measurement.modes:
        why = " ".join(dict.fromkeys(doubt.says for doubt in outcome.measurement.doubts))
        say(f"Nothing that can be trusted rang in {outcome.measurement.file}. {why}".rstrip())


def _pooled(outcomes: Sequence[Outcome], clock_ppm: float) -> Pooled | None:
    """Pooled over the files that were measured; None when there are none."""
    from qmeter.estimate.pool import pool_measurements
    from qmeter.show.document import Pooled

    measured = _each_once([outcome.measurement for outcome in outcomes if outcome.measurement is not None])
    if not measured:
        return None
    named = [measurement.mounting for measurement in measured]
    modes, doubts = pool_measurements(measured, [name for name in named if name is not None] or None, clock_ppm=clock_ppm)
    return Pooled(tuple(measurement.file or "" for measurement in measured), tuple(named), tuple(modes), tuple(doubts))


def _each_once(measurements: Sequence[Measurement]) -> list[Measurement]:
    """Without the files that hold the same bytes as an earlier one: a strike counted twice would make u95 smaller than it is."""
    first: dict[str, Measurement] = {}
    kept = []
    for measurement in measurements:
        same = first.setdefault(measurement.sha256, measurement) if measurement.sha256 is not None else measurement
        if same is measurement:
            kept.append(measurement)
        else:
            say(f"{measurement.file} holds the same bytes as {same.file}, so it is pooled once. Give every strike a recording of its own.")
    return kept
