"""Find candidate modes: from the longest look at the ring to the shortest, fit, subtract, look again.

A long look resolves slow modes and, Hann-weighted, is nearly blind to what is over soon (fast modes, the knock); what it
found is taken away before the next, shorter look. Each candidate is fitted on a few Hann bins around its peak, neighbours
jointly. What comes out is rough: `settle` does the fit that counts.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qmeter.dsp.band import bins_around, hann_bins, ring_sum, spectrum_of
from qmeter.dsp.noise import FloatArray, NoiseSpectrum, fast_length
from qmeter.estimate.poles import BinRows, ComplexArray, fit_rows

HANN_POWER = 0.375
"""mean square of the Hann weights"""
_PEAK_OVER_NOISE = 25.0
"""power of a peak over the noise: noise alone reaches it once in exp(25) bins"""
_PEAK_OVER_LOCAL = 8.0
"""power of a peak over the median of the spectrum around it; what is not a mode there does not hold still later"""
_MEDIAN_TO_MEAN = 1.0 / np.log(2.0)
_LOOK_BINS = 24
_SHORTEST_S = 0.004
_BURST_S = (0.008, 0.002, 0.0006)
"""looks with unweighted bins: what is over within a few milliseconds is mostly gone under a Hann window's soft start"""
_BURST_PEAKS = 6
_LOUDEST = 3.0
"""amplitude over the largest sample: two lines in antiphase may each stand above it, giants that cancel are no modes"""
_MOST_PEAKS = 96


Pick = NDArray[np.bool_] | NDArray[np.int64]
"""which modes: a mask or indices"""


@dataclass(frozen=True, slots=True)
class Ring:
    """The samples after a strike, their rate and the noise they stand in; modes are counted from sample 0."""

    samples: FloatArray
    rate: float
    noise: NoiseSpectrum
    low_hz: float
    high_hz: float


@dataclass(frozen=True, slots=True)
class Poles:
    """log-poles per sample (M,) and amplitudes at sample 0 of the ring (M,)."""

    pole: ComplexArray
    amplitude: ComplexArray

    def __len__(self) -> int:
        return len(self.pole)

    def take(self, which: Pick) -> Poles:
        """Some of them."""
        return Poles(self.pole[which], self.amplitude[which])

    def plus(self, other: Poles) -> Poles:
        """These and those."""
        return Poles(np.concatenate([self.pole, other.pole]), np.concatenate([self.amplitude, other.amplitude]))

    @staticmethod
    def none() -> Poles:
        """No mode at all."""
        return Poles(np.zeros(0, complex), np.zeros(0, complex))


def look_lengths(frames: int, rate: float) -> list[int]:
    """Lengths of the looks, from the whole ring down by factors of four to `_SHORTEST_S`."""
    lengths: list[int] = []
    n = frames
    while n > _SHORTEST_S * rate or not lengths:
        lengths.append(fast_length(n))
        n //= 4
    return lengths


def find_modes(ring: Ring, *, rounds: int = 3, over_local: float = _PEAK_OVER_LOCAL) -> Poles:
    """Candidates over all looks; `over_local`: power of a peak over the local median."""
    found = Poles.none()
    rest = ring.samples
    looks = [(n, True) for n in look_lengths(len(rest), ring.rate)]
    looks += [(fast_length(int(t * ring.rate)), False) for t in _BURST_S if 16 <= t * ring.rate <= len(rest)]
    for level, (length, hann) in enumerate(looks):
        for _ in range(rounds if hann else 1):
            spectrum = spectrum_of(rest, length)
            new = _look(ring, hann_bins(spectrum) if hann else spectrum, length, longest=level == 0, hann=hann, over_local=over_local)
            new = new.take(np.abs(new.amplitude) < _LOUDEST * np.max(np.abs(rest[:length])))
            if not len(new):
                break
            found = found.plus(new)
            rest = rest - ring_sum(new.pole, new.amplitude, 0, len(rest))
    return found


@dataclass(frozen=True, slots=True)
class Floor:
    """What a peak must exceed: logarithms of power at the centres (bins) of blocks, interpolated between."""

    centre: FloatArray
    log_power: FloatArray

    def at(self, bins: FloatArray | NDArray[np.int64]) -> FloatArray:
        """The floor at these bins: the spectra are long, and few of their bins are peaks."""
        return np.asarray(np.exp(np.interp(bins, self.centre, self.log_power)))


def floor_of(
    power: FloatArray, ring: Ring, length: int, *, hann: float, over_local: float, over_noise: float = _PEAK_OVER_NOISE, block: int = 48
) -> Floor:
    """`over_noise` times the noise, or `over_local` times the local median of the spectrum itself where that is more."""
    bins = len(power)
    blocks = max(bins // block, 1)
    used = blocks * block if bins >= block else bins
    medians = np.median(power[:used].reshape(blocks, -1), axis=1) * (_MEDIAN_TO_MEAN * over_local)
    centre = (np.arange(blocks) + 0.5) * (used / blocks)
    known = ring.noise.at(np.maximum(centre, 0.5) * ring.rate / length) * (length * ring.rate / 2 * hann * over_noise)
    log_power = np.log(np.maximum(np.maximum(medians, known), 1e-300))
    return Floor(np.asarray(centre, dtype=np.float64), np.asarray(log_power, dtype=np.float64))


def peaks_over(power: FloatArray, floor: Floor, low: int, high: int) -> NDArray[np.int64]:
    """Bins of the local maxima within low..high-1 that exceed the floor."""
    mid = power[low:high]
    tops = np.flatnonzero((mid > power[low - 1 : high - 1]) & (mid >= power[low + 1 : high + 1])) + low
    return np.asarray(tops[power[tops] > floor.at(tops)])


def _look(ring: Ring, bins: ComplexArray, length: int, *, longest: bool, hann: bool, over_local: float) -> Poles:
    """One look: peaks of the bins over the floor, fitted; those that rang for a fair part of this look are kept."""
    power = bins.real**2 + bins.imag**2
    floor = floor_of(power, ring, length, hann=HANN_POWER if hann else 1.0, over_local=over_local)
    step = ring.rate / length
    lo, hi = max(int(ring.low_hz / step), 2), min(int(ring.high_hz / step) + 1, len(power) - 2)
    if hi - lo < 2:
        return Poles.none()
    peaks = peaks_over(power, floor, lo, hi)
    if not len(peaks):
        return Poles.none()
    most = _MOST_PEAKS if hann else _BURST_PEAKS
    if len(peaks) > most:
        peaks = np.sort(peaks[np.argsort(power[peaks])[-most:]])
    start = _first_guess(bins, peaks, length) if hann else _first_guess_plain(bins, peaks, length)
    # a peak that leaks from a much stronger neighbour waits for the next round
    keep = np.ones(len(peaks), bool)
    for i in range(len(peaks) - 1):
        if peaks[i + 1] - peaks[i] < 4:
            keep[i if power[peaks[i]] < power[peaks[i + 1]] else i + 1] = False
    return _fit_peaks(ring, bins, floor, peaks[keep], start[keep], length, longest=longest, hann=hann)


def _first_guess(hann: ComplexArray, peaks: np.ndarray, length: int) -> ComplexArray:
    """Pole from two neighbouring Hann bins: with x = i theta_k - s and d = 2 pi i/N, X[k]/X[k+1] = (x + 2d)/(x - d).

    (The Hann combination of 1/x, 1/(x-d), 1/(x+d) is proportional to 1/(x (x-d)(x+d)); near the pole 1 - u = x.)
    """
    left_larger = np.abs(hann[peaks - 1]) > np.abs(hann[peaks + 1])
    k = np.where(left_larger, peaks - 1, peaks)
    ratio = hann[k] / hann[k + 1]
    d = 2j * np.pi / length
    x = d * (2 + ratio) / (ratio - 1)
    s = 2j * np.pi * k / length - x
    decay = np.clip(-s.real * length, 0.2, 14.0) / length
    omega = np.clip(s.imag, 2 * np.pi * (peaks - 1) / length, 2 * np.pi * (peaks + 1) / length)
    return np.asarray(-decay + 1j * omega)


def _first_guess_plain(bins: ComplexArray, peaks: np.ndarray, length: int) -> ComplexArray:
    """Pole from two neighbouring plain bins: X[k]/X[k+1] = (1 - z e_(k+1)) / (1 - z e_k), e_k = exp(-2 pi i k/N), solved for z."""
    left_larger = np.abs(bins[peaks - 1]) > np.abs(bins[peaks + 1])
    k = np.where(left_larger, peaks - 1, peaks)
    ratio = bins[k] / bins[k + 1]
    one, two = np.exp(-2j * np.pi * k / length), np.exp(-2j * np.pi * (k + 1) / length)
    s = np.log((1 - ratio) / (two - ratio * one))
    decay = np.clip(-s.real * length, 0.5, 20.0) / length
    omega = np.clip(s.imag, 2 * np.pi * (peaks - 1) / length, 2 * np.pi * (peaks + 1) / length)
    return np.asarray(-decay + 1j * omega)


def _fit_peaks(
    ring: Ring,
    hann_or_plain: ComplexArray,
    floor: Floor,
    peaks: np.ndarray,
    start: ComplexArray,
    length: int,
    *,
    longest: bool,
    hann: bool,
) -> Poles:
    out = Poles.none()
    for members in _neighbours(peaks):
        m = len(members[0])
        bins = min(_LOOK_BINS if m == 1 else _LOOK_BINS + 16 * (m - 1), length // 2 - 1)
        rows = np.array(members)
        first = np.clip((peaks[rows[:, 0]] + peaks[rows[:, -1]]) // 2 - bins // 2, 1, max(length // 2 - bins, 1))
        level = floor.at((peaks[rows[:, 0]] + peaks[rows[:, -1]]) // 2)
        data = BinRows(
            bins_around(hann_or_plain, first, bins),
            np.repeat(1.0 / level[:, None], bins, axis=1),
            first,
            np.full(len(rows), length),
            hann=hann,
        )
        fit = fit_rows(
            data,
            start[rows],
            steps=6 if m == 1 else 10,
            decay_bounds=(np.full(rows.shape, 0.02 / length), np.full(rows.shape, 40.0 / length)),
        )
        ok = _plausible(fit.pole, fit.amplitude, peaks[rows], level, length, longest=longest, most_decays=14.0 if hann else 25.0)
        out = out.plus(Poles(fit.pole[ok], fit.amplitude[ok]))
    return out


def _plausible(
    pole: ComplexArray, amplitude: ComplexArray, peaks: np.ndarray, level: FloatArray, length: int, *, longest: bool, most_decays: float
) -> np.ndarray:
    decays = -pole.real * length
    moved = np.abs(pole.imag * length / (2 * np.pi) - peaks)
    energy = (np.abs(amplitude) / 2 * (1 - np.exp(-decays)) / (decays / length)) ** 2 * HANN_POWER
    return np.asarray(
        (decays < most_decays)
        & (decays > (0.0 if longest else 0.3))
        & (moved < 2.0 + decays / np.pi)
        & (energy > 0.3 * level[:, None])
        & (amplitude != 0)
    )


def _neighbours(peaks: np.ndarray) -> list[list[list[int]]]:
    """Runs of peaks closer than 10 bins, at most 4 to a run, collected by their size (one batch a size)."""
    runs: list[list[int]] = []
    for i in range(len(peaks)):
        if runs and peaks[i] - peaks[runs[-1][-1]] < 10 and len(runs[-1]) < 4:
            runs[-1].append(i)
        else:
            runs.append([i])
    by_size: dict[int, list[list[int]]] = {}
    for run in runs:
        by_size.setdefault(len(run), []).append(run)
    return list(by_size.values())
