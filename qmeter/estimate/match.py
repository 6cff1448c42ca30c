"""Which modes of several strikes are one mode: a one-to-one assignment of each strike to the list that the strikes agree on.

Frequencies may differ by their joint u95 and by a drift (support, temperature, level of the tap), decay rates by theirs and by a factor.
A whole strike is assigned at once, at the least total cost: that keeps the two halves of a close pair apart when both have drifted,
where taking the nearest first would not.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median

import numpy as np
import numpy.typing as npt

from qmeter.estimate.modes import Mode

Array = npt.NDArray[np.float64]

_DRIFT_WIDTHS = 0.35, 1.0
"""by how many half-power widths a mode may move between strikes of one mounting, and between mountings"""
_DRIFT_OF_FREQUENCY = 1e-4, 2e-3
"""or by how much of its frequency (a few degrees, another support), whichever is more; modes of high Q are narrower than that"""
_DECAY_FACTOR = 1.6, 2.5
"""by which factor the decay rate may differ, in one mounting and between mountings, beyond the joint u95"""
_WIDEST_U95_WIDTHS = 1.0
"""a frequency less certain than this is not matched further away for it"""
_UNMATCHED = 0.8
"""cost of leaving one mode without a partner; a partner at the edge of what is allowed costs 1.5, so two matches go before one"""


@dataclass(slots=True)
class Group:
    """One mode of the object: by the number of the strike, what each read. `splits`: strikes that read it as two."""

    modes: dict[int, Mode]
    splits: int = 0


def match(readings: Sequence[Sequence[Mode]], mountings: Sequence[int]) -> list[Group]:
    """Groups of the modes that are one, at most one from each strike; every mode is in one group, or dropped as half of a needless split.

    `readings`: the modes of each strike; `mountings`: the number of each strike's mounting. Starts from the strike with the most modes;
    then each strike is assigned again to what all the others agree on, so that the order of the strikes does not matter much.
    """
    readings = [sorted(modes, key=lambda mode: mode.damped_frequency_hz) for modes in readings]
    order = sorted(range(len(readings)), key=lambda strike: -len(readings[strike]))
    groups: list[Group] = []
    for strike in order:
        _assign(groups, strike, readings[strike], mountings)
    for _ in range(2 if len(readings) > 2 else 0):
        before = [dict(group.modes) for group in groups]
        for strike in order:
            for group in groups:
                group.modes.pop(strike, None)
            groups = [group for group in groups if group.modes]
            _assign(groups, strike, readings[strike], mountings)
        if [group.modes for group in groups] == before:
            break
    return _settle_splits(groups)


def _assign(groups: list[Group], strike: int, modes: Sequence[Mode], mountings: Sequence[int]) -> None:
    """Add the modes of one strike to the groups that they fit best, and found new groups for the rest."""
    left = set(range(len(modes)))
    if groups and modes:
        cost = _costs(groups, strike, modes, mountings)
        for row, column in _best(cost):
            groups[column].modes[strike] = modes[row]
            left.discard(row)
    groups += [Group({strike: modes[row]}) for row in sorted(left)]


def _costs(groups: Sequence[Group], strike: int, modes: Sequence[Mode], mountings: Sequence[int]) -> Array:
    """(modes, groups): squared distance in units of what is allowed, 1 in frequency and a half in decay; infinite beyond it."""
    frequency, decay, u_f, u_a = _numbers(modes)
    middle = np.array([_centre(group, mountings[strike], mountings) for group in groups]).T
    own = np.array([any(mountings[other] == mountings[strike] for other in group.modes) for group in groups])
    width = np.maximum(decay[:, None], middle[1]) / math.pi
    drift_widths, drift_relative, factor = (np.where(own, *pair)[None, :] for pair in (_DRIFT_WIDTHS, _DRIFT_OF_FREQUENCY, _DECAY_FACTOR))
    joint_f = 2.0 * np.minimum(np.hypot(u_f[:, None], middle[2]), 0.5 * _WIDEST_U95_WIDTHS * width)
    allowed_f = joint_f + np.maximum(drift_widths * width, drift_relative * middle[0])
    joint_a = 2.0 * np.hypot(u_a[:, None] / decay[:, None], middle[3] / middle[1])
    allowed_a = np.minimum(joint_a, 1.0) + np.log(factor)
    away_f = np.abs(frequency[:, None] - middle[0]) / allowed_f
    away_a = np.abs(np.log(decay[:, None] / middle[1])) / allowed_a
    return np.where((away_f <= 1.0) & (away_a <= 1.0), away_f**2 + 0.5 * away_a**2, np.inf)


def _numbers(modes: Sequence[Mode]) -> Array:
    """(4, modes): frequency, decay rate, and their standard uncertainties from fit and model."""
    rows = []
    for mode in modes:
        parts = [mode.budget[name] for name in ("fit", "model") if name in mode.budget]
        u_f = math.sqrt(sum(part.frequency_variance for part in parts))
        u_a = math.sqrt(sum(part.decay_variance for part in parts))
        rows.append((mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s, u_f, u_a))
    return np.array(rows).reshape(-1, 4).T


def _middle(modes: Sequence[Mode]) -> list[float]:
    """Medians over several readings of one mode: frequency, decay rate, and their standard uncertainties."""
    return [median(row) for row in _numbers(modes).tolist()]


def _centre(group: Group, mounting: int, mountings: Sequence[int]) -> list[float]:
    """Where a group lies: its middle over the strikes in this mounting, or over all when it has none there."""
    return _middle([mode for strike, mode in group.modes.items() if mountings[strike] == mounting] or list(group.modes.values()))


def _best(cost: Array) -> list[tuple[int, int]]:
    """Pairs (row, column) of least total cost, where each row and column may also stay alone at `_UNMATCHED`.

    Exact: rows in order of frequency, and of what went before only the taken columns that later rows can still reach matter, which in a
    spectrum are few.
    """
    partners = [np.flatnonzero(np.isfinite(row)).tolist() for row in cost]
    last = {column: row for row, columns in enumerate(partners) for column in columns}
    states: dict[frozenset[int], tuple[float, tuple[tuple[int, int], ...]]] = {frozenset(): (0.0, ())}
    for row, columns in enumerate(partners):
        following: dict[frozenset[int], tuple[float, tuple[tuple[int, int], ...]]] = {}
        for taken, (total, pairs) in states.items():
            moves = [(total, taken, pairs)]
            # a match saves both its row and its column from staying alone
            moves += [
                (total + float(cost[row, column]) - 2.0 * _UNMATCHED, taken | {column}, (*pairs, (row, column)))
                for column in columns
                if column not in taken
            ]
            for price, now_taken, now_pairs in moves:
                reachable = frozenset(column for column in now_taken if last[column] > row)
                if reachable not in following or price < following[reachable][0]:
                    following[reachable] = price, now_pairs
        states = following
    return list(min(states.values(), key=lambda state: state[0])[1])


def _settle_splits(groups: list[Group]) -> list[Group]:
    """Undo splits that few strikes made, and keep blends of two out of the halves of a pair that most strikes read.

    Two groups within a half-power width: where most strikes that read either read both, a strike that read one only, off towards the
    other, has read their blend and is left out. Where few did, and the smaller group lives in strikes that read the larger one too, it is
    the other half of a needless split: dropped, and counted.
    """
    result: list[Group] = []
    for group in sorted(groups, key=lambda group: -len(group.modes)):
        dropped = False
        for other in (other for other in result if _beside(group, other)):
            both = group.modes.keys() & other.modes.keys()
            if 2 * len(both) > len(group.modes.keys() | other.modes.keys()):
                _leave_out_blends(group, other)
                _leave_out_blends(other, group)
            elif len(both) == len(group.modes):
                other.splits = max(other.splits, len(both))
                dropped = True
                break
        if not dropped:
            result.append(group)
    return result


def _beside(group: Group, other: Group) -> bool:
    """Within one half-power width of the broader."""
    (f1, a1, _, _), (f2, a2, _, _) = _middle(list(group.modes.values())), _middle(list(other.modes.values()))
    return abs(f1 - f2) < max(a1, a2) / math.pi


def _leave_out_blends(group: Group, other: Group) -> None:
    """Drop from `group` the strikes that lack `other` and lie off the rest towards it, by more than their joint u95."""
    centre, _, u_centre, _ = _middle([mode for strike, mode in group.modes.items() if strike in other.modes])
    towards = _middle(list(other.modes.values()))[0] - centre
    for strike in [strike for strike in group.modes if strike not in other.modes]:
        frequency, _, u_f, _ = _middle([group.modes[strike]])
        away = frequency - centre
        if away * towards > 0.0 and abs(away) > 2.0 * math.hypot(u_f, u_centre):
            del group.modes[strike]
