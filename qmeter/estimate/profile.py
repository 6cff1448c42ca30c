"""How the unmodelled part of a ring is spread over time, band by band, in units of the noise.

Just after a strike the knock, modes not found and the model's own misfit stand above the noise; later only the noise is left. The
start of a fit and its uncertainty both depend on that profile: a covariance that assumes the late noise throughout is too small.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft

from qmeter.dsp.noise import FloatArray, fast_length
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.poles import ComplexArray

_BAND_RATIO = 0.45
_BAND_LEAST_HZ = 600.0
_COARSE = 0.12
"""a band's sample longer than this many time constants cannot tell where in a mode's life the residual stands"""
_LONGEST_S = 1.5
"""the knock and what it brings are over by then: later the residual is taken to stand at its last level"""
_AS_GOOD = 1.04
_BROAD_S = 0.5
_CLEAR_WIDTHS = 1.5
"""half-power widths either side of a mode that its own misfit may fill"""
_CLEAR_SHARE = 0.2
"""share of a band's bins that must be left for the others to speak for it"""


@dataclass(frozen=True, slots=True)
class BandProfile:
    """Cumulated residual power over noise power in one band: `cumulated[i]` is the sum over the first i samples of step_s each."""

    centre_hz: float
    step_s: float
    cumulated: FloatArray

    def mean_between(self, from_s: FloatArray, to_s: FloatArray) -> FloatArray:
        """Mean ratio of residual to noise power between these times (arrays of one shape)."""
        lo = np.maximum(from_s / self.step_s, 0.0)
        hi = np.maximum(to_s / self.step_s, lo + 1.0)
        return np.asarray((self._until(hi) - self._until(lo)) / (hi - lo))

    def _until(self, place: FloatArray) -> FloatArray:
        """Sum over the samples before `place`; beyond the end the level of the last quarter goes on."""
        last = len(self.cumulated) - 1
        quarter = max(last // 4, 1)
        level = (self.cumulated[-1] - self.cumulated[-1 - quarter]) / quarter
        whole = np.minimum(place.astype(np.int64), last)
        inside = np.minimum(place, last) - whole
        upper = self.cumulated[np.minimum(whole + 1, last)]
        return np.asarray(self.cumulated[whole] + inside * (upper - self.cumulated[whole]) + np.maximum(place - last, 0.0) * level)


@dataclass(frozen=True, slots=True)
class Profiles:
    """Bands of half an octave (600 Hz at least) over the whole spectrum, and the whole spectrum as one band over the first part."""

    bands: tuple[BandProfile, ...]
    broad: BandProfile

    def near(self, frequency_hz: float, decay_rate_per_s: float) -> BandProfile:
        """The band whose centre is nearest; the broad one where a mode is over within a few of the band's own samples."""
        if not self.bands:
            return self.broad
        band = min(self.bands, key=lambda b: abs(np.log(b.centre_hz / max(frequency_hz, 1.0))))
        return self.broad if band.step_s * decay_rate_per_s > _COARSE else band


def profiles(ring: Ring, rest: FloatArray, poles: Poles) -> Profiles:
    """Whitened analytic envelope power of the residual in overlapping bands, cumulated over time.

    Bins close to a mode are left out where enough others remain: what stands there is that mode's own misfit, and a misfit (an
    unresolved pair, say) must not be taken for a knock that lasts.
    """
    n = fast_length(min(len(rest), int(_LONGEST_S * ring.rate)))
    spectrum: ComplexArray = np.asarray(scipy.fft.rfft(rest[:n]))
    step = ring.rate / n
    hz = np.arange(len(spectrum)) * step
    root = 1.0 / np.sqrt(ring.noise.at(np.maximum(hz, step)) * (n * ring.rate / 2.0))
    clear = _clear_of(poles, len(spectrum), n)
    bands: list[BandProfile] = []
    centre = 150.0
    while centre < ring.rate / 2:
        half = max(_BAND_RATIO * centre, _BAND_LEAST_HZ / 2)
        lo, hi = int(max(centre - half, ring.low_hz) / step), int(min(centre + half, 0.48 * ring.rate) / step)
        if hi - lo < 4 or (bands and hi - lo < 16):
            break
        bands.append(_band(spectrum, root, clear, lo, hi, n / ring.rate, centre))
        centre = centre + half if half <= _BAND_LEAST_HZ / 2 else centre * 2**0.5
    return Profiles(tuple(bands), _broad(ring, rest, poles))


def _clear_of(poles: Poles, bins: int, length: int) -> np.ndarray:
    """Bins of a spectrum of `length` samples that lie clear of every mode."""
    clear = np.ones(bins, bool)
    half = np.maximum(_CLEAR_WIDTHS * -poles.pole.real * length / np.pi, 3.0)
    at = poles.pole.imag * length / (2 * np.pi)
    for lo, hi in zip(np.maximum(at - half, 0).astype(int), (at + half + 1).astype(int), strict=True):
        clear[lo:hi] = False
    return clear


def _band(spectrum: ComplexArray, root: FloatArray, clear: np.ndarray, lo: int, hi: int, duration_s: float, centre: float) -> BandProfile:
    size = scipy.fft.next_fast_len(hi - lo)
    band = np.zeros(size, complex)
    # tapered, so that what is loud for a moment (the contact) does not ring on in the band
    taper = np.sin(np.pi * (np.arange(hi - lo) + 0.5) / (hi - lo))
    if np.count_nonzero(clear[lo:hi]) > _CLEAR_SHARE * (hi - lo):
        taper *= clear[lo:hi]
    band[: hi - lo] = spectrum[lo:hi] * root[lo:hi] * taper
    used = float(np.sum(taper**2))
    envelope = np.asarray(scipy.fft.ifft(band, overwrite_x=True))
    power = (envelope.real**2 + envelope.imag**2) * (size**2 / used)
    return BandProfile(centre, duration_s / size, np.concatenate([[0.0], np.cumsum(power)]))


def _broad(ring: Ring, rest: FloatArray, poles: Poles) -> BandProfile:
    """The whitened residual of the first half second over the whole band, at twice its bandwidth."""
    n = fast_length(min(len(rest), int(_BROAD_S * ring.rate)))
    spectrum: ComplexArray = np.asarray(scipy.fft.rfft(rest[:n]))
    step = ring.rate / n
    hz = np.arange(len(spectrum)) * step
    root = 1.0 / np.sqrt(ring.noise.at(np.maximum(hz, step)) * (n * ring.rate / 2.0))
    clear = _clear_of(poles, len(spectrum), n)
    return _band(spectrum, root, clear, max(int(ring.low_hz / step), 1), int(0.48 * n), n / ring.rate, ring.rate / 4)


def best_start(band: BandProfile, decay_rate_per_s: float, starts_s: FloatArray, cell_s: float) -> tuple[int, FloatArray]:
    """Index of the start with the smallest variance, and the variance for each, relative to stationary noise and start 0.

    For a weight g(t) = exp(-a (t - t0)) on the data after t0, the error power is int g^2 P / (int g^2)^2 against a signal that has
    fallen by exp(-a t0): V(t0) = int_{t0} exp(-2 a t) P(t) dt / ( int_{t0} exp(-2 a t) dt )^2, normalised to P = 1 and t0 = 0.
    """
    horizon = band.step_s * (len(band.cumulated) - 1)
    edges = np.unique(np.concatenate([np.arange(0, min(0.25, horizon), cell_s), np.geomspace(min(0.25, horizon), horizon, 24)]))
    p = np.maximum(band.mean_between(edges[:-1], edges[1:]), 1.0)
    weight = np.exp(-2 * decay_rate_per_s * edges[:-1]) - np.exp(-2 * decay_rate_per_s * edges[1:])
    tail_p = np.append(np.cumsum((weight * p)[::-1])[::-1], 0.0)
    tail = np.append(np.cumsum(weight[::-1])[::-1], 0.0)
    at = np.clip(np.searchsorted(edges, starts_s - 1e-9), 0, len(edges) - 2)
    variance = tail_p[at] / np.maximum(tail[at], 1e-30 * tail[0] + 1e-300) ** 2 * tail[0]
    # the earliest start that is as good within a few per cent: modes that share a start share its transforms
    return int(np.argmax(variance <= _AS_GOOD * variance.min())), np.asarray(variance)


def spread_in_time(band: BandProfile, influence: ComplexArray, root_weight: FloatArray, start_s: float, length_s: float) -> FloatArray:
    """Factors (P,) by which the residual's spread in time raises each parameter's variance over stationary noise.

    The influence of the data on a parameter, whitened and transformed back, is its weight over time; the residual power in each of
    these cells, never below the noise, replaces a constant: a sandwich covariance (White 1980) in time.
    """
    weight_t = np.abs(np.fft.ifft(influence / root_weight, axis=-1)) ** 2
    cells = weight_t.shape[-1]
    edges = start_s + length_s * np.arange(cells + 1) / cells
    half = 0.5 * length_s / cells
    p = np.maximum(band.mean_between(np.maximum(edges[:-1] - half, start_s), edges[1:] - half), 1.0)
    p[0] = max(p[0], float(band.mean_between(np.array([start_s]), np.array([edges[1]]))[0]))
    return np.asarray(weight_t @ p / np.sum(weight_t, axis=-1))
