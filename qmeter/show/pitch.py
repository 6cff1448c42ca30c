"""Notes and beats: equal temperament, twelve semitones of 100 cents to the octave, A4 at a frequency of one's choice."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

from qmeter.estimate.modes import Mode
from qmeter.uncertainty import Figure

NAMES = ("C", "C♯", "D", "D♯", "E", "F", "F♯", "G", "G♯", "A", "A♯", "B")
_A4 = 69
"""number of A4 when C-1 is 0"""
FASTEST_BEAT_HZ = 30.0
"""Above this two tones are heard as roughness, not as beats (common practice)."""
CLOSE_WIDTHS = 4.0
"""A close pair lies within this many half-power widths of the wider mode."""


@dataclass(frozen=True, slots=True)
class Note:
    """The nearest note and how far above it the mode rings."""

    name: str
    cents: Figure


def note_of(frequency_hz: Figure, a4_hz: float) -> Note:
    """Nearest note of equal temperament and the cents above it; 1200 log2(f / f_note), u from 1200 / (f ln 2).

    `frequency_hz` > 0; `a4_hz` > 0, the pitch of A4, taken as exact.
    """
    semitones = _A4 + 12.0 * math.log2(frequency_hz.value / a4_hz)
    nearest = round(semitones)
    u95 = None if frequency_hz.u95 is None else 1200.0 / math.log(2.0) * frequency_hz.u95 / frequency_hz.value
    return Note(f"{NAMES[nearest % 12]}{nearest // 12 - 1}", Figure(100.0 * (semitones - nearest), u95))


@dataclass(frozen=True, slots=True)
class Beat:
    """Two close modes and the beats they make together."""

    lower: Mode
    upper: Mode
    per_second: Figure


def beats(modes: Sequence[Mode]) -> tuple[Beat, ...]:
    """Neighbours that beat: within `CLOSE_WIDTHS` half-power widths and below `FASTEST_BEAT_HZ`, lowest first.

    Their u95 are added as independent; the clock's part, common to both, cancels and is left out.
    """
    ordered = sorted(modes, key=lambda mode: mode.damped_frequency_hz)
    found = []
    for lower, upper in pairwise(ordered):
        apart = upper.damped_frequency_hz - lower.damped_frequency_hz
        width = max(lower.amplitude_decay_rate_per_s, upper.amplitude_decay_rate_per_s) / math.pi
        if apart <= min(CLOSE_WIDTHS * width, FASTEST_BEAT_HZ):
            found.append(Beat(lower, upper, Figure(apart, _joint_u95(lower.frequency_hz, upper.frequency_hz))))
    return tuple(found)


def _joint_u95(first: Figure, second: Figure) -> float | None:
    own = [_u95_without_clock(figure) for figure in (first, second)]
    return None if own[0] is None or own[1] is None else math.hypot(own[0], own[1])


def _u95_without_clock(figure: Figure) -> float | None:
    if figure.u95 is None or figure.k is None or figure.parts is None:
        return figure.u95
    return math.sqrt(max(figure.u95**2 - (figure.k * figure.parts.clock) ** 2, 0.0))
