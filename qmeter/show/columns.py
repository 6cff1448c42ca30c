"""The columns of the mode table: what each holds, and which of them fit a width.

A cell is two lines of text: the value above, what belongs to it (mostly its u95) below.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from rich.cells import cell_len
from rich.text import Text

from qmeter.estimate.modes import Mode
from qmeter.show import look, pitch, strip
from qmeter.show.look import Look
from qmeter.uncertainty import Figure, format_value_u95

GAP = 2
_STRIP_LEAST = 14
_STRIP_MOST = 44
_STRIP_BEFORE_EXTRAS = 24
"""the strip gets this much before any further column is let in"""
_LABEL = 7
"""cells after the strip, for its range in decibels"""


@dataclass(frozen=True, slots=True)
class Column:
    """Head and cells of one column, each line padded to `width` cells."""

    head: tuple[Text, Text]
    cells: tuple[tuple[Text, Text], ...]
    width: int


def choose(modes: Sequence[Mode], width: int, view: Look, a4_hz: float | None) -> tuple[Column, ...]:
    """The columns that fit `width` cells; frequency, Q, T60 and cycles are always there and the last to go."""
    chosen = [
        _figures(modes, "frequency", "Hz", lambda mode: mode.frequency_hz, view),
        _figures(modes, "Q", "", lambda mode: mode.q, view),
        _figures(modes, "T60", "s", lambda mode: mode.t60_s, view),
        _figures(modes, "cycles", "to e^-π", lambda mode: mode.cycles_to_e_minus_pi, view),
    ]
    if any(mode.doubts for mode in modes):
        chosen.insert(0, _marks(modes))
    while _taken(chosen) > width and len(chosen) > 1:
        chosen.pop()
    if a4_hz is not None:
        note = _notes(modes, a4_hz, view)
        if _taken([*chosen, note]) <= width:
            chosen.append(note)
    if all(mode.trace is None for mode in modes):
        return (*chosen, *_extras(modes, width - _taken(chosen) - GAP, view))
    left = width - _taken(chosen) - 2 * GAP - _LABEL
    if left < _STRIP_LEAST:
        return tuple(chosen)
    extras = _extras(modes, left - _STRIP_BEFORE_EXTRAS - GAP, view)
    left -= _taken(extras) + GAP if extras else 0
    return (*chosen, *extras, _strips(modes, min(left, _STRIP_MOST), view))


def _taken(columns: Sequence[Column]) -> int:
    return sum(column.width for column in columns) + GAP * max(len(columns) - 1, 0)


def _extras(modes: Sequence[Mode], room: int, view: Look) -> list[Column]:
    """Columns that are good to have, in the order of their worth, as far as there is room."""
    candidates = [_widths(modes, view)] if any(mode.half_power for mode in modes) else []
    candidates.append(_plain(modes, "level", "over noise", _level_cell, view))
    if any(mode.strikes > 1 for mode in modes):
        candidates.append(_plain(modes, "strikes", "u95 from", _origin_cell, view))
    kept: list[Column] = []
    for column in candidates:
        if _taken([*kept, column]) <= room:
            kept.append(column)
    return kept


def _column(head: tuple[str, str], cells: Sequence[tuple[Text, Text]], view: Look, *, left: bool = False) -> Column:
    heads = (view.text(head[0], look.HEAD), view.text(head[1], look.HEAD))
    width = max(cell_len(line.plain) for pair in [heads, *cells] for line in pair)

    def pad(line: Text) -> Text:
        room = " " * (width - cell_len(line.plain))
        return Text.assemble(line, room) if left else Text.assemble(room, line)

    return Column((pad(heads[0]), pad(heads[1])), tuple((pad(a), pad(b)) for a, b in cells), width)


def _plain(modes: Sequence[Mode], head: str, unit: str, cell: Callable[[Mode], tuple[str, str]], view: Look) -> Column:
    pairs = [cell(mode) for mode in modes]
    return _column((head, unit), [(view.text(above, look.UNCERTAINTY), view.text(below, look.NOTE)) for above, below in pairs], view)


def _marks(modes: Sequence[Mode]) -> Column:
    mark = Text(look.DOUBT_MARK, style=look.DOUBT)
    cells = tuple((mark if mode.doubts else Text(" "), Text(" ")) for mode in modes)
    return Column((Text(" "), Text(" ")), cells, 1)


def _figures(modes: Sequence[Mode], head: str, unit: str, of: Callable[[Mode], Figure], view: Look) -> Column:
    return _aligned([of(mode) for mode in modes], head, unit, view)


def _aligned(figures: Sequence[Figure | None], head: str, unit: str, view: Look, marks: Sequence[str] | None = None) -> Column:
    """Values with their u95 below, decimal points under one another; None leaves a dash."""
    shown = [("", "") if figure is None else format_value_u95(figure.value, figure.u95) for figure in figures]
    tail = max((_tail(text) for pair in shown for text in pair), default=0)
    cells = []
    for index, (value, u95) in enumerate(shown):
        if figures[index] is None:
            cells.append((Text("-" + " " * tail, style=look.NOTE), Text("")))
            continue
        mark = marks[index] if marks else ""
        above = Text.assemble((view.say(mark), look.DOUBT), (value, look.FIGURE), " " * (tail - _tail(value)))
        cells.append((above, Text.assemble((view.plus_minus + u95, look.UNCERTAINTY), " " * (tail - _tail(u95)))))
    return _column((head, unit), cells, view)


def _tail(number: str) -> int:
    """Characters from the decimal point on."""
    return len(number) - number.index(".") if "." in number else 0


def _widths(modes: Sequence[Mode], view: Look) -> Column:
    """Q by the second route; one that disagrees is marked by a sign, not by its colour alone."""
    routes = [mode.half_power for mode in modes]
    marks = ["≠" if route is not None and not route.agrees else "" for route in routes]
    return _aligned([None if route is None else route.q for route in routes], "Q from", "width", view, marks)


def _notes(modes: Sequence[Mode], a4_hz: float, view: Look) -> Column:
    cells = []
    for mode in modes:
        note = pitch.note_of(mode.frequency_hz, a4_hz)
        value, u95 = format_value_u95(note.cents.value, note.cents.u95)
        sign = "" if value.startswith("-") else "+"
        cells.append((view.text(note.name, look.FIGURE), Text(f"{sign}{value} {view.plus_minus}{u95}", style=look.UNCERTAINTY)))
    return _column(("note", "cents"), cells, view)


def _level_cell(mode: Mode) -> tuple[str, str]:
    over = f"{mode.snr_db:.0f} dB" if math.isfinite(mode.snr_db) else "no noise"
    return f"{mode.level_db:.1f} dB", over


def _origin_cell(mode: Mode) -> tuple[str, str]:
    """How many strikes, and the largest part of Q's uncertainty."""
    parts = mode.q.parts
    if parts is None:
        return str(mode.strikes), ""
    sizes = {name: getattr(parts, name) for name in ("fit", "model", "scatter", "mounting", "clock")}
    return str(mode.strikes), max(sizes, key=lambda name: sizes[name])


def _strips(modes: Sequence[Mode], width: int, view: Look) -> Column:
    traces = [mode.trace for mode in modes if mode.trace is not None]
    depth = strip.depth_db(traces)
    blank = (Text(" " * width), Text(" " * width))
    cells = []
    for mode in modes:
        drawn = blank if mode.trace is None else strip.draw(mode.trace, width=width, depth=depth, unicode=view.unicode)
        above, below = drawn[0], drawn[1].copy()
        if mode.trace is not None:
            below.rstrip()  # so that the time stands where the fit ends
            above = Text.assemble(above, " ", (f"{mode.decay_range_db:.0f} dB", look.NOTE))
            below = Text.assemble(below, " ", (_seconds(mode.trace.fit_to_s), look.NOTE))
        cells.append((above, below))
    head = (f"decay, {depth} dB high", f"off the fit, {strip.STEP_DB:g} dB a step")
    if len(head[1]) > width + _LABEL:
        head = (f"{depth} dB high", f"{strip.STEP_DB:g} dB a step")
    return _column(head, cells, view, left=True)


def _seconds(seconds: float) -> str:
    """A time to two or three digits, for reading a scale by."""
    if seconds < 0.1:
        return f"{1000 * seconds:.0f} ms"
    return f"{seconds:.2f} s" if seconds < 10 else f"{seconds:.1f} s"
