"""The noise spectrum of a quiet stretch, and the steady tones that stand in it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

_BANDS_PER_OCTAVE = 3
_BINS_AT_LEAST = 64
"""bins per knot of the spectrum: some 60 independent bins give 13 % in power, 6 % in a stated uncertainty"""
_HANN_CORRELATION = 1.94
"""Hann weights correlate neighbouring bins: variance of a mean of N powers over that of N independent ones, 1 + 2 (4/9) + 2 (1/36)"""
_LOWEST_HZ = 16.0
"""below it drift and rumble follow another law, and no mode is sought"""
_SLOPE_CHANGE = 0.5
"""expected change of slope (of ln PSD over ln f) from knot to knot: half of what tells white from pink; keeps thin data smooth"""
_TONE_OVER_NOISE = 18.0
"""power of a Hann bin over its surroundings that noise reaches once in exp(18) = 7e7 bins"""


@dataclass(frozen=True, slots=True)
class NoiseSpectrum:
    """One-sided power spectral density of the noise, piecewise linear in log-log, and the tones in it.

    grid_hz, psd: (P,); psd in full scale^2/Hz. bins: (P,) how many independent bins stand behind each point.
    tones_hz, tone_amplitude: (T,) steady lines that stand out of the quiet (peak amplitude).
    """

    grid_hz: FloatArray
    psd: FloatArray
    bins: FloatArray
    tones_hz: FloatArray
    tone_amplitude: FloatArray
    resolution_hz: float = 1.0
    """bin width of the spectrum it was read from"""

    def at(self, frequency_hz: FloatArray | float) -> FloatArray:
        """PSD at these frequencies."""
        return np.asarray(np.exp(np.interp(frequency_hz, self.grid_hz, np.log(self.psd))))

    def bins_at(self, frequency_hz: FloatArray | float) -> FloatArray:
        """Independent bins behind the PSD at these frequencies."""
        return np.asarray(np.interp(frequency_hz, self.grid_hz, self.bins))

    def scaled(self, factor: float) -> NoiseSpectrum:
        """The same spectrum, `factor` times the power."""
        return NoiseSpectrum(self.grid_hz, self.psd * factor, self.bins, self.tones_hz, self.tone_amplitude, self.resolution_hz)


def fast_length(at_most: int) -> int:
    """The largest even 5-smooth length <= at_most: transforms of it are quick."""
    if at_most < 16:
        return at_most
    best = 16
    for three in (1, 3, 9, 27, 81):
        for five in (1, 5, 25, 125):
            base = 2 * three * five
            if base <= at_most:
                best = max(best, base << ((at_most // base).bit_length() - 1))
    return best


def noise_spectrum(quiet: FloatArray, rate: float, *, quantum: float = 0.0) -> NoiseSpectrum:
    """PSD of a stretch that holds noise and perhaps steady tones.

    Hann-weighted periodogram, smoothed by a maximum-likelihood fit that is piecewise linear in log-log; bins that stand out are
    tones and do not count. `quantum` is the step of the samples: its rectangular noise, step^2/12 over the whole band, is the least
    PSD assumed (an exactly silent stretch would otherwise claim a perfect recording).
    """
    n = fast_length(len(quiet))
    x = quiet[-n:] - np.mean(quiet[-n:])
    window = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(n) / n)
    lowest = min(max(int(_LOWEST_HZ * n / rate), 1), n // 4)
    spectrum = scipy.fft.rfft(x * window)[lowest:]
    frequency: FloatArray = np.arange(lowest, n // 2 + 1, dtype=np.float64) * (rate / n)
    floor = max(quantum**2 / 6.0 / rate, 1e-32)
    power = np.maximum(np.abs(spectrum) ** 2 * (2.0 / (rate * np.sum(window**2))), floor * 1e-3)
    fine = _fine_edges(len(power))
    used = power < 12.0 * _coarse_level(power, fine)
    level, knots, informed = _smooth_level(power, frequency, fine, used)
    tone = _tone_bins(power / level)
    if tone.any():
        for k in np.flatnonzero(tone):
            used[max(k - 3, 0) : k + 4] = False
        level, knots, informed = _smooth_level(power, frequency, fine, used)
        tone = _tone_bins(power / level)
    peaks = _peaks_of(tone, power / level)
    amplitude = 2.0 * np.abs(spectrum[peaks]) / np.sum(window)
    psd = np.maximum(np.exp(np.interp(np.log(knots), np.log(frequency), np.log(level))), floor)
    return NoiseSpectrum(knots, psd, informed, _refined(power, peaks, lowest, rate / n), amplitude, rate / n)


def white_noise(psd: float, rate: float) -> NoiseSpectrum:
    """A flat spectrum, for where there was nothing to measure it from."""
    grid = np.array([1.0, rate / 2])
    return NoiseSpectrum(grid, np.full(2, psd), np.full(2, 4.0), np.zeros(0), np.zeros(0))


def _smooth_level(
    power: FloatArray, frequency: FloatArray, fine: NDArray[np.int64], used: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Level of each bin, the knots it is interpolated from (Hz), and the independent bins behind each knot.

    ln PSD is piecewise linear in ln f, fitted to exponentially distributed powers P by maximum likelihood (P. Whittle, Ark. Mat. 2
    (1953) 423): minimise sum (ln S + P/S), by Fisher scoring on sums over fine bands.
    """
    x = np.log(frequency)
    edges = _knot_edges(len(power))
    inner = edges[1:-1]
    knots = np.concatenate([[x[0]], 0.5 * (x[inner - 1] + x[inner]), [x[-1]]])
    count = np.add.reduceat(used.astype(float), fine[:-1])
    total = np.add.reduceat(np.where(used, power, 0.0), fine[:-1])
    basis = _hats(np.add.reduceat(x, fine[:-1]) / np.diff(fine), knots)
    bend = _bends(knots) / _SLOPE_CHANGE
    stiff = bend.T @ bend + 1e-9 * np.eye(len(knots))
    inverse = np.linalg.inv((basis.T * count) @ basis + stiff)
    start = np.log(np.maximum(total, 1e-300) / np.maximum(count, 1.0))
    # the mean of ln P is -0.577 where that of P is 1, and tends to 0 for the sums of many bins
    beta = inverse @ ((basis.T * count) @ (start + np.euler_gamma / np.maximum(count, 1.0)))
    for _ in range(20):
        ratio = total * np.exp(-np.clip(basis @ beta, -690.0, 690.0))
        step = inverse @ (basis.T @ (ratio - count) - stiff @ beta)
        beta = beta + np.clip(step, -1.0, 1.0)
        if np.max(np.abs(step)) < 1e-3:
            break
    informed = 1.0 / np.maximum(np.diagonal(inverse), 1e-9) / _HANN_CORRELATION
    return np.exp(np.interp(x, knots, beta)), np.exp(knots), informed


def _bends(knots: FloatArray) -> FloatArray:
    """Change of slope at each inner knot, (K-2, K)."""
    gap = np.diff(knots)
    out = np.zeros((max(len(knots) - 2, 0), len(knots)))
    for i in range(len(out)):
        out[i, i : i + 3] = 1 / gap[i], -1 / gap[i] - 1 / gap[i + 1], 1 / gap[i + 1]
    return out


def _hats(x: FloatArray, knots: FloatArray) -> FloatArray:
    """Weights of linear interpolation, (len(x), len(knots))."""
    i = np.clip(np.searchsorted(knots, x) - 1, 0, len(knots) - 2)
    part = np.clip((x - knots[i]) / (knots[i + 1] - knots[i]), 0.0, 1.0)
    out = np.zeros((len(x), len(knots)))
    rows = np.arange(len(x))
    out[rows, i] = 1.0 - part
    out[rows, i + 1] += part
    return out


def _coarse_level(power: FloatArray, fine: NDArray[np.int64]) -> FloatArray:
    """Running median over fine bands of their mean log power, back on the bins: what a line must stand out of."""
    logs = np.add.reduceat(np.log(power), fine[:-1]) / np.diff(fine)
    padded = np.pad(logs, 4, mode="edge")
    smooth = np.median(np.lib.stride_tricks.sliding_window_view(padded, 9), axis=-1)
    return np.asarray(np.repeat(np.exp(smooth + np.euler_gamma), np.diff(fine)))


def _knot_edges(bins: int) -> NDArray[np.int64]:
    """Knots a third of an octave apart, or `_BINS_AT_LEAST` bins where that is wider."""
    edges = [0]
    while edges[-1] < bins:
        low = edges[-1]
        edges.append(max(low + _BINS_AT_LEAST, int((low + 1) * 2 ** (1 / _BANDS_PER_OCTAVE))))
    if len(edges) > 2 and bins - edges[-2] < _BINS_AT_LEAST // 2:
        edges.pop(-2)
    edges[-1] = bins
    return np.array(edges)


def _fine_edges(bins: int) -> NDArray[np.int64]:
    """Single bins at the bottom, then a twentieth of their frequency wide."""
    edges = [0]
    while edges[-1] < bins:
        edges.append(edges[-1] + max(1, edges[-1] // 20))
    edges[-1] = bins
    return np.array(edges)


def _tone_bins(flat: FloatArray) -> NDArray[np.bool_]:
    """Bins far above the levelled spectrum, and not merely part of a broad hump: over 4 times their surroundings 6 bins away."""
    tone = flat > _TONE_OVER_NOISE
    if not tone.any():
        return tone
    for k in np.flatnonzero(tone):
        around = np.r_[flat[max(k - 12, 0) : max(k - 4, 0)], flat[k + 5 : k + 13]]
        if around.size and flat[k] < 6.0 * np.mean(around):
            tone[k] = False
    return tone


def _peaks_of(tone: NDArray[np.bool_], flat: FloatArray) -> NDArray[np.int64]:
    peaks = [k for k in np.flatnonzero(tone) if flat[k] == np.max(flat[max(k - 2, 0) : k + 3])]
    return np.array(peaks, dtype=np.int64)


def _refined(power: FloatArray, peaks: NDArray[np.int64], first_bin: int, step_hz: float) -> FloatArray:
    """Frequency of Hann peaks by a parabola through the log power of three bins (error below 0.02 bin)."""
    if not len(peaks):
        return np.zeros(0)
    at = np.clip(peaks, 1, len(power) - 2)
    left, mid, right = (np.log(power[at + d]) for d in (-1, 0, 1))
    shift = 0.5 * (left - right) / np.minimum(left - 2 * mid + right, -1e-9)
    return np.asarray((at + first_bin + np.clip(shift, -0.5, 0.5)) * step_hz)
