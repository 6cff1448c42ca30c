"""The same fit from other starts and over other lengths: a fixed ladder, never adapted to the answer.

Each rung fits every group on its own bins, with all other modes subtracted. A rung's covariance is its Fisher matrix raised by the
level of its own residual and by where in time that residual stands.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.groups import GroupFit, Looks, fit_groups, joint_groups, rest_of
from qmeter.estimate.poles import FloatArray, IntArray

STARTS = (0.0, 0.2, 0.5, 0.9, 1.4)
"""time constants after the end of contact"""
LENGTHS = (9.0, 4.0)
"""time constants of the slowest mode of a group"""
_GRID = 1.35
_LEASH_DECAYS, _LEASH_WIDTHS = 2.0, 1.0
HEAVIEST = 0.25
"""share of the total weight that one rung may have"""


@dataclass(frozen=True, slots=True)
class Rungs:
    """Per mode: (alpha, omega) per sample of each rung that held, its covariance, and how many rungs were asked."""

    values: tuple[list[FloatArray], ...]
    covariances: tuple[list[FloatArray], ...]
    asked: IntArray

    def held(self) -> FloatArray:
        """Share of the rungs asked that held, per mode."""
        return np.array([len(v) / max(n, 1) for v, n in zip(self.values, self.asked, strict=True)])

    def plus(self, other: Rungs) -> Rungs:
        """Both ladders together."""
        return Rungs(
            tuple(a + b for a, b in zip(self.values, other.values, strict=True)),
            tuple(a + b for a, b in zip(self.covariances, other.covariances, strict=True)),
            self.asked + other.asked,
        )


def rungs_of(ring: Ring, poles: Poles, contact: int, still: float) -> Rungs:
    """Climb the ladder from where the poles stand."""
    m = len(poles)
    values: tuple[list[FloatArray], ...] = tuple([] for _ in range(m))
    covariances: tuple[list[FloatArray], ...] = tuple([] for _ in range(m))
    asked = np.zeros(m, np.int64)
    looks = Looks(ring, rest_of(ring, poles))
    groups = joint_groups(poles, still)
    for late in STARTS:
        starts = _on_grid(contact + late / np.maximum(-poles.pole.real, still), contact, len(ring.samples) // 2)
        for long in LENGTHS:
            for g in fit_groups(ring, poles, groups, starts, looks, still, steps=4, long=long):
                _gather(poles, g, values, covariances, asked)
    return Rungs(values, covariances, asked)


def _on_grid(starts: FloatArray, contact: int, last: int) -> IntArray:
    """Starts rounded to a geometric grid, so that modes share transforms."""
    steps = np.round(np.log(np.maximum(starts - contact, 1.0) / 48.0) / np.log(_GRID))
    grid = np.where(starts - contact < 24.0, 0.0, 48.0 * _GRID**steps)
    return np.asarray(np.minimum(contact + np.round(grid), last), dtype=np.int64)


def _gather(
    poles: Poles, g: GroupFit, values: tuple[list[FloatArray], ...], covariances: tuple[list[FloatArray], ...], asked: IntArray
) -> None:
    for r in range(len(g.batch.members)):
        factor = _raised(g, r)
        for j, i in enumerate(g.batch.members[r]):
            asked[i] += 1
            s, was = g.fit.pole[r, j], poles.pole[i]
            block = g.fit.covariance[r, 2 * j : 2 * j + 2, 2 * j : 2 * j + 2] * np.outer(
                factor[2 * j : 2 * j + 2], factor[2 * j : 2 * j + 2]
            )
            if not np.isfinite(block).all() or block[0, 0] <= 0 or s.real >= 0:
                continue
            if abs(np.log(s.real / was.real)) > np.log(_LEASH_DECAYS) or abs(s.imag - was.imag) > _LEASH_WIDTHS * 2.0 * -was.real:
                continue
            if 16.0 * block[0, 0] < 4.0 * s.real**2:
                values[i].append(np.array([-s.real, s.imag]))
                covariances[i].append(block)


def _raised(g: GroupFit, r: int) -> FloatArray:
    """Factors on u: the residual of the row over the noise, weighted by where each parameter listens in time."""
    root = np.sqrt(g.batch.rows.weight[r])
    weight = np.abs(np.fft.ifft(g.fit.influence[r] / root, axis=-1)) ** 2
    bins = weight.shape[-1]
    white = g.fit.residual[r] * root
    spare = bins / max(bins - 2.0 * g.batch.members.shape[1], 1.0)
    power = np.abs(np.fft.ifft(white)) ** 2 * bins * spare
    smooth = 0.25 * np.roll(power, 1) + 0.5 * power + 0.25 * np.roll(power, -1)
    with np.errstate(all="ignore"):
        factor = weight @ smooth / np.sum(weight, axis=-1)
    return np.asarray(np.sqrt(np.maximum(np.nan_to_num(factor, nan=np.inf), 1.0)))


def summary(values: FloatArray, covariances: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Weighted mean over rungs, the mean covariance of the three best determined, and the weighted scatter, each for (alpha, omega).

    The rungs share their data, so the scatter is not divided by their number, and no rung counts for more than `HEAVIEST`.
    """
    variance = covariances[:, 0, 0]
    weight = 1.0 / variance
    weight /= weight.sum()
    for _ in range(3):
        weight = np.minimum(weight, HEAVIEST)
        weight /= weight.sum()
    mean = weight @ values
    off = values - mean
    spread = 1.4826 * np.sqrt(np.maximum(np.median(off**2, axis=0), 1e-300))
    good = (np.abs(off) < 4.0 * spread + 3.0 * np.sqrt(covariances[:, [0, 1], [0, 1]])).all(axis=1)
    if good.sum() >= 2:
        weight = np.where(good, weight, 0.0)
        weight /= weight.sum()
        mean = weight @ values
        off = values - mean
    best = np.argsort(variance)[:3]
    return mean, covariances[best].mean(axis=0), np.einsum("r,ri,rj->ij", weight, off, off)
