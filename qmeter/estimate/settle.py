"""The fit that counts: every mode on enough of the ring, from the start that serves it best, with its neighbours.

Rounds: all groups are fitted at a common start; the residual then says when the knock is over, band by band, and with it the best
start of each mode; the fit is repeated there. Groups that do not reach the noise are looked at again from scratch (a close pair
fitted as one line). What does not stand out of its surroundings is dropped.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, replace

import numpy as np

from qmeter.dsp.noise import FloatArray
from qmeter.estimate.crowd import Crowd, crowd_modes
from qmeter.estimate.find import Pick, Poles, Ring, find_modes
from qmeter.estimate.groups import GroupFit, Looks, fit_groups, joint_groups, moved, rest_of
from qmeter.estimate.poles import IntArray
from qmeter.estimate.profile import Profiles, profiles, spread_in_time
from qmeter.estimate.prune import merged, swapped, unshattered
from qmeter.estimate.resolve import resolve
from qmeter.estimate.starts import choose_starts, first_starts, onset_shift, restarted

STEADY = 0.15
"""time constants within the whole ring below which a line is as good as a steady tone"""
TURNS = 4
"""times the residual is searched anew for modes"""
CROWDED = 4.0
"""chi2 over its expectation above which the misfit is other modes, not a knock that will be over: a late start would not help"""
PASSING = 30.0
"""chi2 over its expectation that a knock at the start may leave in a fit that is trusted all the same"""
SURE = 14
"""windows that must show a line where only some fits miss the noise: a knock makes up lines that nine to thirteen show"""
STILL = 1.0
"""standard uncertainties that a round of fits may move a mode by without asking for another"""
MOVED = 0.3
"""of its decay rate: a pole that a fit moves by less was subtracted well enough from its neighbours"""
LOOSE = 2.0
"""times the usual leash that a first fit may run: a pair in antiphase looks fast at first sight"""
REACH_WIDTHS = 4.0
"""half-power widths from a sick fit within which a crowd's modes may explain it"""
FOREST, FOREST_LEFT = 40, 0.02
"""candidates, and the share of the energy that they leave, of a ring that goes to the windows at once"""
FEW = 4
"""candidates that subtract each other well enough for one round"""
HEALTHY = 1.8
"""chi2 over its expectation below which a group has nothing left to explain"""
CROWD = 4
"""so many modes above CROWDED make a crowd, to be read through windows"""
EARLY, LATE = 0.5, 2.5
"""time constants that a start may come after the onset: while settling, and at the end"""
LEAST_Q = 2.0
"""below, a line is over before it has swung: a piece of the contact"""
LEAST_ENERGY = 40.0
"""(a/u(a))^2 = rho^2/4 must exceed a tenth of this: rho^2 over the local residual"""


@dataclass(frozen=True, slots=True)
class Settled:
    """Modes with the covariance of their fit.

    covariance: (M, 2, 2) of (alpha, omega) per sample, against the residual's spread in time and local level. fisher: the same for
    stationary noise of the measured spectrum. start: (M,) samples; length: (M,); excess: (M,) chi2 over its expectation.
    group: (M,) number of the joint group. model: (M, 2, 2), what the windows of a crowd disagree by.
    """

    poles: Poles
    covariance: FloatArray
    fisher: FloatArray
    start: IntArray
    length: IntArray
    excess: FloatArray
    group: IntArray
    model: FloatArray

    def take(self, which: Pick) -> Settled:
        return Settled(
            self.poles.take(which),
            self.covariance[which],
            self.fisher[which],
            self.start[which],
            self.length[which],
            self.excess[which],
            self.group[which],
            self.model[which],
        )


SHORTEST = 96
"""samples of ring below which nothing is fitted"""


def _joined(one: Settled, other: Settled) -> Settled:
    parts = [np.concatenate([getattr(one, f.name), getattr(other, f.name)]) for f in fields(Settled) if f.name != "poles"]
    return Settled(one.poles.plus(other.poles), *parts)


def settle(ring: Ring, poles: Poles, contact: int) -> Settled:
    """Final values of the candidates `poles`; `contact` is the sample at which the contact force has ended."""
    if len(ring.samples) < SHORTEST or not len(poles):
        return _nothing()
    candidates = unshattered(poles)
    first = _first_fit(ring, candidates, contact)
    # where every fit ran away (a pair in antiphase, seen as one line) the candidates themselves are what there is to resolve
    state = _State.of(ring, first if len(first) else merged(candidates), contact)
    sick = 0
    for turn in range(TURNS):
        for _ in range(2):
            came = state.poles
            state, last = _sweep(ring, state, contact, careful=turn > 0, resolving=True)
            whole = len(state.poles) == len(came)  # a fit that was well with a pole that has been dropped is not well without it
            if len(state.excess) and ((whole and np.max(state.excess) < HEALTHY) or _hopeless(state)):
                break
        sick, before = int(np.count_nonzero(last.excess > CROWDED)), sick
        if sick >= CROWD:
            return settle_forest(ring, contact)
        if turn and sick >= before > 0:  # another search did not help
            break
        new = _looked_again(ring, state) if turn < TURNS - 1 else Poles.none()
        if not len(new):
            break
        state = _State.of(ring, state.poles.plus(new), contact)
    settled = last if _at_rest(came, last, state) else _final(ring, state, contact)
    settled = settled.take(worthy(settled, ring))
    clean = settled.excess < CROWDED
    if len(settled.poles) and clean.all():
        return settled.take(~steady(settled.poles, ring))
    seen = crowd_modes(ring, contact)
    crowd = _from_crowd(seen.take((seen.seen >= SURE) & _beside(seen.poles, settled.poles.take(~clean))), ring)
    return _completed(ring, settled.take(clean | _better_than(settled, crowd)), crowd)


def _at_rest(came: Poles, last: Settled, state: _State) -> bool:
    """Whether the last round of fits moved nothing that counts, all of it reaches the noise, and no mode asked for a later start."""
    if not 0 < len(came) == len(last.poles) == len(state.poles):
        return False
    moved_by = np.abs(last.poles.pole - came.pole) / np.sqrt(last.covariance[:, 0, 0])
    free = last.start * -last.poles.pole.real < 0.8 * EARLY
    return bool(np.all(state.poles.pole == last.poles.pole) and np.max(last.excess) < HEALTHY and np.max(moved_by) < STILL and np.all(free))


def _final(ring: Ring, state: _State, contact: int) -> Settled:
    """Once or twice more, from starts as late as serves each mode."""
    for _ in range(2):
        known = state.excess
        state, settled = _sweep(ring, state, contact, careful=True, resolving=False)
        if len(known) and np.max(known) < HEALTHY and len(state.poles) == len(known):
            break
    return settled


def settle_forest(ring: Ring, contact: int) -> Settled:
    """The modes of a ring whose candidates are so many, and explain it so badly, that fits of groups would be lost labour."""
    return _from_crowd(crowd_modes(ring, contact), ring)


def is_forest(candidates: Poles, left: float) -> bool:
    """Whether it is one; `left`: share of the energy that the candidates leave. Clean rings leave less than a thousandth."""
    return left > FOREST_LEFT and len(unshattered(candidates)) >= FOREST


def _beside(poles: Poles, sick: Poles) -> np.ndarray:
    """(M,) which lie within `REACH_WIDTHS` of a mode whose fit does not reach the noise: elsewhere there is nothing to explain."""
    apart = np.abs(poles.pole.imag[:, None] - sick.pole.imag[None, :])
    reach = REACH_WIDTHS * 2.0 * np.maximum(-poles.pole.real[:, None], -sick.pole.real[None, :])
    return np.asarray(np.any(apart < reach, axis=1))


def _hopeless(state: _State) -> bool:
    """Whether so many fits miss the noise that another round would not help; a swap of poles just made is given its round."""
    return int(np.count_nonzero(np.isfinite(state.excess) & (state.excess > CROWDED))) >= 3 * CROWD


def _better_than(settled: Settled, crowd: Settled) -> np.ndarray:
    """(M,) settled modes that the crowd's fit knows too, agrees with, and knows less well (a knock passes, and a late start escapes it)."""
    out = np.zeros(len(settled.poles), bool)
    if not len(crowd.poles):
        return out
    for i, s in enumerate(settled.poles.pole):
        j = int(np.argmin(np.abs(crowd.poles.pole.imag - s.imag)))
        theirs = crowd.covariance[j] + crowd.model[j]
        off = np.array([crowd.poles.pole[j].real - s.real, crowd.poles.pole[j].imag - s.imag])
        mine = settled.covariance[i]
        near = bool(np.all(off**2 < 9.0 * (np.diagonal(theirs) + np.diagonal(mine))))
        out[i] = near and mine[0, 0] < theirs[0, 0] and settled.excess[i] < PASSING
    return out


def _completed(ring: Ring, clean: Settled, crowd: Settled) -> Settled:
    """The modes that reach the noise as they are, and of the crowd those that are not among them."""
    keep = np.ones(len(crowd.poles), bool)
    for i, s in enumerate(crowd.poles.pole):
        keep[i] = not np.any(np.abs(s.imag - clean.poles.pole.imag) < np.maximum(-s.real, -clean.poles.pole.real))
    both = _joined(clean, crowd.take(keep))
    return both.take(~steady(both.poles, ring))


def _from_crowd(crowd: Crowd, ring: Ring) -> Settled:
    """The modes of a crowd that held still, in the form of the others."""
    m = len(crowd.poles)
    fit, start, length = crowd.fit, np.full(m, crowd.start), np.full(m, crowd.length)
    settled = Settled(crowd.poles, fit, fit, start, length, np.full(m, np.inf), np.arange(m), crowd.model)
    hz = crowd.poles.pole.imag * ring.rate / (2 * np.pi)
    return settled.take(~steady(crowd.poles, ring) & (hz > ring.low_hz) & (hz < ring.high_hz))


@dataclass(frozen=True, slots=True)
class _State:
    """Poles, what they leave of the ring, and how that is spread over time."""

    poles: Poles
    rest: FloatArray
    table: Profiles
    excess: FloatArray
    shift: int

    @staticmethod
    def of(ring: Ring, poles: Poles, contact: int) -> _State:
        rest = rest_of(ring, poles)
        shift = onset_shift(ring, poles, rest, contact)
        heard = rest
        if shift:
            # before the change point the model speaks and the ring does not yet: that is no residual of any fit
            heard = rest.copy()
            heard[:shift] = 0.0
        return _State(poles, rest, profiles(ring, heard, poles), np.full(len(poles), np.inf), shift)


def _limits(ring: Ring) -> tuple[float, float]:
    """Loudest sample, and the decay rate (per sample) below which a line is as good as steady."""
    return float(np.max(np.abs(ring.samples), initial=0.0)), STEADY / len(ring.samples)


def _first_fit(ring: Ring, poles: Poles, contact: int) -> Poles:
    """Fitted at a common early start, and once more where that moved them: rough candidates subtract each other badly."""
    loudest, still = _limits(ring)
    for _ in range(1 if len(poles) <= FEW else 2):
        poles = merged(poles)
        starts = first_starts(poles, contact, len(ring.samples))
        fits = fit_groups(
            ring, poles, joint_groups(poles, still), starts, Looks(ring, rest_of(ring, poles)), still, steps=6, loudest=loudest
        )
        before = poles
        poles, kept = moved(before, fits, loudest, still, LOOSE)
        was = before.pole[kept]
        if np.all(np.abs(poles.pole - was) < MOVED * -was.real):
            break
    return poles


def _sweep(ring: Ring, state: _State, contact: int, *, careful: bool, resolving: bool) -> tuple[_State, Settled]:
    """Fit every group once at its best start; drop what is not worthy, replace groups whose bins ask for other poles."""
    loudest, still = _limits(ring)
    before = state.poles
    if not len(before):
        return state, _nothing()
    latest = np.full(len(before), EARLY) if resolving else np.where(state.excess < CROWDED, LATE, EARLY)
    starts = choose_starts(ring, before, state.table, state.shift, latest)
    looks = Looks(ring, state.rest)
    fits = fit_groups(ring, before, joint_groups(before, still), starts, looks, still, steps=6, loudest=loudest)
    if careful:
        fits = restarted(ring, before, fits, looks, still)
    poles, keep = moved(before, fits, loudest, still)
    after = _State.of(ring, poles, contact)
    settled = collect(ring, before, poles, keep, fits, after.table)
    after = replace(after, excess=settled.excess)
    if not resolving:
        return after, settled
    swaps = resolve(before, fits, 1.5, loudest)
    stays = keep.copy()
    stays[keep] = worthy(settled, ring, local=True)
    full = Poles(before.pole.copy(), before.amplitude.copy())
    full.pole[keep], full.amplitude[keep] = poles.pole, poles.amplitude
    if swaps:
        trial = _State.of(ring, merged(swapped(full, stays, swaps)), contact)
        late = int(np.median(starts))
        if np.sum(trial.rest[late:] ** 2) < 1.02 * np.sum(after.rest[late:] ** 2):
            return trial, settled
    plain = merged(full.take(stays))
    return (_State.of(ring, plain, contact) if len(plain) < len(poles) else after), settled


def _looked_again(ring: Ring, state: _State) -> Poles:
    """Modes that show in the residual now that the others are well subtracted, but no splinters of these."""
    new = find_modes(replace(ring, samples=state.rest), rounds=1)
    poles = state.poles
    energy = np.abs(poles.amplitude) ** 2 / -poles.pole.real
    keep = np.ones(len(new), bool)
    for i, s in enumerate(new.pole):
        near = np.abs(s.imag - poles.pole.imag) < 1.0 * np.maximum(-poles.pole.real, -s.real)
        mine = np.abs(new.amplitude[i]) ** 2 / -s.real
        keep[i] = not np.any(near & (mine < 0.1 * energy))
    return new.take(keep)


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
    return Settled(poles, covariance, fisher, start, length, excess, group, np.zeros((m, 2, 2))).take(keep)


def _local_level(ring: Ring, g: GroupFit, r: int, ratio: float, hz: float) -> float:
    """Residual over assumed noise, the two estimates weighted by the bins behind each (the quiet's PSD has its own scatter)."""
    behind = float(ring.noise.bins_at(hz))
    here = float(g.freedom[r])
    if ratio > 1.6:
        return ratio
    # the level is a mean over so many bins and itself uncertain by 1/sqrt(their number): half of that on the safe side
    return (behind + here * ratio) / (behind + here) * (1.0 + 0.5 / math.sqrt(behind + here))


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
    if not local:
        inside &= s.poles.pole.imag > 2.0 * LEAST_Q * a
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
    return Settled(Poles.none(), np.zeros((0, 2, 2)), np.zeros((0, 2, 2)), zero, zero, np.zeros(0), zero, np.zeros((0, 2, 2)))
