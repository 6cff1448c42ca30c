"""The decay strip: two lines of text from which one sees whether a mode's figures can be believed.

Time runs from the strike to the right. The upper line is the level in decibels, falling: bright where the figures rest on it, dim
where it was left out, down to the noise floor; dots stand for the floor where no level was traced. The lower line is the fitted
decay pulled straight, as long as the part that was fitted, with the level's departure from it magnified to `STEP_DB` a step: a
straight stroke is a clean decay; one that bows, waves or frays is not.

    █▇▇▆▆▅▅▄▄▃▃▂▂▂▂▂▂   44 dB        █▇▆▅▅▄▄▄▃▃▃▃⣀⣀⣀⣀   31 dB
     ───────────⠒⠤      0.90 s        ⠉⠒─⠤⠤⣀⠤⠤─⠒⠉       0.72 s
"""

from __future__ import annotations

import math
from collections.abc import Sequence

from rich.text import Text

from qmeter.estimate.modes import DecayTrace
from qmeter.show import look

STEP_DB = 1.0
"""decibels between two heights of the lower line"""

_LEVELS = " ▁▂▃▄▅▆▇█"
_LEVELS_ASCII = " .:-=+*#@"
_FLOOR = " ⣀⠤⠒⠉"
_FLOOR_ASCII = " .:::"
_TRACK = "⣀⠤─⠒⠉"
_TRACK_ASCII = "__-^^"
_DEPTHS_DB = (16, 24, 32, 40, 48, 64, 80, 96)
_BEYOND_FIT = 1.3
"""how far the strip goes on after the fit, times its end"""


def depth_db(traces: Sequence[DecayTrace]) -> int:
    """Height of the upper line in decibels, common to all strips of a table: from the strike to the noise floor of the deepest."""
    deepest = 0.0
    for trace in traces:
        deepest = max(deepest, trace.fit_dbfs[0] - trace.fit_dbfs[1])
        if math.isfinite(trace.floor_dbfs):
            deepest = max(deepest, top_dbfs(trace) - trace.floor_dbfs)
    return next((depth for depth in _DEPTHS_DB if depth >= deepest), _DEPTHS_DB[-1])


def top_dbfs(trace: DecayTrace) -> float:
    """Level of the strip's upper edge: the fitted line at the start of the fit, or the level if that is higher."""
    return max([trace.fit_dbfs[0], *(level for level in trace.level_dbfs if math.isfinite(level))])


def span_s(trace: DecayTrace) -> float:
    """Seconds from the strike that the strip shows: the fit, and a stretch of what follows it."""
    return _BEYOND_FIT * trace.fit_to_s


def draw(trace: DecayTrace, *, width: int, depth: float, unicode: bool = True) -> tuple[Text, Text]:
    """The two lines, each of exactly `width` cells; the upper one is `depth` decibels high."""
    column_s = span_s(trace) / width
    top = top_dbfs(trace)
    upper, lower = Text(), Text()
    for index in range(width):
        level = level_between(trace, index * column_s, (index + 1) * column_s)
        fitted = _fitted_dbfs(trace, (index + 0.5) * column_s, 0.5 * column_s)
        if level is None and (index + 0.5) * column_s > trace.fit_from_s:
            upper.append(_floor_glyph(trace.floor_dbfs, top, depth, unicode), look.FLOOR)
        else:
            upper.append(_level_glyph(level, top, depth, unicode), look.UNUSED if fitted is None else look.MEASURED)
        track = _track_glyph(level, fitted, unicode)
        lower.append(track, "" if track == " " else look.LINE)
    return upper, lower


def level_between(trace: DecayTrace, from_s: float, to_s: float) -> float | None:
    """Level in dBFS of the mean power between two times, or the level interpolated at their middle; None outside the trace."""
    first = max(math.ceil((from_s - trace.start_s) / trace.step_s - 1e-9), 0)
    last = max(math.ceil((to_s - trace.start_s) / trace.step_s - 1e-9), 0)
    within = [level for level in trace.level_dbfs[first:last] if not math.isnan(level)]
    if within:
        return _decibels(sum(10.0 ** (level / 10.0) for level in within) / len(within))
    place = (0.5 * (from_s + to_s) - trace.start_s) / trace.step_s
    before = math.floor(place)
    if before < 0 or before + 1 >= len(trace.level_dbfs):
        return None
    left, right = trace.level_dbfs[before], trace.level_dbfs[before + 1]
    if not (math.isfinite(left) and math.isfinite(right)):
        return None
    return left + (right - left) * (place - before)


def _fitted_dbfs(trace: DecayTrace, at_s: float, slack_s: float) -> float | None:
    """Level that the fit expects at a time: its line and the noise, powers added; None where nothing was fitted."""
    if not trace.fit_from_s - slack_s <= at_s <= trace.fit_to_s + slack_s:
        return None
    slope = (trace.fit_dbfs[1] - trace.fit_dbfs[0]) / max(trace.fit_to_s - trace.fit_from_s, 1e-12)
    line = trace.fit_dbfs[0] + slope * (at_s - trace.fit_from_s)
    floor = 10.0 ** (trace.floor_dbfs / 10.0) if math.isfinite(trace.floor_dbfs) else 0.0
    return _decibels(10.0 ** (line / 10.0) + floor)


def _decibels(power: float) -> float:
    return 10.0 * math.log10(power) if power > 0.0 else -math.inf


def _level_glyph(level: float | None, top: float, depth: float, unicode: bool) -> str:
    glyphs = _LEVELS if unicode else _LEVELS_ASCII
    return " " if level is None else glyphs[_height(level, top, depth, len(glyphs) - 1)]


def _floor_glyph(floor: float, top: float, depth: float, unicode: bool) -> str:
    """Dots at the height of the noise floor, where no level was traced."""
    glyphs = _FLOOR if unicode else _FLOOR_ASCII
    return glyphs[_height(floor, top, depth, len(glyphs) - 1)]


def _height(level: float, top: float, depth: float, steps: int) -> int:
    """Height in steps above the strip's lower edge, 0 when below it."""
    if not math.isfinite(level):
        return 0
    return min(max(math.ceil((level - (top - depth)) / depth * steps), 0), steps)


def _track_glyph(level: float | None, fitted: float | None, unicode: bool) -> str:
    if fitted is None:
        return " "
    glyphs = _TRACK if unicode else _TRACK_ASCII
    middle = len(glyphs) // 2
    if level is None or not math.isfinite(level):
        return " "
    away = math.floor((level - fitted) / STEP_DB + 0.5)
    return glyphs[min(max(middle + away, 0), len(glyphs) - 1)]
