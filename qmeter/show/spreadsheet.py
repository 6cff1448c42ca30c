"""Comma-separated values after RFC 4180: one row a mode a file, strongest first, the unit in the name of each column."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence

from qmeter.estimate.modes import Measurement, Mode
from qmeter.show import pitch
from qmeter.show.document import FIGURES, Pooled, finite

POOLED = "pooled"
"""stands in the file's place in the rows of `--pool`"""


def render(measurements: Sequence[Measurement], pooled: Pooled | None = None, *, a4_hz: float | None = None) -> str:
    """The whole sheet; an empty cell is a figure that could not be stated."""
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(_head(a4_hz))
    for measurement in measurements:
        writer.writerows(_rows(measurement.file or "", measurement.modes, a4_hz))
    if pooled is not None:
        writer.writerows(_rows(POOLED, pooled.modes, a4_hz))
    return out.getvalue()


def _head(a4_hz: float | None) -> list[str]:
    head = ["file", "mode"]
    for name in FIGURES:
        head += [name, f"{name}_u95"]
    head += ["level_db", "level_dbfs", "snr_db", "decay_range_db", "strikes"]
    head += ["half_power_q", "half_power_q_u95", "half_power_agrees"]
    head += [] if a4_hz is None else ["note", "cents", "cents_u95"]
    return [*head, "doubts"]


def _rows(file: str, modes: Sequence[Mode], a4_hz: float | None) -> Iterable[list[str]]:
    for number, mode in enumerate(modes, 1):
        row = [file, str(number)]
        for name in FIGURES:
            figure = getattr(mode, name)
            row += [_number(figure.value), _number(figure.u95)]
        row += [_number(value) for value in (mode.level_db, mode.level_dbfs, mode.snr_db, mode.decay_range_db)]
        row.append(str(mode.strikes))
        route = mode.half_power
        row += ["", "", ""] if route is None else [_number(route.q.value), _number(route.q.u95), "yes" if route.agrees else "no"]
        if a4_hz is not None:
            note = pitch.note_of(mode.frequency_hz, a4_hz)
            row += [note.name, _number(note.cents.value), _number(note.cents.u95)]
        yield [*row, " ".join(doubt.code for doubt in mode.doubts)]


def _number(value: float | None) -> str:
    shown = finite(value)
    return "" if shown is None else f"{shown:.10g}"
