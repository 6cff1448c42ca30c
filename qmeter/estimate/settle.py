"""The fit that counts: every mode on enough of the ring, from the start that serves it best, with its neighbours.

Rounds: all groups are fitted at a common start; the residual then says when the knock is over, band by band, and with it the best
start of each mode; the fit is repeated there. Groups that do not reach the noise are looked at again from scratch (a close pair
fitted as one line). What does not stand out of its surroundings is dropped.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.noise import FloatArray
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.groups import Batch, GroupFit, Looks, fit_groups, joint_groups, moved, rest_of
from qmeter.estimate.poles import IntArray, RowFit
from qmeter.estimate.profile import Profiles, best_start, profiles, spread_in_time
from qmeter.estimate.resolve import resolve

STARTS_S = np.array([0.0, 0.1, 0.2, 0.4, 0.7, 1.1, 1.7, 2.6, 4.0, 6.0, 9.0, 14.0, 21.0, 35.0, 60.0, 100.0, 170.0]) * 1e-3
"""the fixed ladder of starts after the onset"""
FIRST_START = 0.3
"""time constants a first fit may leave out to stay clear of the contact"""
SAME_WIDTHS = 0.15
"""two poles closer than this many half-power widths, with like decays, are one mode found twice"""
STEADY = 0.15
"""time constants within the whole ring below which a line is as good as a steady tone"""
SWEEPS = 4
SPLINTER_WIDTHS = 2.0
SICK = 1.6
"""chi2 over its expectation above which a group is fitted from later starts too"""
LEAST_ENERGY = 40.0
"""(a/u(a))^2 = rho^2/4 must exceed a tenth of this: rho^2 over the local residual"""


@dataclass(frozen=True, slots=True)
class Settled:
    """Modes with the covariance of their fit.

    covariance: (M, 2, 2) of (alpha, omega) per sample, against the residual's spread in time and local level. fisher: the same for
    stationary noise of the measured spectrum. start: (M,) samples; length: (M,); excess: (M,) chi2 over its expectation.
    group: (M,) number of the joint group.
    """

    poles: Poles
    covariance: FloatArray
    fisher: FloatArray
    start: IntArray
    length: IntArray
    excess: FloatArray
    group: IntArray

    def take(self, which: object) -> Settled:
        return Settled(
            self.poles.take(which),
            self.covariance[which],
            self.fisher[which],
            self.start[which],
            self.length[which],
            self.excess[which],
            self.group[which],
        )


def settle(ring: Ring, poles: Poles, contact: int) -> Settled:
    """Final values of the candidates `poles`; `contact` is the sample at which the contact force has ended."""
    loudest = float(np.max(np.abs(ring.samples), initial=0.0))
    still = STEADY / len(ring.samples)
    poles = unshattered(poles)
    for _ in range(2):
        poles = merged(poles)
        fits = fit_groups(ring, poles, joint_groups(poles, still), first_starts(poles, contact), Looks(ring, rest_of(ring, poles)), steps=6)
        poles, _ = moved(poles, fits, loudest, still)
    rest = rest_of(ring, poles)
    table = profiles(ring, rest, poles)
    settled = _nothing()
    for sweep in range(SWEEPS):
        if not len(poles):
            return _nothing()
        shift = onset_shift(ring, poles, rest, contact)
        starts = choose_starts(ring, poles, table, shift)
        looks = Looks(ring, rest)
        fits = fit_groups(ring, poles, joint_groups(poles, still), starts, looks, steps=6)
        if sweep >= 1:
            fits = restarted(ring, poles, fits, looks, still)
        before = poles
        poles, keep = moved(poles, fits, loudest, still)
        rest = rest_of(ring, poles)
        table = profiles(ring, rest, poles)
        settled = collect(ring, before, poles, keep, fits, table)
        if sweep == SWEEPS - 1:
            break
        swaps = resolve(before, fits, 1.5) if sweep < SWEEPS - 2 else []
        stays = keep.copy()
        stays[keep] = worthy(settled, ring, local=True)
        full = Poles(before.pole.copy(), before.amplitude.copy())
        full.pole[keep], full.amplitude[keep] = poles.pole, poles.amplitude
        better = merged(swapped(full, stays, swaps))
        if swaps or len(better) < len(poles):
            poles = better
            rest = rest_of(ring, poles)
            table = profiles(ring, rest, poles)
    return settled.take(worthy(settled, ring) & ~steady(settled.poles, ring))


def swapped(poles: Poles, keep: np.ndarray, swaps: list[tuple[np.ndarray, Poles]]) -> Poles:
    """The poles with whole groups replaced by what their bins ask for."""
    keep = keep.copy()
    fresh = Poles.none()
    for members, new in swaps:
        keep[members] = False
        fresh = fresh.plus(new)
    return poles.take(keep).plus(fresh)


def unshattered(poles: Poles) -> Poles:
    """Without the splinters that a rough fit leaves beside a strong line: `resolve` finds the true ones again, with evidence."""
    energy = np.abs(poles.amplitude) ** 2 / -poles.pole.real
    kept: list[int] = []
    for i in np.argsort(-energy):
        s, strong = poles.pole[i], poles.pole[kept]
        decays = s.real / strong.real
        splinter = (np.abs(s.imag - strong.imag) < SPLINTER_WIDTHS * 2.0 * -strong.real) & (decays > 0.3) & (decays < 8.0)
        if not np.any(splinter):
            kept.append(int(i))
    return poles.take(np.sort(np.array(kept, dtype=int)))


def merged(poles: Poles) -> Poles:
    """Without the same mode twice: the stronger of two poles within `SAME_WIDTHS` stays."""
    order = np.argsort(-np.abs(poles.amplitude) ** 2 / -poles.pole.real)
    kept: list[int] = []
    for i in order:
        s = poles.pole[i]
        if not np.isfinite(s) or s.real >= 0:
            continue
        other = poles.pole[kept]
        width = 2.0 * np.minimum(-s.real, -other.real)
        if not np.any((np.abs(s.imag - other.imag) < SAME_WIDTHS * width) & (np.abs(np.log(s.real / other.real)) < 0.5)):
            kept.append(int(i))
    return poles.take(np.sort(np.array(kept, dtype=int)))


def first_starts(poles: Poles, contact: int) -> IntArray:
    """Clear of the contact, but never so late that a fast mode is gone."""
    return np.minimum(contact, np.floor(FIRST_START / np.maximum(-poles.pole.real, 1e-9))).astype(np.int64)


def onset_shift(ring: Ring, poles: Poles, rest: FloatArray, contact: int) -> int:
    """Samples by which the ring begins later than sample 0: the change point between noise and the extrapolated modes.

    It minimises sum_(n < n0) x^2 + sum_(n >= n0) (x - model)^2 over the stretch to the end of contact.
    """
    last = min(max(contact, 8), len(rest) - 1)
    x, r = ring.samples[:last], rest[:last]
    cost = np.concatenate([[0.0], np.cumsum(x**2 - r**2)])
    return int(np.argmin(cost)) if len(poles) else 0


def choose_starts(ring: Ring, poles: Poles, table: Profiles, shift: int) -> IntArray:
    """The start of the ladder with the least variance: as early as the residual lets it, but not before the change point."""
    out = np.zeros(len(poles), np.int64)
    ladder = STARTS_S + shift / ring.rate
    for m, s in enumerate(poles.pole):
        decay = -s.real * ring.rate
        usable = ladder[STARTS_S * decay < 2.5]
        band = table.near(s.imag * ring.rate / (2 * np.pi), decay)
        best, _ = best_start(band, decay, usable, max(1e-4, band.step_s))
        out[m] = int(round(usable[best] * ring.rate))
    return np.minimum(out, max(len(ring.samples) - 64, 0))


def restarted(ring: Ring, poles: Poles, fits: list[GroupFit], looks: Looks, still: float) -> list[GroupFit]:
    """Groups that do not reach the noise are fitted from the later starts too; the start with the least u against its own residual stays."""
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
    for offset in range(1, 7):
        groups, starts = [], np.zeros(len(poles), np.int64)
        for members, start in sick:
            later = STARTS_S[STARTS_S * ring.rate > start + 1]
            fastest = float(np.max(-poles.pole[members].real)) * ring.rate
            if len(later) >= offset and (later[offset - 1] - start / ring.rate) * fastest < 1.5:
                groups.append(members)
                starts[members] = int(later[offset - 1] * ring.rate)
        if not groups:
            break
        for g in fit_groups(ring, poles, groups, starts, looks, steps=6):
            for r in range(len(g.batch.members)):
                key = tuple(g.batch.members[r])
                value = _score(g, r)
                if value < 0.9 * score[key][0]:
                    score[key] = (value, g, r)
    return healthy + [_one_row(g, r) for _, g, r in score.values()]


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
        Batch(b.members[pick], b.start[pick], b.rows.take(np.array([r]))),
        RowFit(f.pole[pick], f.amplitude[pick], f.covariance[pick], f.chi2[pick], f.residual[pick], f.influence[pick]),
    )


def collect(ring: Ring, before: Poles, after: Poles, keep: np.ndarray, fits: list[GroupFit], table: Profiles) -> Settled:
    """Covariances of the modes kept: Fisher's, and the one that hears where in time the residual stands."""
    m = len(before)
    poles = Poles(before.pole.copy(), before.amplitude.copy())
    poles.pole[keep], poles.amplitude[keep] = after.pole, after.amplitude
    covariance, fisher = np.full((m, 2, 2), np.inf), np.full((m, 2, 2), np.inf)
    start, length, group = np.zeros(m, int), np.zeros(m, int), np.zeros(m, int)
    excess = np.full(m, np.inf)
    number = 0
    for g in fits:
        for r in range(len(g.batch.members)):
            members = g.batch.members[r]
            hz = float(np.mean(poles.pole[members].imag)) * ring.rate / (2 * np.pi)
            n = int(g.batch.rows.length[r])
            t0, t1 = g.batch.start[r] / ring.rate, n / ring.rate
            band = table.near(hz, float(np.max(-poles.pole[members].real)) * ring.rate)
            root = np.sqrt(g.batch.rows.weight[r])
            factor = spread_in_time(band, g.fit.influence[r], root, t0, t1)
            expected = float(band.mean_between(np.array([t0]), np.array([t0 + t1]))[0])
            ratio = float(g.fit.chi2[r] / g.freedom[r])
            local = _local_level(ring, g, r, ratio, hz)
            raise_by = np.sqrt(np.maximum(factor, 1.0) * max(local / max(expected, 1.0), 1.0)) * np.sqrt(min(max(local, 0.5), 1.0))
            for j, i in enumerate(members):
                block = g.fit.covariance[r, 2 * j : 2 * j + 2, 2 * j : 2 * j + 2]
                fisher[i] = block
                covariance[i] = block * raise_by[2 * j : 2 * j + 2, None] * raise_by[None, 2 * j : 2 * j + 2]
                start[i], length[i], excess[i], group[i] = g.batch.start[r], n, ratio, number
            number += 1
    return Settled(poles, covariance, fisher, start, length, excess, group).take(keep)


def _local_level(ring: Ring, g: GroupFit, r: int, ratio: float, hz: float) -> float:
    """Residual over assumed noise, the two estimates weighted by the bins behind each (the quiet's PSD has its own scatter)."""
    behind = float(ring.noise.bins_at(hz))
    here = float(g.freedom[r])
    if ratio > 1.6:
        return ratio
    return (behind + here * ratio) / (behind + here)


def worthy(s: Settled, ring: Ring, *, local: bool = False) -> np.ndarray:
    """Modes whose energy stands out of the residual around them: (a/u(a))^2 = rho^2/4 for a lone line (Fisher).

    A steady tone has no decay to be sure of; it stays while its amplitude stands out, to shield its neighbours. `local` asks the
    level of the mode's own bins only: while the others are still settling, their misfit must not speak against it.
    """
    a = -s.poles.pole.real
    with np.errstate(all="ignore"):
        variance = s.fisher[:, 0, 0] * np.clip(s.excess, 1.0, 30.0) if local else s.covariance[:, 0, 0]
        rho2 = 4 * a**2 / variance
    hz = s.poles.pole.imag * ring.rate / (2 * np.pi)
    inside = (hz > ring.low_hz) & (hz < ring.high_hz)
    level = ring.noise.at(hz) * ring.rate / 2 * np.maximum(s.excess, 1.0)
    tone = steady(s.poles, ring) & (np.abs(s.poles.amplitude) ** 2 * s.length / 4 > 16 * level)
    return np.asarray(inside & ((rho2 > LEAST_ENERGY) | tone))


def steady(poles: Poles, ring: Ring) -> np.ndarray:
    """Lines that do not decay within the ring, or that stood in the quiet before it with half their amplitude or more."""
    frames = len(ring.samples)
    flag = -poles.pole.real * frames < STEADY
    hz = poles.pole.imag * ring.rate / (2 * np.pi)
    for tone_hz, amplitude in zip(ring.noise.tones_hz, ring.noise.tone_amplitude, strict=True):
        near = np.abs(hz - tone_hz) < max(ring.noise.resolution_hz, 2 * ring.rate / frames)
        flag |= near & (-poles.pole.real * frames < 2.0) & (amplitude > 0.5 * np.abs(poles.amplitude))
    return np.asarray(flag)


def _nothing() -> Settled:
    zero = np.zeros(0, int)
    return Settled(Poles.none(), np.zeros((0, 2, 2)), np.zeros((0, 2, 2)), zero, zero, np.zeros(0), zero)
