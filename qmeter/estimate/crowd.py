"""Rings that do not reach the noise: many modes over one another. Found and fitted all together, and judged by how still they hold.

The fit is repeated over a fixed ladder of starts and lengths, never adapted to the answer. A mode's value is the weighted mean over
the rungs in which such a pole ought to show; what the rungs disagree by is the model part of its uncertainty.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qmeter.dsp.band import ring_sum
from qmeter.estimate.find import Poles, Ring, find_modes
from qmeter.estimate.joint import JointFit, fitted_amplitudes, joint_fit
from qmeter.estimate.ladder import Rungs, rungs_of, summary
from qmeter.estimate.poles import FloatArray

TURNS = 4
MOST = 120
"""modes fitted together at most"""
LONGEST_S, SHORTEST_S = 1.5, 0.25
LEAST_ENERGY = 30.0
"""rho^2 = 4 a^2 / u(a)^2 of a mode against the residual around it"""
RUNGS = (
    *((t, 1.0) for t in (0.0, 0.005, 0.012, 0.030, 0.070, 0.150)),
    *((t, 0.4) for t in (0.0, 0.012, 0.040)),
    *((t, 0.16) for t in (0.0, 0.005)),
)
"""(start after the end of contact in s, share of the full length)"""


@dataclass(frozen=True, slots=True)
class Crowd:
    """Modes with the two parts of their covariance, each (M, 2, 2) of (alpha, omega) per sample.

    held: (M,) share of the rungs that a mode held in. start, length: samples of the full fit.
    """

    poles: Poles
    fit: FloatArray
    model: FloatArray
    held: FloatArray
    start: int
    length: int


def crowd_modes(ring: Ring, poles: Poles, contact: int) -> Crowd:
    """All modes of a crowded ring, from the candidates `poles`."""
    poles = _loudest(poles)
    start = min(contact, len(ring.samples) // 4)
    length = _length_for(ring, poles, start)
    loudest = float(np.max(np.abs(ring.samples)))
    fit = joint_fit(ring, poles, start, length, steps=8)
    for turn in range(TURNS):
        kept = fit.poles.take(_credible(fit, poles, loudest))
        if turn == TURNS - 1 or not len(kept):
            break
        new = _new_modes(ring, kept)
        poles = _loudest(kept.plus(new))
        fit = joint_fit(ring, poles, start, length, steps=8)
    if not len(kept):
        none = np.zeros((0, 2, 2))
        return Crowd(Poles.none(), none, none, np.zeros(0), start, length)
    return _ladder(ring, kept, start, length)


def _loudest(poles: Poles) -> Poles:
    """The `MOST` of greatest energy: beyond, a cymbal's forest would take minutes and its modes could not be told apart anyway."""
    if len(poles) <= MOST:
        return poles
    energy = np.abs(poles.amplitude) ** 2 / -poles.pole.real
    return poles.take(np.sort(np.argsort(-energy)[:MOST]))


def _length_for(ring: Ring, poles: Poles, start: int) -> int:
    slow = float(np.quantile(-poles.pole.real, 0.1)) if len(poles) else 1.0
    wanted = np.clip(6.0 / slow, SHORTEST_S * ring.rate, LONGEST_S * ring.rate)
    return int(min(wanted, len(ring.samples) - start))


def _credible(fit: JointFit, seed: Poles, loudest: float) -> np.ndarray:
    """Determined against the residual, not run away from where it was seen, no giant."""
    decay = -fit.poles.pole.real
    with np.errstate(all="ignore"):
        rho2 = 4 * decay**2 / fit.covariance[:, 0, 0]
        ran = np.abs(np.log(decay / -seed.pole.real)) > np.log(2.7)
        ran |= np.abs(fit.poles.pole.imag - seed.pole.imag) > 2.6 * -seed.pole.real
    return np.asarray((rho2 > LEAST_ENERGY) & ~ran & (np.abs(fit.poles.amplitude) < 2.0 * loudest))


def _new_modes(ring: Ring, poles: Poles) -> Poles:
    """What shows in the residual, but no splinter of a mode that is there."""
    rest = ring.samples - ring_sum(poles.pole, poles.amplitude, 0, len(ring.samples))
    new = find_modes(replace(ring, samples=rest), rounds=1)
    energy = np.abs(poles.amplitude) ** 2 / -poles.pole.real
    keep = np.ones(len(new), bool)
    for i, s in enumerate(new.pole):
        near = np.abs(s.imag - poles.pole.imag) < 1.0 * np.maximum(-poles.pole.real, -s.real)
        keep[i] = not np.any(near & (np.abs(new.amplitude[i]) ** 2 / -s.real < 0.1 * energy))
    return new.take(keep)


def _ladder(ring: Ring, poles: Poles, start: int, length: int) -> Crowd:
    """The fixed ladder: every rung a joint fit from the same poles."""
    m = len(poles)
    values: tuple[list[FloatArray], ...] = tuple([] for _ in range(m))
    covariances: tuple[list[FloatArray], ...] = tuple([] for _ in range(m))
    asked = np.zeros(m, np.int64)
    for delay_s, share in RUNGS:
        t0 = start + int(delay_s * ring.rate)
        n = int(share * length)
        if t0 + n > len(ring.samples):
            n = len(ring.samples) - t0
        if n < 256:
            continue
        alive = np.flatnonzero(-poles.pole.real * (t0 - start) < 3.0)
        fit = joint_fit(ring, poles.take(alive), t0, n, steps=4)
        decay = -poles.pole.real[alive]
        ought = (decay * (t0 - start) < 1.5) & (decay * n > 0.8)
        ran = np.abs(np.log(-fit.poles.pole.real / decay)) > np.log(2.0)
        ran |= np.abs(fit.poles.pole.imag - poles.pole.imag[alive]) > 2.0 * decay
        told = 4 * fit.poles.pole.real**2 > 16.0 * fit.covariance[:, 0, 0]
        good = ought & ~ran & told & np.isfinite(fit.covariance[:, 0, 0])
        for j, i in enumerate(alive.tolist()):
            asked[i] += ought[j]
            if good[j]:
                values[i].append(np.array([-fit.poles.pole[j].real, fit.poles.pole[j].imag]))
                covariances[i].append(fit.covariance[j])
    rungs = Rungs(values, covariances, asked).plus(rungs_of(ring, poles, start, 1e-9))
    pole, fit_part, model_part = poles.pole.copy(), np.full((m, 2, 2), np.inf), np.full((m, 2, 2), np.inf)
    for k in range(m):
        if len(rungs.values[k]) < 2:
            continue
        mean, fit_part[k], model_part[k] = summary(np.array(rungs.values[k]), np.array(rungs.covariances[k]))
        pole[k] = -mean[0] + 1j * mean[1]
    settled = fitted_amplitudes(ring, Poles(pole, poles.amplitude), start, length)
    return Crowd(settled, fit_part, model_part, rungs.held(), start, length)
