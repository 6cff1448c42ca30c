"""The noise spectrum of a quiet stretch, and the steady tones that stand in it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

_BANDS_PER_OCTAVE = 3
_BINS_AT_LEAST = 40
"""bins averaged per point of the spectrum: 40 independent bins give 16 % in power, 8 % in a stated uncertainty"""
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

    Hann-weighted periodogram, averaged over bands of a third of an octave or `_BINS_AT_LEAST` bins, whichever is wider, after
    a first rough pass has levelled the slope within the band; bins that stand out are tones and do not count.
    `quantum` is the step of the samples: its rectangular noise, step^2/12 over the whole band, is the least PSD assumed
    (an exactly silent stretch would otherwise claim a perfect recording).
    """
    n = fast_length(len(quiet))
    x = quiet[-n:] - np.mean(quiet[-n:])
    window = scipy.fft.irfft(np.array([n / 2, -n / 4] + [0.0] * (n // 2 - 1)), n) if n % 2 == 0 else np.hanning(n)
    spectrum = scipy.fft.rfft(x * window)
    power = np.abs(spectrum[1:]) ** 2 * (2.0 / (rate * np.sum(window**2)))
    frequency = np.arange(1, len(power) + 1) * (rate / n)
    floor = max(quantum**2 / 6.0 / rate, 1e-32)
    power = np.maximum(power, floor * 1e-3)
    edges = _edges(len(power))
    if len(edges) < 3:
        edges = np.array([0, len(power) // 2, len(power)])
    rough = _band_means(np.log(power), edges)
    centres = _band_means(np.log(frequency), edges)
    level = np.interp(np.log(frequency), centres, rough)
    flat = power * np.exp(-level - np.euler_gamma)
    tone = _tone_bins(flat)
    keep = np.ones(len(flat), bool)
    for k in np.flatnonzero(tone):
        keep[max(k - 3, 0) : k + 4] = False
    counts = np.maximum(_band_sums(keep.astype(float), edges), 1.0)
    mean = np.maximum(_band_sums(np.where(keep, flat, 0.0), edges) / counts, 1e-6)
    psd = np.maximum(np.exp(rough + np.euler_gamma) * mean, floor)
    peaks = _peaks_of(tone, flat)
    amplitude = 2.0 * np.abs(spectrum[peaks + 1]) / np.sum(window)
    # Hann correlates neighbouring bins: 1.5 bins of it hold one independent value pair
    return NoiseSpectrum(np.exp(centres), psd, counts / 1.5, _refined(power, peaks, rate / n), amplitude, rate / n)


def white_noise(psd: float, rate: float) -> NoiseSpectrum:
    """A flat spectrum, for where there was nothing to measure it from."""
    grid = np.array([1.0, rate / 2])
    return NoiseSpectrum(grid, np.full(2, psd), np.full(2, 4.0), np.zeros(0), np.zeros(0))


def _edges(bins: int) -> NDArray[np.int64]:
    edges = [0]
    while edges[-1] < bins:
        low = edges[-1]
        edges.append(max(low + _BINS_AT_LEAST, int((low + 1) * 2 ** (1 / _BANDS_PER_OCTAVE))))
    if len(edges) > 2 and bins - edges[-2] < _BINS_AT_LEAST // 2:
        edges.pop(-2)
    edges[-1] = bins
    return np.array(edges)


def _band_sums(values: FloatArray, edges: NDArray[np.int64]) -> FloatArray:
    return np.asarray(np.add.reduceat(values, edges[:-1]))


def _band_means(values: FloatArray, edges: NDArray[np.int64]) -> FloatArray:
    return _band_sums(values, edges) / np.diff(edges)


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


def _refined(power: FloatArray, peaks: NDArray[np.int64], step_hz: float) -> FloatArray:
    """Frequency of Hann peaks by a parabola through the log power of three bins (error below 0.02 bin)."""
    if not len(peaks):
        return np.zeros(0)
    at = np.clip(peaks, 1, len(power) - 2)
    left, mid, right = (np.log(power[at + d]) for d in (-1, 0, 1))
    shift = 0.5 * (left - right) / np.minimum(left - 2 * mid + right, -1e-9)
    return (at + 1 + np.clip(shift, -0.5, 0.5)) * step_hz
