"""What is said in sentences: the recording and its strikes above the table, the doubts below it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import PurePath

from qmeter.estimate.modes import Doubt, Measurement, Mode, Strike
from qmeter.show import pitch
from qmeter.uncertainty import format_figure, format_value_u95

_LOUDEST_PAIRS = 3
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
    parts = [f"{kept or 'none'} of {len(hits)} strikes kept" if len(hits) > 1 else "one strike"]
    parts += [f"{'strike' if len(names) == 1 else 'strikes'} {listed(names)} set aside: {reason}" for reason, names in aside.items()]
    return "; ".join(parts)


def _reason(strike: Strike) -> str:
    """The codes of its doubts as words: "double-strike" is said "double strike"."""
    said = ", ".join(dict.fromkeys(doubt.code.replace("-", " ") for doubt in strike.doubts))
    return said or ("not like the others" if strike.modes else "nothing rang")


def doubts(measurement: Measurement, *, brief: bool = False) -> tuple[Said, ...]:
    """Every doubt once: on the whole recording, on modes (named by frequency), on strikes."""
    about_strikes = [(f"strike {number}", doubt) for number, strike in enumerate(measurement.strikes, 1) for doubt in strike.doubts]
    return gather(measurement.doubts, measurement.modes, about_strikes, brief=brief)


def gather(
    whole: Iterable[Doubt], modes: Sequence[Mode], others: Iterable[tuple[str, Doubt]] = (), *, brief: bool = False
) -> tuple[Said, ...]:
    """Doubts of one wording become one sentence; what is said of the whole is not said again of a part.

    `brief`: doubts of one code become one sentence, that of the strongest mode, with the names of the others after it.
    """
    said = dict.fromkeys(doubt.says for doubt in whole)
    result = [Said("", says) for says in said]
    strongest_first = sorted(modes, key=lambda mode: -mode.level_db)
    about_modes = [(short_hz(mode), doubt) for mode in strongest_first for doubt in mode.doubts]
    everyone = {short_hz(mode) for mode in modes} if len(modes) > 1 else set()
    for subjects in (about_modes, list(others)):
        kinds: dict[str, list[tuple[str, str]]] = {}
        for name, doubt in subjects:
            if doubt.says not in said:
                kinds.setdefault(doubt.code if brief else doubt.says, []).append((name, doubt.says))
        result += [_one(same, everyone) for same in kinds.values()]
    return tuple(result)


def _one(subjects: Sequence[tuple[str, str]], everyone: set[str]) -> Said:
    """One sentence for all of these: the first one's words, and who else says much the same."""
    says = subjects[0][1]
    alike = list(dict.fromkeys(name for name, words in subjects if words == says))
    rest = list(dict.fromkeys(name for name, words in subjects if words != says and name not in alike))
    about = "every mode" if set(alike) == everyone else listed(sorted(alike, key=_number))
    return Said(about, f"{says} Likewise {listed(sorted(rest, key=_number))}." if rest else says)


def _number(name: str) -> float:
    """The number in "184.12 Hz" or "strike 3", to sort by."""
    return next(float(word) for word in name.split() if word[0].isdigit())


def pooled_title(files: Sequence[str], mountings: Sequence[str | None]) -> str:
    """How many files and which ways of holding were pooled."""
    names = list(dict.fromkeys(mountings))
    counts = [f"{name or 'not named'} ({files_counted(mountings.count(name))})" for name in names]
    held = "one mounting" if len(names) == 1 else f"{len(names)} mountings: {listed(counts)}"
    return f"pooled over {files_counted(len(files))}, {held}"


def files_counted(number: int) -> str:
    """ "1 file", "2 files"."""
    return "1 file" if number == 1 else f"{number} files"


def beats(modes: Sequence[Mode], *, all_of_them: bool) -> list[str]:
    """How fast close modes beat, a sentence a pair; else the loudest pairs only, and how many more there are."""
    pairs = pitch.beats(modes)
    loudest = sorted(pairs, key=lambda pair: -min(pair.lower.level_db, pair.upper.level_db))[:_LOUDEST_PAIRS]
    shown = [pair for pair in pairs if all_of_them or pair in loudest]
    said = [f"{short_hz(pair.lower)} and {short_hz(pair.upper)} beat {format_figure(pair.per_second)} times a second" for pair in shown]
    more = len(pairs) - len(shown)
    return said if not more else [*said, f"{more} more close {'pair' if more == 1 else 'pairs'}, weaker than these: --pitch 440 shows all"]
