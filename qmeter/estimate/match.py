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
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from qmeter.estimate.modes import Mode

Array = npt.NDArray[np.float64]

_DRIFT_WIDTHS = 0.35, 1.0
"""by how many half-power widths a mode may move between strikes of one mounting, and between mountings"""
_DRIFT_OF_FREQUENCY = 1e-4, 2e-3
"""or by how much of its frequency (a few degrees, another support), whichever is more; modes of high Q are narrower than that"""
_DECAY_FACTOR = 2.2, 3.0
"""by which factor the decay rate may differ, in one mounting and between mountings, beyond the joint u95"""
_WIDEST_U95_WIDTHS = 1.0
"""a frequency less certain than this is not matched further away for it"""
_UNMATCHED = 0.8
"""cost of leaving one mode without a partner; a partner at the edge of what is allowed costs 1.5, so two matches go before one"""


class _Read(NamedTuple):
    """A mode as one strike read it, with the numbers that matter here; u from fit and model."""

    frequency: float
    decay: float
    u_frequency: float
    u_decay: float
    mode: Mode | None = None


@dataclass(slots=True)
class Group:
    """One mode of the object: by the number of the strike, what each read. `splits`: strikes that read it as two."""

    reads: dict[int, _Read]
    splits: int = 0

    @property
    def modes(self) -> dict[int, Mode]:
        """By the number of the strike, in their order."""
        return {strike: read.mode for strike, read in sorted(self.reads.items()) if read.mode is not None}


def match(readings: Sequence[Sequence[Mode]], mountings: Sequence[int]) -> list[Group]:
    """Groups of the modes that are one, at most one from each strike; every mode is in one group, or dropped as half of a needless split.

    `readings`: the modes of each strike; `mountings`: the number of each strike's mounting. Starts from the strike with the most modes;
    then each strike is assigned again to what all the others agree on, so that the order of the strikes does not matter much.
    """
    all_reads = [sorted(map(_read, modes), key=lambda read: read.frequency) for modes in readings]
    order = sorted(range(len(readings)), key=lambda strike: -len(readings[strike]))
    groups: list[Group] = []
    for strike in order:
        _assign(groups, strike, all_reads[strike], mountings)
    for _ in range(2 if len(readings) > 2 else 0):
        before = [dict(group.reads) for group in groups]
        for strike in order:
            for group in groups:
                group.reads.pop(strike, None)
            groups = [group for group in groups if group.reads]
            _assign(groups, strike, all_reads[strike], mountings)
        if [group.reads for group in groups] == before:
            break
    return _settle_splits(groups)


def _read(mode: Mode) -> _Read:
    parts = [mode.budget[name] for name in ("fit", "model") if name in mode.budget]
    u_f = math.sqrt(sum(part.frequency_variance for part in parts))
    u_a = math.sqrt(sum(part.decay_variance for part in parts))
    return _Read(mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s, u_f, u_a, mode)


def _assign(groups: list[Group], strike: int, reads: Sequence[_Read], mountings: Sequence[int]) -> None:
    """Add the modes of one strike to the groups that they fit best, and found new groups for the rest."""
    left = set(range(len(reads)))
    if groups and reads:
        cost = _costs(groups, strike, reads, mountings)
        for row, column in _best(cost):
            groups[column].reads[strike] = reads[row]
            left.discard(row)
    groups += [Group({strike: reads[row]}) for row in sorted(left)]


def _costs(groups: Sequence[Group], strike: int, reads: Sequence[_Read], mountings: Sequence[int]) -> Array:
    """(reads, groups): squared distance in units of what is allowed, 1 in frequency and a half in decay; infinite beyond it."""
    frequency, decay, u_f, u_a = np.array([read[:4] for read in reads]).T
    middle = np.array([_centre(group, mountings[strike], mountings)[:4] for group in groups]).T
    own = np.array([any(mountings[other] == mountings[strike] for other in group.reads) for group in groups])
    width = np.maximum(decay[:, None], middle[1]) / math.pi
    drift_widths, drift_relative, factor = (np.where(own, *pair)[None, :] for pair in (_DRIFT_WIDTHS, _DRIFT_OF_FREQUENCY, _DECAY_FACTOR))
    joint_f = 2.0 * np.minimum(np.hypot(u_f[:, None], middle[2]), 0.5 * _WIDEST_U95_WIDTHS * width)
    allowed_f = joint_f + np.maximum(drift_widths * width, drift_relative * middle[0])
    joint_a = 2.0 * np.hypot(u_a[:, None] / decay[:, None], middle[3] / middle[1])
    allowed_a = np.minimum(joint_a, 1.0) + np.log(factor)
    away_f = np.abs(frequency[:, None] - middle[0]) / allowed_f
    away_a = np.abs(np.log(decay[:, None] / middle[1])) / allowed_a
    return np.where((away_f <= 1.0) & (away_a <= 1.0), away_f**2 + 0.5 * away_a**2, np.inf)


def _middle(reads: Sequence[_Read]) -> _Read:
    """Medians over several readings of one mode."""
    if len(reads) == 1:
        return reads[0]
    frequency, decay, u_frequency, u_decay, _ = zip(*reads, strict=True)
    return _Read(median(frequency), median(decay), median(u_frequency), median(u_decay))


def _centre(group: Group, mounting: int, mountings: Sequence[int]) -> _Read:
    """Where a group lies: its middle over the strikes in this mounting, or over all when it has none there."""
    return _middle([read for strike, read in group.reads.items() if mountings[strike] == mounting] or list(group.reads.values()))


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
    for group in sorted(groups, key=lambda group: -len(group.reads)):
        dropped = False
        for other in (other for other in result if _beside(group, other)):
            both = group.reads.keys() & other.reads.keys()
            if 2 * len(both) > len(group.reads.keys() | other.reads.keys()):
                _leave_out_blends(group, other)
                _leave_out_blends(other, group)
            elif len(both) == len(group.reads):
                other.splits = max(other.splits, len(both))
                dropped = True
                break
        if not dropped:
            result.append(group)
    return result


def _beside(group: Group, other: Group) -> bool:
    """Within one half-power width of the broader."""
    one, two = _middle(list(group.reads.values())), _middle(list(other.reads.values()))
    return abs(one.frequency - two.frequency) < max(one.decay, two.decay) / math.pi


def _leave_out_blends(group: Group, other: Group) -> None:
    """Drop from `group` the strikes that lack `other` and lie off the rest towards it, by more than their joint u95."""
    centre = _middle([read for strike, read in group.reads.items() if strike in other.reads])
    towards = _middle(list(other.reads.values())).frequency - centre.frequency
    for strike in [strike for strike in group.reads if strike not in other.reads]:
        read = group.reads[strike]
        away = read.frequency - centre.frequency
        if away * towards > 0.0 and abs(away) > 2.0 * math.hypot(read.u_frequency, centre.u_frequency):
            del group.reads[strike]
