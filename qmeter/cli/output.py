"""What goes to standard output, and in which form."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path
from typing import Protocol

from rich.console import Console
from rich.text import Text

from qmeter import __version__
from qmeter.cli.batch import Outcome
from qmeter.cli.request import Request
from qmeter.errors import UsageError
from qmeter.estimate.modes import Measurement
from qmeter.show import document, picture, plain, spreadsheet, table
from qmeter.show.document import Pooled
from qmeter.show.look import Look, look_of

PICTURE_WIDTH = 100
"""characters, where no terminal says how wide it is"""


class Output(Protocol):
    """A form of output: told of each outcome as it comes, and of the end."""

    def show(self, outcome: Outcome) -> None:
        """One file is done."""

    def finish(self, outcomes: Sequence[Outcome], pooled: Pooled | None) -> None:
        """All files are done."""


def choose(request: Request) -> Output:
    """The form that was asked for: a document, a spreadsheet, or a page fit for where stdout leads."""
    picture_of = Picture(request.svg, request.pitch_hz) if request.svg is not None else None
    if request.json:
        return Document(picture_of)
    if request.csv:
        return Sheet(request.pitch_hz, picture_of)
    return Pages(request.plain, request.pitch_hz, picture_of)


def measured(outcomes: Sequence[Outcome]) -> list[Measurement]:
    """The measurements among the outcomes."""
    return [outcome.measurement for outcome in outcomes if outcome.measurement is not None]


def emit(text: str) -> None:
    """Text to standard output as it is; what its encoding lacks is escaped."""
    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    sys.stdout.write(text.encode(encoding, "backslashreplace").decode(encoding))
    sys.stdout.flush()


class Picture:
    """`--svg`: the table, drawn into a file."""

    def __init__(self, path: Path, a4_hz: float | None) -> None:
        self._path = path
        self._a4_hz = a4_hz

    def save(self, outcomes: Sequence[Outcome], pooled: Pooled | None) -> None:
        """Write the file; UsageError where it cannot be written."""
        console = Console()
        width = console.width if console.is_terminal else PICTURE_WIDTH
        pages: list[Text] = [table.render_measurement(measurement, width, a4_hz=self._a4_hz) for measurement in measured(outcomes)]
        if pooled is not None:
            pages.append(table.render_pooled(pooled, width, a4_hz=self._a4_hz))
        try:
            self._path.write_text(picture.render(pages, width), encoding="utf-8")
        except OSError as error:
            reason = error.strerror or type(error).__name__
            raise UsageError(f"The picture cannot be written to {self._path} ({reason}). Name a file in a folder that exists.") from error


class Document:
    """`--json`: one object, at the end."""

    def __init__(self, picture_of: Picture | None) -> None:
        self._picture = picture_of

    def show(self, outcome: Outcome) -> None:
        """Nothing yet: it is one object."""

    def finish(self, outcomes: Sequence[Outcome], pooled: Pooled | None) -> None:
        """Print it."""
        failures = [outcome.failure for outcome in outcomes if outcome.failure is not None]
        emit(document.as_json(document.document(__version__, measured(outcomes), failures, pooled)) + "\n")
        if self._picture is not None:
            self._picture.save(outcomes, pooled)


class Sheet:
    """`--csv`: one table, at the end."""

    def __init__(self, a4_hz: float | None, picture_of: Picture | None) -> None:
        self._a4_hz = a4_hz
        self._picture = picture_of

    def show(self, outcome: Outcome) -> None:
        """Nothing yet: the head comes first."""

    def finish(self, outcomes: Sequence[Outcome], pooled: Pooled | None) -> None:
        """Print it, its line ends untouched."""
        reconfigure = getattr(sys.stdout, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(newline="")
        emit(spreadsheet.render(measured(outcomes), pooled, a4_hz=self._a4_hz))
        if self._picture is not None:
            self._picture.save(outcomes, pooled)


class Pages:
    """The table on a terminal, plain lines elsewhere; each file as it comes."""

    def __init__(self, as_plain: bool, a4_hz: float | None, picture_of: Picture | None) -> None:
        self._console = Console(highlight=False)
        self._view: Look = look_of(self._console)
        self._plain = as_plain or not self._console.is_terminal
        self._a4_hz = a4_hz
        self._picture = picture_of
        self._shown = 0

    def show(self, outcome: Outcome) -> None:
        """Print one file's page."""
        if outcome.measurement is None:
            return
        if self._plain:
            self._print(plain.render_measurement(outcome.measurement, view=self._view, a4_hz=self._a4_hz))
        else:
            self._print(table.render_measurement(outcome.measurement, self._console.width, view=self._view, a4_hz=self._a4_hz))

    def finish(self, outcomes: Sequence[Outcome], pooled: Pooled | None) -> None:
        """Print the page of all files together, where it was asked for."""
        if pooled is not None and self._plain:
            self._print(plain.render_pooled(pooled, view=self._view, a4_hz=self._a4_hz))
        elif pooled is not None:
            self._print(table.render_pooled(pooled, self._console.width, view=self._view, a4_hz=self._a4_hz))
        if self._picture is not None:
            self._picture.save(outcomes, pooled)

    def _print(self, page: str | Text) -> None:
        gap = "\n" if self._shown else ""
        self._shown += 1
        if isinstance(page, str):
            emit(gap + page)
        else:
            emit(gap)
            self._console.print(page, no_wrap=True)
