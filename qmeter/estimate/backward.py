"""The third route, the backward-integrated decay of one mode's band, and whether the decay is straight at all.

The backward integral (M. R. Schroeder, "New method of measuring reverberation time", J. Acoust. Soc. Am. 37 (1965) 409) of the envelope's
power, the noise taken off, is cut where the ring meets the noise, and the energy beyond the cut, which the fitted line itself foretells,
is put back. Both are needed: to put it back without taking off the noise makes the decay too long.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from qmeter.estimate.half_power import ModeRing
from qmeter.relations import DECIBELS_PER_NEPER, T60_TIMES_DECAY_RATE

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

_TOP_DB, _BOTTOM_DB, _LONG_BOTTOM_DB = -5.0, -25.0, -35.0
"""the ranges of T20 and T30 in ISO 3382; the shorter one has half the uncertainty"""
_CLEAR_DB = 7.0
"""the line ends this far above the cut"""
_LEAST_DB = 6.0
"""a shorter line says nothing"""
_PER_DB = 10.0 / math.log(10.0)
_STRAIGHT_P = 0.004
"""for the loss and for the frequency each, so that a straight decay is called bent at most once in a hundred times"""
_PATIENCE = 20
_STEPS = 6


@dataclass(frozen=True, slots=True)
class Backward:
    """What the backward-integrated decay of one ring says; NaN where too few decibels stand above the noise."""

    t60_s: float
    u_t60_s: float
    """standard uncertainty from the noise, first order"""
    range_db: tuple[float, float]
    """of the fitted line, below the start of the ring"""
    curvature_percent: float
    """after ISO 3382-2:2008 Annex B, C = 100 (T30/T20 - 1), the ranges in the same proportion where there are fewer decibels"""

    def q(self, damped_frequency_hz: float) -> tuple[float, float]:
        """Q and its standard uncertainty at the given damped frequency."""
        decay = T60_TIMES_DECAY_RATE / self.t60_s
        omega = 2.0 * math.pi * damped_frequency_hz
        value = math.hypot(omega, decay) / (2.0 * decay)
        return value, omega**2 / (4.0 * decay**2 * value) * self.u_t60_s / self.t60_s


@dataclass(frozen=True, slots=True)
class Slope:
    """The straight piece of a decay between two levels below its start."""

    from_db: float
    to_db: float
    decay_rate_per_s: float
    u_decay_rate_per_s: float
    offset_hz: float
    """from the band's centre, as in `ModeRing`"""
    u_offset_hz: float


@dataclass(frozen=True, slots=True)
class Bend:
    """Whether loss or frequency change as the ring decays: chances that a straight decay looks as bent as this, and both halves."""

    loss_p: float
    """small: the loss changes (two slopes, or a loss that depends on the amplitude)"""
    glide_p: float
    """small: the frequency changes"""
    early: Slope
    late: Slope

    @property
    def is_curved(self) -> bool:
        """Beyond the noise; how far beyond is for `late` over `early` to say."""
        return self.loss_p < _STRAIGHT_P

    @property
    def is_gliding(self) -> bool:
        return self.glide_p < _STRAIGHT_P


# ---- backward integral ----


def backward_energy(power: Array, noise_power: float = 0.0, tail: float = 0.0) -> Array:
    """(n,) sum of `power` less its noise from each sample to the last, plus `tail` for what lies beyond."""
    return np.cumsum((power - noise_power)[::-1])[::-1] + tail


def line_t60(energy: Array, step_s: float, top_db: float, bottom_db: float) -> float:
    """T60 in s from the least-squares line through a backward integral, `top_db` to `bottom_db` below its first sample.

    EDT is 0 to -10, T20 -5 to -25, T30 -5 to -35 (ISO 3382-1:2009, ISO 3382-2:2008).
    """
    first, last = _span(energy, top_db, bottom_db)
    if last - first < 2:
        return math.nan
    level = _PER_DB * np.log(energy[first:last])
    return float(-60.0 * step_s / (_line_weights(last - first, 0.0)[0] @ level))


def _span(energy: Array, top_db: float, bottom_db: float) -> tuple[int, int]:
    """First sample at or below the top, first one below the bottom."""
    ratio = energy / energy[0] if energy[0] > 0.0 else np.zeros_like(energy)
    under = ratio < 10.0 ** (bottom_db / 10.0)
    last = int(np.argmax(under)) if under.any() else ratio.size
    return int(np.argmax(ratio <= 10.0 ** (top_db / 10.0) * (1.0 + 1e-12))), last


def _line_weights(count: int, at: float) -> tuple[Array, Array]:
    """Weights of equally spaced samples in the line's slope per step, and in its value `at` steps after the first."""
    away = np.arange(count, dtype=np.float64) - 0.5 * (count - 1)
    slope_of = away * (12.0 / (count * (count * count - 1.0)))
    return slope_of, 1.0 / count + slope_of * (at - 0.5 * (count - 1))


def backward_integral_route(power: Array, step_s: float, noise_power: float, decay_rate_per_s: float) -> Backward:
    """The third route on a band's squared envelope.

    `power`: (n,) squared modulus of the complex envelope, samples of independent noise of mean square `noise_power`; `decay_rate_per_s`
    says where the ring meets the noise, no more. The uncertainty follows every sample's noise, 2 |s|^2 var + var^2, through integral,
    tail and line.
    """
    decay = 2.0 * decay_rate_per_s * step_s
    start = _start_power(power, noise_power, decay)
    if not start > 0.0:
        return _NOTHING
    if start <= noise_power:
        return _NOTHING
    cut = power.size if noise_power == 0.0 else min(power.size, math.ceil(math.log(start / noise_power) / decay))
    depth = _PER_DB * decay * cut
    reach = -max(depth - _CLEAR_DB, 0.6 * depth)
    bottom = max(_BOTTOM_DB, reach)
    top = max(_TOP_DB, 0.2 * bottom)
    if top - bottom < _LEAST_DB or cut < 4:
        return _NOTHING
    energy = backward_energy(power[:cut], noise_power)
    tail = start * math.exp(-decay * cut) / -math.expm1(-decay)
    for _ in range(_PATIENCE):
        first, last = _span(energy + tail, top, bottom)
        if last - first < 3 or energy[last - 1] + tail <= 0.0:
            return _NOTHING
        slope_of, at_cut = _line_weights(last - first, cut - first)
        with_tail = energy[first:last] + tail
        level = np.log(with_tail)
        foretold = math.exp(min(float(at_cut @ level), 700.0))
        if abs(foretold - tail) < 1e-4 * tail:
            break
        # Newton's step on foretold(tail) = tail, held within a factor
        tail *= min(max(1.0 + (foretold / tail - 1.0) / (1.0 - foretold * float(np.sum(at_cut / with_tail))), 0.3), 3.0)
    slope = float(slope_of @ level)
    if not slope < 0.0:
        return _NOTHING
    weights = _sample_weights(slope_of, at_cut, with_tail, tail, first, cut)
    signal = start * np.exp(slope * np.arange(cut))
    u_slope = math.sqrt(float(weights**2 @ (2.0 * signal * noise_power + noise_power**2)))
    t60 = -6.0 * math.log(10.0) * step_s / slope
    curvature = _curvature(energy + tail, step_s, top, max(_LONG_BOTTOM_DB, reach))
    return Backward(t60, t60 * u_slope / -slope, (float(top), float(bottom)), curvature)


def _curvature(energy: Array, step_s: float, top_db: float, bottom_db: float) -> float:
    """C in per cent: the whole range against its upper two thirds, as -5 to -35 dB against -5 to -25 dB."""
    middle_db = top_db + (bottom_db - top_db) * 2.0 / 3.0
    return 100.0 * (line_t60(energy, step_s, top_db, bottom_db) / line_t60(energy, step_s, top_db, middle_db) - 1.0)


_NOTHING = Backward(math.nan, math.nan, (math.nan, math.nan), math.nan)


def _start_power(power: Array, noise_power: float, decay: float) -> float:
    """Power of the ring at the first sample, from its first time constant of energy."""
    count = max(1, min(power.size, round(1.0 / decay)))
    expected = -math.expm1(-decay * count) / -math.expm1(-decay)
    return float(np.sum(power[:count]) - count * noise_power) / expected


def _sample_weights(slope_of: Array, at_cut: Array, energy: Array, tail: float, first: int, cut: int) -> Array:
    """(cut,) by how much each sample's power moves the slope: directly, and through the tail, which the line foretells from them.

    With E_n the sum from n on plus the tail C, d slope = sum w_n (dE_n + dC)/E_n and dC = C sum v_n (dE_n + dC)/E_n, v the weights of
    the line's value at the cut.
    """
    share = at_cut / energy
    feedback = tail * float(np.sum(slope_of / energy)) / (1.0 - tail * float(np.sum(share)))
    per_energy = slope_of / energy + feedback * share
    weights = np.zeros(cut)
    weights[first : first + energy.size] = per_energy
    result: Array = np.cumsum(weights)
    return result


def backward_integrals(rings: Sequence[ModeRing]) -> list[Backward]:
    """The third route for each ring (complex envelopes)."""
    return [backward_integral_route(np.abs(ring.samples) ** 2, ring.step_s, ring.noise_variance, ring.decay_rate_per_s) for ring in rings]


# ---- straight or not ----


def bend(ring: ModeRing) -> Bend | None:
    """Test the decay of one ring (complex envelope) against a straight one; None where fewer than ten samples or 6 dB stand out.

    The envelope over the fitted decay is regressed, weighted by that decay's power, on 1, t, t^2 and exp(-alpha t): the first two
    only mend the fit's pole, the others are what a second slope or a loss linear in the amplitude add to first order. Their real
    parts against their covariance are chi-squared with two degrees of freedom; so are their imaginary parts, for the frequency. The
    noise is the stated one or what the regression leaves, whichever is more.
    """
    decay = ring.decay_rate_per_s * ring.step_s
    start = _start_power(np.abs(ring.samples) ** 2, ring.noise_variance, 2.0 * decay)
    if not start > ring.noise_variance:
        return None
    meets = 0.5 * math.log(start / ring.noise_variance) / decay if ring.noise_variance > 0.0 else math.inf
    count = int(min(ring.samples.size, math.ceil(meets)))
    depth_db = DECIBELS_PER_NEPER * decay * count
    if count < 10 or depth_db < _LEAST_DB:
        return None
    samples = np.asarray(ring.samples[:count], dtype=np.complex128)
    index = np.arange(count, dtype=np.float64)
    time = index * decay
    pole = complex(-decay, 2.0 * math.pi * ring.offset_hz * ring.step_s)
    loss_p, glide_p, noise = _chances(samples, np.exp(pole * index), time, ring.noise_variance)
    half = max(3, count // 2)
    return Bend(
        loss_p,
        glide_p,
        _slope(samples[:half], pole, ring.step_s, noise, (0.0, -depth_db * half / count)),
        _slope(samples[half:], pole, ring.step_s, noise, (-depth_db * half / count, -depth_db)),
    )


def _chances(samples: Complex, wave: Complex, time: Array, noise: float) -> tuple[float, float, float]:
    """Chances of the bend in loss and in frequency for a straight decay, and the noise variance that was taken."""
    size = np.abs(wave)
    # orthogonal shapes under the weight |wave|^2, so that the later ones are free of the earlier
    basis, _ = np.linalg.qr(np.stack([size, time * size, time**2 * size, np.exp(-time) * size], axis=1))
    turned = samples * np.conj(wave) / size
    parts = basis.T @ turned
    left = float(np.sum(np.abs(turned - basis @ parts) ** 2)) / max(time.size - 4, 1)
    variance = max(noise, left, 1e-24 * float(np.max(np.abs(samples))) ** 2)
    # relative to the ring's own phase: real is loss, imaginary is frequency
    bent = parts[2:] * np.conj(parts[0]) / abs(parts[0])
    loss, glide = (float(np.sum(part**2)) / (0.5 * variance) for part in (bent.real, bent.imag))
    # the upper tail of chi-squared with two degrees of freedom
    return math.exp(-0.5 * loss), math.exp(-0.5 * glide), variance


def _slope(samples: Complex, pole: complex, step_s: float, noise: float, levels: tuple[float, float]) -> Slope:
    """Pole of one piece by Gauss-Newton steps: the linear term of the envelope over the last pole mends it."""
    index = np.arange(samples.size)
    for _ in range(_STEPS):
        wave = np.exp(pole * index)
        weight = np.abs(wave) ** 2
        centre = float(weight @ index) / float(np.sum(weight))
        away = index - centre
        mean = np.vdot(wave, samples) / np.sum(weight)
        tilt = np.sum(np.conj(wave) * samples * away) / float(weight @ away**2)
        move = complex(tilt / mean)
        pole += move if abs(move) < 1.0 / samples.size else move / abs(move) / samples.size
        if abs(move) * samples.size < 1e-3:
            break
    u = math.sqrt(0.5 * noise / float(weight @ away**2)) / float(abs(mean)) / step_s
    return Slope(*levels, -pole.real / step_s, u, pole.imag / (2.0 * math.pi * step_s), u / (2.0 * math.pi))
