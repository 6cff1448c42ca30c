"""What is said in sentences: the recording and its strikes above the table, the doubts below it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import PurePath

from qmeter.estimate.modes import Doubt, Measurement, Mode, Strike
from qmeter.show.pitch import Beat
from qmeter.uncertainty import format_figure, format_value_u95

_NAMED_AT_MOST = 6
"""modes or strikes that one sentence lists by name"""


@dataclass(frozen=True, slots=True)
class Said:
    """One sentence to print: whom it is about (may be empty), and what there is to say."""

    about: str
    says: str


def short_hz(mode: Mode) -> str:
    """The frequency by which a sentence refers to a mode: as in the table."""
    figure = mode.frequency_hz
    return f"{format_value_u95(figure.value, figure.u95)[0]} Hz"


def listed(names: Sequence[str], at_most: int = _NAMED_AT_MOST) -> str:
    """ "a", "a and b", "a, b and c", or "a, b, c and 9 more"."""
    if len(names) > at_most:
        return f"{', '.join(names[: at_most - 1])} and {len(names) - at_most + 1} more"
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def title(measurement: Measurement) -> str:
    """File, channel, rate and length."""
    name = "standard input" if measurement.file == "-" else PurePath(measurement.file).name if measurement.file else "recording"
    channel = "" if measurement.channels == 1 else f", channel {measurement.channel} of {measurement.channels}"
    return f"{name}{channel}, {measurement.sample_rate_hz / 1000:g} kHz, {measurement.duration_s:.2f} s"


def strikes(measurement: Measurement) -> str:
    """How many strikes were kept, and which were set aside for what reason."""
    hits = measurement.strikes
    if not hits:
        return "no strike found"
    aside: dict[str, list[str]] = {}
    for number, strike in enumerate(hits, 1):
        if not strike.accepted:
            aside.setdefault(_reason(strike), []).append(f"{number} (at {strike.onset_s:.2f} s)")
    kept = sum(strike.accepted for strike in hits)
    if not aside:
        return "one strike, kept" if kept == 1 else f"{kept} strikes, all kept"
    parts = [f"{kept} of {len(hits)} strikes kept" if len(hits) > 1 else "one strike"]
    parts += [f"{'strike' if len(names) == 1 else 'strikes'} {listed(names)} set aside: {reason}" for reason, names in aside.items()]
    return "; ".join(parts)


def _reason(strike: Strike) -> str:
    """The codes of its doubts as words: "double-strike" is said "double strike"."""
    return ", ".join(dict.fromkeys(doubt.code.replace("-", " ") for doubt in strike.doubts)) or "not like the others"


def doubts(measurement: Measurement) -> tuple[Said, ...]:
    """Every doubt once: on the whole recording, on strikes, on modes (named by frequency, low to high)."""
    about_strikes = [(f"strike {number}", doubt) for number, strike in enumerate(measurement.strikes, 1) for doubt in strike.doubts]
    return gather(measurement.doubts, measurement.modes, about_strikes)


def gather(whole: Iterable[Doubt], modes: Sequence[Mode], others: Iterable[tuple[str, Doubt]] = ()) -> tuple[Said, ...]:
    """Doubts of one kind and wording become one sentence; what is said of the whole is not said again of a part."""
    said = dict.fromkeys(doubt.says for doubt in whole)
    result = [Said("", says) for says in said]
    subjects: dict[str, list[str]] = {}
    ordered = sorted(modes, key=lambda mode: mode.damped_frequency_hz)
    for mode in ordered:
        for doubt in mode.doubts:
            subjects.setdefault(doubt.says, []).append(short_hz(mode))
    for name, doubt in others:
        subjects.setdefault(doubt.says, []).append(name)
    for says, names in subjects.items():
        if says not in said:
            unique = list(dict.fromkeys(names))
            every = len(modes) > 1 and unique == list(dict.fromkeys(map(short_hz, ordered)))
            result.append(Said("every mode" if every else listed(unique), says))
    return tuple(result)


def pooled_title(files: Sequence[str], mountings: Sequence[str | None]) -> str:
    """How many files and which ways of holding were pooled."""
    names = list(dict.fromkeys(mountings))
    counts = [f"{name or 'not named'} ({mountings.count(name)})" for name in names]
    held = "one mounting" if len(names) == 1 else f"{len(names)} mountings: {listed(counts)}"
    return f"pooled over {len(files)} {'file' if len(files) == 1 else 'files'}, {held}"


def beat(pair: Beat) -> str:
    """How fast two close modes beat."""
    return f"{short_hz(pair.lower)} and {short_hz(pair.upper)} beat {format_figure(pair.per_second)} times a second"
