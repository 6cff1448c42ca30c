"""The second route to Q: the width of the ring's own response curve at half the maximum dissipated power.

The power spectrum of a ring, the other modes taken away, is proportional to the power it dissipates when driven at that frequency: both
go as 1/((omega - omega_d)^2 + alpha^2) near resonance. So the curve is read where it peaks and where it falls to half. A record that ends
early widens it; the width is therefore held against that of a ring cut at the same length:

    |X(nu)|^2 ~ (1 - 2 E cos(2 pi nu T) + E^2) / (1 - 2 e cos(2 pi nu h) + e^2),  E = exp(-alpha T), e = exp(-alpha h)       (1)

the geometric sum over samples of step h and total length T, nu from the peak; for h -> 0 the textbook integral.

Nothing is shared with the fit but the record: the fit's values only say where to look and how much of the record to take.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

_LENGTH_IN_TIME_CONSTANTS = 3.5
"""u is least here, twice the bound; more of the ring brings noise, less of it a flatter curve"""
_GRID = np.linspace(-4.0, 4.0, 41)
"""where the curve is first looked at, in half-widths"""
_BOX_HALF_WIDTH = 0.44294647
"""half-width at half power of a ring that does not decay, times its length: sin(pi x)/(pi x) = 1/sqrt 2"""
_NEWTON_STEPS = 3
_FALSE_ALARM_FACTOR = 3.0


@dataclass(frozen=True, slots=True)
class ModeRing:
    """One mode's ring alone, from the start of the fit: a decimated complex envelope, or the real samples themselves (low Q)."""

    samples: Array | Complex
    """(n,) complex envelope, or real samples; other modes subtracted"""
    step_s: float
    offset_hz: float
    """damped frequency of the mode less the band's centre (real samples: the frequency itself)"""
    decay_rate_per_s: float
    noise_variance: float
    """mean square of one sample's noise (complex: of its modulus), white across the width of the mode; 0 where there is none"""


def ring_from_bins(
    residual_bins: Complex, centre: int, bin_hz: float, amplitude: complex, offset_hz: float, decay_rate_per_s: float, noise_psd: float
) -> ModeRing:
    """The ring of one mode from what the fit left in the bins around it: the fitted decay, sampled, plus the residual's own envelope.

    So nothing but the residual is interpolated between bins, and the ring starts with the record, with no transient of the band. The
    residual is `residual_bins` (m,), DFT bins of the record less all modes and their images, scaled so that a bin is a sum over samples
    times 2 / (number of samples): the amplitude of a lasting tone. `centre`: index in them of the band's centre, from which
    `offset_hz` counts. `amplitude`: of the analytic signal A exp(...) at the record's start. `noise_psd`: one-sided, per Hz.
    """
    count = residual_bins.size
    step = 1.0 / (count * bin_hz)
    pole = complex(-decay_rate_per_s, 2.0 * math.pi * offset_hz) * step
    residual = count * scipy.fft.ifft(np.roll(residual_bins, -centre))
    samples = amplitude * np.exp(pole * np.arange(count)) + residual
    # the analytic signal has twice the power: 2 S over the band's width
    return ModeRing(samples, step, offset_hz, decay_rate_per_s, 2.0 * noise_psd * count * bin_hz)


@dataclass(frozen=True, slots=True)
class Width:
    """What the response curve of one ring says; NaN where the curve has no two half-power points."""

    half_power_width_hz: float
    """as read, with the widening by the record's length"""
    decay_rate_per_s: float
    """pi times the width, corrected for the record's length"""
    u_decay_rate_per_s: float
    """standard uncertainty from the noise, first order"""
    offset_hz: float
    """of the peak"""

    def q(self, damped_frequency_hz: float) -> tuple[float, float]:
        """Q = sqrt(omega_d^2 + alpha^2)/(2 alpha) and its standard uncertainty, at the given damped frequency."""
        omega = 2.0 * math.pi * damped_frequency_hz
        value = math.hypot(omega, self.decay_rate_per_s) / (2.0 * self.decay_rate_per_s)
        per_decay = omega**2 / (2.0 * self.decay_rate_per_s**2 * math.hypot(omega, self.decay_rate_per_s))
        return value, per_decay * self.u_decay_rate_per_s


def half_power_route(ring: ModeRing, damped_frequency_hz: float) -> tuple[float, float]:
    """(Q, its standard uncertainty) of one ring; NaN where the curve has no two half-power points."""
    return half_power_widths([ring])[0].q(damped_frequency_hz)


def half_power_widths(rings: Sequence[ModeRing]) -> list[Width]:
    """The half-power width of each ring, all at once; rings of like length cost least together.

    The uncertainty is that of white noise of the stated variance. It holds while the ring's peak stands well above the noise (u below
    a fifth of the decay rate or so); clutter that was not subtracted is not in it.
    """
    results: list[Width | None] = [None] * len(rings)
    batches: dict[int, list[int]] = {}
    for place, ring in enumerate(rings):
        batches.setdefault(max(4, math.ceil(math.log2(_length(ring)))), []).append(place)
    for places in batches.values():
        for place, width in zip(places, _read([rings[place] for place in places]), strict=True):
            results[place] = width
    return [width for width in results if width is not None]


def _length(ring: ModeRing) -> int:
    wanted = math.ceil(_LENGTH_IN_TIME_CONSTANTS / (ring.decay_rate_per_s * ring.step_s))
    return max(2, min(ring.samples.size, wanted))


def _read(rings: Sequence[ModeRing]) -> list[Width]:
    """Curves of one batch: peak and half-power points on a grid, then Newton's steps on the exact transform."""
    lengths = np.array([_length(ring) for ring in rings])
    samples = np.zeros((len(rings), int(lengths.max())), dtype=np.complex128)
    for row, ring, length in zip(samples, rings, lengths, strict=True):
        row[:length] = _without_image(ring, int(length))
    step = np.array([ring.step_s for ring in rings])
    decay = np.array([ring.decay_rate_per_s for ring in rings])
    noise = np.array([ring.noise_variance for ring in rings])
    total = lengths * step
    guess = np.hypot(decay / (2.0 * math.pi), _BOX_HALF_WIDTH / total) * step  # in cycles a sample, as all frequencies here
    grid = np.array([ring.offset_hz for ring in rings])[:, None] * step[:, None] + guess[:, None] * _GRID
    floor = lengths * noise
    where, seen = _on_grid(grid, np.abs(_transform(samples, grid)) ** 2 - floor[:, None])
    where, moments = _refine(samples, where, guess, floor)
    width = where[:, 2] - where[:, 0]
    rate, per_width = _decay_of_width(width / step, total, step)
    u_width = np.sqrt(noise * _width_variance(where, moments, lengths))
    seen &= np.isfinite(rate) & (width > 0.0)
    rows = (width / step, rate, per_width * u_width / step, where[:, 1] / step)
    return [Width(*(float(row[place]) if seen[place] else math.nan for row in rows)) for place in range(len(rings))]


def _without_image(ring: ModeRing, length: int) -> Complex:
    """Samples less the ring's negative-frequency image, whose size and phase come from a linear fit of both at the fit's pole."""
    samples = ring.samples[:length]
    if np.iscomplexobj(samples):
        return samples.astype(np.complex128, copy=False)
    pole = complex(-ring.decay_rate_per_s, 2.0 * math.pi * ring.offset_hz) * ring.step_s
    wave = np.exp(pole * np.arange(length))
    # x = c w + conj(c w): two real equations in two unknowns
    power, cross, overlap = np.vdot(wave, wave).real, np.sum(wave**2), np.vdot(wave, samples)
    amplitude = (power * overlap - np.conj(cross) * np.conj(overlap)) / (power**2 - abs(cross) ** 2)
    without: Complex = samples - np.conj(amplitude * wave)
    return without


def _transform(samples: Complex, frequencies: Array) -> Complex:
    """(rows, k): sum of samples (rows, n) times exp(-2 pi i f n), f (rows, k) in cycles a sample; in two stages, so few exponentials."""
    rows, count = samples.shape
    inner = 1 << max(2, math.ceil(math.log2(count) / 2))
    outer = -(-count // inner)
    padded = np.zeros((rows, outer * inner), dtype=np.complex128)
    padded[:, :count] = samples
    turn = -2j * math.pi * frequencies[:, None, :]
    short = np.exp(turn * np.arange(inner)[None, :, None])
    long = np.exp(turn * (inner * np.arange(outer))[None, :, None])
    result: Complex = np.sum(np.matmul(padded.reshape(rows, outer, inner), short) * long, axis=1)
    return result


def _on_grid(grid: Array, power: Array) -> tuple[Array, npt.NDArray[np.bool_]]:
    """(rows, 3) lower half-power point, peak, upper half-power point; and whether all three were there."""
    rows = np.arange(power.shape[0])
    near = np.abs(_GRID) <= 2.0
    peak = np.argmax(np.where(near, power, -np.inf), axis=1)
    below = power < 0.5 * power[rows, peak][:, None]
    index = np.arange(power.shape[1])
    upper = np.argmax(below & (index > peak[:, None]), axis=1)
    lower = power.shape[1] - 1 - np.argmax((below & (index < peak[:, None]))[:, ::-1], axis=1)
    seen = (upper > peak) & (lower < peak) & (power[rows, peak] > 0.0)
    where = np.empty((power.shape[0], 3))
    where[:, 1] = grid[rows, peak]
    for column, outside, inside in ((0, lower, np.minimum(lower + 1, index[-1])), (2, upper, np.maximum(upper - 1, 0))):
        level_in, level_out = power[rows, inside], power[rows, outside]
        drop = level_in - level_out
        share = np.divide(level_in - 0.5 * power[rows, peak], drop, out=np.full_like(drop, 0.5), where=drop > 0.0)
        where[:, column] = grid[rows, inside] + np.clip(share, 0.0, 1.0) * (grid[rows, outside] - grid[rows, inside])
    return where, seen


def _refine(samples: Complex, where: Array, guess: Array, floor: Array) -> tuple[Array, Complex]:
    """Newton's steps to the peak and to both crossings; also the transform and its derivative there, (rows, 3, 2)."""
    rows, count = samples.shape
    turns = -2j * math.pi * np.arange(count)
    stacked = np.concatenate([samples, samples * turns, samples * turns**2])
    limit = 0.3 * guess[:, None]
    for step in range(_NEWTON_STEPS + 1):
        value, slope, bend = _transform(stacked, np.tile(where, (3, 1))).reshape(3, rows, 3)
        if step == _NEWTON_STEPS:
            break
        power = np.abs(value) ** 2 - floor[:, None]
        first = 2.0 * (np.conj(value) * slope).real
        second = 2.0 * (np.abs(slope) ** 2 + (np.conj(value) * bend).real)
        # the crossings follow the peak's power as it stands; it settles one step ahead of them
        excess = power - 0.5 * power[:, 1:2]
        with np.errstate(divide="ignore", invalid="ignore"):
            move = np.where([True, False, True], -excess / first, -first / second)
        where = where + np.clip(np.nan_to_num(move), -limit, limit)
    return where, np.stack([value, slope], axis=-1)


def _width_variance(where: Array, moments: Complex, lengths: npt.NDArray[np.intp]) -> Array:
    """Variance of the width in (cycles a sample)^2 for white noise of unit variance: first order in the noise at the three points.

    A point moves by -(dP - dP_peak/2)/P', dP = 2 Re(conj(X) N); E N_k conj(N_l) = sum over n of exp(-2 pi i (f_k - f_l) n).
    """
    value, slope = moments[..., 0], moments[..., 1]
    first = 2.0 * (np.conj(value) * slope).real
    with np.errstate(divide="ignore", invalid="ignore"):
        low, high = 1.0 / first[:, 0], -1.0 / first[:, 2]
        weights = np.stack([low, -0.5 * (low + high), high], axis=1) * np.conj(value)
        apart = where[:, :, None] - where[:, None, :]
        count = lengths[:, None, None]
        ratio = np.where(
            np.abs(apart) < 1e-12, count, (1.0 - np.exp(-2j * math.pi * apart * count)) / (1.0 - np.exp(-2j * math.pi * apart))
        )
    variance: Array = 2.0 * np.einsum("rk,rkl,rl->r", weights, ratio, np.conj(weights)).real
    return variance


def widened(decay_rate_per_s: Array, record_s: Array, step_s: Array | float = 0.0) -> Array:
    """Half-power width in Hz of a ring that is cut after `record_s` (no window), by equation (1); `step_s` 0: sampled without end."""
    low = np.zeros_like(decay_rate_per_s * record_s)
    high = np.hypot(decay_rate_per_s / (2.0 * math.pi), _BOX_HALF_WIDTH / record_s) * 2.2
    fine = np.maximum(step_s, 1e-3 / (decay_rate_per_s + 1.0 / record_s))
    for _ in range(60):
        middle = 0.5 * (low + high)
        above = _log_ratio(decay_rate_per_s, middle, record_s, fine) > 0.0
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    width: Array = low + high
    return width


def _log_ratio(decay: Any, away: Array, total: Array, step: Array) -> Any:
    """ln of twice the power at `away` Hz from the peak over that at the peak, by equation (1); analytic in `decay`."""

    def term(length: Array) -> Any:
        # 1 - 2 E cos x + E^2 = (1 - E)^2 + 4 E sin^2(x/2), without cancellation
        lost = -np.expm1(-decay * length)
        return np.log(1.0 + 4.0 * np.exp(-decay * length) * (np.sin(math.pi * away * length) / lost) ** 2)

    return math.log(2.0) + term(total) - term(step)


def _decay_of_width(width: Array, total: Array, step: Array) -> tuple[Array, Array]:
    """Decay rate whose ring, cut at `total`, has this half-power width; and its derivative. NaN where none is so narrow."""
    half = 0.5 * width
    free = (half * total) ** 2 - _BOX_HALF_WIDTH**2
    rate = 2.0 * math.pi / total * np.sqrt(np.maximum(free, 1e-3))
    for _ in range(8):
        # a derivative by a complex step has no rounding error (W. Squire, G. Trapp, SIAM Review 40 (1998) 110)
        tilted = _log_ratio(rate * (1.0 + 1e-20j), half, total, step)
        rate = rate * np.exp(np.clip(-tilted.real / (np.imag(tilted) * 1e20), -1.0, 1.0))
    tilted = _log_ratio(rate * (1.0 + 1e-20j), half, total, step)
    small = 1e-6 * half
    per_half = (_log_ratio(rate, half + small, total, step) - _log_ratio(rate, half - small, total, step)) / (2.0 * small)
    per_width = -0.5 * per_half * rate / (np.imag(tilted) * 1e20)
    settled = (free > 0.0) & (np.abs(tilted.real) < 1e-6)
    return np.where(settled, rate, np.nan), np.where(settled, per_width, np.nan)


def agreement(
    q_fit: float, u_fit: float, q_other: float, u_other: float, *, u_apart: float = 0.0, correlation: float | None = None
) -> tuple[float, bool]:
    """(normalised difference, whether the two agree): the difference over 3 of its standard uncertainties; they agree up to 1.

    Both routes read one record and so share its noise. Without a stated `correlation` the fit is taken to be efficient: what another
    estimator errs by beyond it is then uncorrelated with it, and the variance of the difference is u_other^2 - u_fit^2 (J. A. Hausman,
    "Specification tests in econometrics", Econometrica 46 (1978) 1251, from memory). No other route here comes nearer to the bound than
    a factor of two, so what `u_fit` has beyond half of u_other is no efficient fit's: that counts as independent noise. `u_apart` is
    what else either may be off by (the model part). Three, because twenty modes by two routes make forty comparisons.
    """
    if correlation is None:
        efficient = min(u_fit, 0.5 * u_other)
        variance = u_other**2 - efficient**2 + (u_fit**2 - efficient**2)
    else:
        variance = u_fit**2 + u_other**2 - 2.0 * correlation * u_fit * u_other
    combined = math.sqrt(variance + u_apart**2)
    difference = q_other - q_fit
    if not combined > 0.0:
        return (0.0, True) if difference == 0.0 else (math.copysign(math.inf, difference), False)
    normalised = difference / (_FALSE_ALARM_FACTOR * combined)
    return normalised, abs(normalised) <= 1.0
