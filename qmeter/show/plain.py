"""For pipes, files and screen readers: the same content without drawing, one line a mode, never wrapped."""

from __future__ import annotations

from collections.abc import Sequence

from rich.cells import cell_len

from qmeter.estimate.modes import Measurement, Mode
from qmeter.show import look, pitch, words
from qmeter.show.document import Pooled
from qmeter.show.look import Look
from qmeter.show.words import Said
from qmeter.uncertainty import Figure, format_figure, format_value_u95


def render_measurement(measurement: Measurement, *, view: Look | None = None, a4_hz: float | None = None) -> str:
    """One recording as lines of text."""
    view = view or Look()
    above = f"{words.title(measurement)}: {words.strikes(measurement)}"
    return _page(above, measurement.modes, words.doubts(measurement), view, a4_hz)


def render_pooled(pooled: Pooled, *, view: Look | None = None, a4_hz: float | None = None) -> str:
    """Several recordings as strikes of one object, as lines of text."""
    view = view or Look()
    above = words.pooled_title(pooled.files, pooled.mountings)
    return _page(above, pooled.modes, words.gather(pooled.doubts, pooled.modes), view, a4_hz)


def _page(above: str, modes: Sequence[Mode], doubts: Sequence[Said], view: Look, a4_hz: float | None) -> str:
    lines = [view.say(above)]
    lines += _table(modes, view, a4_hz) if modes else []
    lines += [view.say(beat) for beat in words.beats(modes, all_of_them=True)]
    for doubt in doubts:
        about = f"{doubt.about}: " if doubt.about else ""
        lines.append(f"{look.DOUBT_MARK} {view.say(about + doubt.says)}")
    return "\n".join(lines) + "\n"


def _table(modes: Sequence[Mode], view: Look, a4_hz: float | None) -> list[str]:
    head = [" ", "frequency", "Q", "T60", "cycles to e^-π", "level", "over noise", "decay", "strikes", "Q from width"]
    head += [] if a4_hz is None else ["note", "cents"]
    rows = [[view.say(name) for name in head]]
    for mode in sorted(modes, key=lambda mode: mode.damped_frequency_hz):
        route = mode.half_power
        width = "-" if route is None else _figure(route.q, "", view) + ("" if route.agrees else " disagrees")
        row = [
            look.DOUBT_MARK if mode.doubts else " ",
            _figure(mode.frequency_hz, "Hz", view),
            _figure(mode.q, "", view),
            _figure(mode.t60_s, "s", view),
            _figure(mode.cycles_to_e_minus_pi, "", view),
            f"{mode.level_db:.1f} dB",
            f"{mode.snr_db:.0f} dB",
            f"{mode.decay_range_db:.0f} dB",
            str(mode.strikes),
            width,
        ]
        if a4_hz is not None:
            note = pitch.note_of(mode.frequency_hz, a4_hz)
            row += [view.say(note.name), _figure(note.cents, "", view)]
        rows.append(row)
    widths = [max(map(cell_len, column)) for column in zip(*rows, strict=True)]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows]


def _figure(figure: Figure, unit: str, view: Look) -> str:
    """As `format_figure`; without an uncertainty it says so in place of one."""
    if figure.u95 is None:
        return f"{format_value_u95(figure.value, None)[0]} {view.plus_minus} ? {unit}".rstrip()
    return format_figure(figure, unit, view.plus_minus)
