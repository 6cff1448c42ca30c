"""Where each fit begins: as early as the residual lets it.

A later start loses exp(2 a t0) of a mode's information, an earlier one hears the contact and the knock. The residual's spread over
time (`profile`) decides; groups that still do not reach the noise are tried from the later rungs too.
"""

from __future__ import annotations

import numpy as np

from qmeter.dsp.noise import FloatArray
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.groups import Batch, GroupFit, Looks, fit_groups
from qmeter.estimate.poles import IntArray, RowFit
from qmeter.estimate.profile import Profiles, best_start

STARTS_S = np.array([0.0, 0.1, 0.2, 0.4, 0.7, 1.1, 1.7, 2.6, 4.0, 6.0, 9.0, 14.0, 21.0, 35.0, 60.0, 100.0, 170.0]) * 1e-3
"""the fixed ladder of starts after the onset"""
FIRST_START = 0.3
"""time constants a first fit may leave out to stay clear of the contact"""
SICK = 1.6
"""chi2 over its expectation above which a group is fitted from later starts too"""


def first_starts(poles: Poles, contact: int, frames: int) -> IntArray:
    """Clear of the contact, but never so late that a fast mode is gone."""
    return np.minimum(min(contact, frames // 4), np.floor(FIRST_START / np.maximum(-poles.pole.real, 1e-9))).astype(np.int64)


def onset_shift(ring: Ring, poles: Poles, rest: FloatArray, contact: int) -> int:
    """Samples by which the ring begins later than sample 0: the change point between noise and the extrapolated modes.

    It minimises sum_(n < n0) x^2 + sum_(n >= n0) (x - model)^2 over the stretch to the end of contact.
    """
    last = min(max(contact, 8), len(rest) - 1)
    x, r = ring.samples[:last], rest[:last]
    cost = np.concatenate([[0.0], np.cumsum(x**2 - r**2)])
    return int(np.argmin(cost)) if len(poles) else 0


def choose_starts(ring: Ring, poles: Poles, table: Profiles, shift: int, latest: FloatArray) -> IntArray:
    """The start of the ladder with the least variance: as early as the residual lets it, but not before the change point."""
    out = np.zeros(len(poles), np.int64)
    ladder = STARTS_S + shift / ring.rate
    for m, s in enumerate(poles.pole):
        decay = -s.real * ring.rate
        usable = ladder[STARTS_S * decay < latest[m]]
        band = table.near(s.imag * ring.rate / (2 * np.pi), decay)
        best, _ = best_start(band, decay, usable, max(1e-4, band.step_s))
        out[m] = round(float(usable[best]) * ring.rate)
    return np.minimum(out, len(ring.samples) // 2)


def restarted(ring: Ring, poles: Poles, fits: list[GroupFit], looks: Looks, still: float) -> list[GroupFit]:
    """Groups that do not reach the noise, from the later starts too; the start with the least u against its own residual stays."""
    sick: list[tuple[IntArray, int]] = []
    healthy: list[GroupFit] = []
    score: dict[tuple[int, ...], tuple[float, GroupFit, int]] = {}
    for g in fits:
        bad = g.fit.chi2 / g.freedom > SICK
        if not bad.any():
            healthy.append(g)
            continue
        for r in range(len(bad)):
            members = g.batch.members[r]
            score[tuple(members)] = (_score(g, r), g, r)
            if bad[r]:
                sick.append((members, int(g.batch.start[r])))
    if not sick:
        return fits
    for offset in range(1, 10):
        groups, starts = [], np.zeros(len(poles), np.int64)
        for members, start in sick:
            later = STARTS_S[STARTS_S * ring.rate > start + 1]
            fastest = float(np.max(-poles.pole[members].real)) * ring.rate
            if len(later) >= offset and (later[offset - 1] - start / ring.rate) * fastest < 2.5:
                groups.append(members)
                starts[members] = min(int(later[offset - 1] * ring.rate), len(ring.samples) // 2)
        if not groups:
            break
        for g in fit_groups(ring, poles, groups, starts, looks, still, steps=6):
            for r in range(len(g.batch.members)):
                key = tuple(g.batch.members[r])
                value = _score(g, r)
                if value < 0.9 * score[key][0]:
                    score[key] = (value, g, r)
    return [*healthy, *(_one_row(g, r) for _, g, r in score.values())]


def _score(g: GroupFit, r: int) -> float:
    """Sum of ln u(a)/a over a row's modes, u against the row's own residual."""
    with np.errstate(all="ignore"):
        excess = max(float(g.fit.chi2[r] / g.freedom[r]), 1.0)
        variance = np.diagonal(g.fit.covariance[r])[0::2] * excess
        value = float(np.exp(np.mean(0.5 * np.log(variance / g.fit.pole[r].real ** 2))))
    return value if np.isfinite(value) else np.inf


def _one_row(g: GroupFit, r: int) -> GroupFit:
    pick = slice(r, r + 1)
    b, f = g.batch, g.fit
    return GroupFit(
        Batch(b.members[pick], b.start[pick], b.rows.take(np.array([r])), b.pole[pick]),
        RowFit(f.pole[pick], f.amplitude[pick], f.covariance[pick], f.chi2[pick], f.residual[pick], f.influence[pick]),
    )
