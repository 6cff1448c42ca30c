"""The table of modes, as one text: a sentence above, a row of two lines a mode, the doubts below."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Sequence

from rich.text import Text

from qmeter.estimate.modes import Measurement, Mode
from qmeter.show import columns, look, words
from qmeter.show.document import Pooled
from qmeter.show.look import Look
from qmeter.show.words import Said

NOTHING = "no mode found"
_READABLE = 100
"""sentences run no wider than this"""


def render_measurement(measurement: Measurement, width: int, *, view: Look | None = None, a4_hz: float | None = None) -> Text:
    """One recording, at most `width` cells wide; `a4_hz` adds notes."""
    view = view or Look()
    above = [*_sentence(words.title(measurement), width, view, look.FIGURE), *_sentence(words.strikes(measurement), width, view)]
    if measurement.strikes and not measurement.modes:
        above += _sentence(NOTHING, width, view)
    return _page(above, measurement.modes, words.doubts(measurement, brief=True), width, view, a4_hz)


def render_pooled(pooled: Pooled, width: int, *, view: Look | None = None, a4_hz: float | None = None) -> Text:
    """Several recordings as strikes of one object."""
    view = view or Look()
    above = _sentence(words.pooled_title(pooled.files, pooled.mountings), width, view, look.FIGURE)
    return _page(above, pooled.modes, words.gather(pooled.doubts, pooled.modes, brief=True), width, view, a4_hz)


def _page(above: list[Text], modes: Sequence[Mode], doubts: Sequence[Said], width: int, view: Look, a4_hz: float | None) -> Text:
    lines = list(above)
    if modes:
        lines += [Text(""), *table(modes, width, view=view, a4_hz=a4_hz), Text("")]
    for beat in words.beats(modes, all_of_them=a4_hz is not None):
        lines += _hanging("~", look.LINE, "", beat, width, view)
    lines += sentences(doubts, width, view)
    while lines and not lines[-1].plain:
        lines.pop()
    return Text("\n", no_wrap=True, end="\n").join(lines)


def table(modes: Sequence[Mode], width: int, *, view: Look, a4_hz: float | None = None) -> list[Text]:
    """Head, rule, and two lines a mode, from the lowest mode up."""
    ordered = sorted(modes, key=lambda mode: mode.damped_frequency_hz)
    chosen = columns.choose(ordered, width, view, a4_hz)
    rows = [column.head for column in chosen]
    lines = [_join(head[0] for head in rows), _join(head[1] for head in rows)]
    lines.append(view.text("─" * max(len(line.plain) for line in lines), look.HEAD))
    for index in range(len(ordered)):
        lines += [_join(column.cells[index][line] for column in chosen) for line in (0, 1)]
    for line in lines:
        line.rstrip()
    return lines


def _join(cells: Iterable[Text]) -> Text:
    return Text(" " * columns.GAP).join(cells)


def _sentence(sentence: str, width: int, view: Look, style: str = "") -> list[Text]:
    wrapped = textwrap.wrap(view.say(sentence), min(width, _READABLE), break_on_hyphens=False)
    return [Text(line, style=style) for line in wrapped]


def sentences(doubts: Sequence[Said], width: int, view: Look) -> list[Text]:
    """The doubts, each marked, and hanging from its mark."""
    return [line for doubt in doubts for line in _hanging(look.DOUBT_MARK, look.DOUBT, doubt.about, doubt.says, width, view)]


def _hanging(mark: str, style: str, about: str, says: str, width: int, view: Look) -> list[Text]:
    """A mark, whom it is about in bold, and a sentence, wrapped and indented under itself."""
    about = view.say(about) + ": " if about else ""
    hang = len(mark) + 1
    wrapped = textwrap.wrap(about + view.say(says), max(min(width, _READABLE) - hang, 10), break_on_hyphens=False)
    lines = []
    for number, line in enumerate(wrapped):
        shown = mark if number == 0 else " " * len(mark)
        lines.append(Text.assemble((shown, style), " ", (line, look.UNCERTAINTY)))
    if lines and about:
        lines[0].stylize(look.FIGURE, hang, hang + len(about))
    return lines
