"""Looking at a crowded ring through many windows: a fixed set of bands, starts, lengths and orders, never adapted to the answer.

A mode shows at the same place in window after window; what a single window makes up does not. Each window is a stretch of a band's
complex envelope, solved on its own (`pencil`): nothing that goes wrong far away can reach it. What the windows agree on is judged by
`stable`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.band import ComplexArray, FloatArray, spectrum_of
from qmeter.dsp.noise import fast_length
from qmeter.dsp.subbands import CLEAR, FADED, Envelopes, Subbands, gain
from qmeter.estimate.find import Ring, floor_of, peaks_over
from qmeter.estimate.pencil import lines_of, pencil
from qmeter.estimate.poles import IntArray

ORDERS = (1, 2, 4, 8)
STARTS = (3, 6, 10, 15, 21)
"""samples of the envelope after the start: the first three hear the band's own transient"""
LENGTHS = (28, 48)
"""samples of the envelope"""
BAND_BINS = 40.0
"""bandwidth in units of one over the look's length"""
WIDEST = 1.3
"""bandwidth over centre frequency at most: below, the band would hear negative frequencies"""
TILE = 0.35
"""of the bandwidth: peaks closer than this share a band"""
LONGEST_S, SHORTEST_S = 4.0, 0.006
_PEAK_OVER_NOISE, _PEAK_OVER_LOCAL = 12.0, 3.5
_MOST_PEAKS = 220
LEAST_DECAYS, MOST_DECAYS = 0.35, 14.0
"""time constants of a line within its window"""
LATEST = 3.0
"""time constants gone by before a window begins"""
_LEAST_ENERGY = 15.0
"""energy of a line over the residual per sample"""


@dataclass(frozen=True, slots=True)
class Ladder:
    """The windows there are for a line, whether or not anything was seen to look at: bandwidth (Hz), start and length (s), each (W,)."""

    bandwidth_hz: FloatArray
    start_s: FloatArray
    length_s: FloatArray

    @staticmethod
    def over(duration_s: float) -> Ladder:
        """Those that fit a ring of this duration."""
        rows = [(BAND_BINS / look, s, n) for look in _looks(duration_s) for s in STARTS for n in LENGTHS]
        bandwidth, start, length = np.array(rows, dtype=float).reshape(-1, 3).T
        fits = (start + length) / bandwidth < duration_s
        return Ladder(bandwidth[fits], (start / bandwidth)[fits], (length / bandwidth)[fits])

    def showing(self, frequency_hz: float, decay_rate_per_s: float) -> int:
        """How many ought to show a line of this frequency and decay rate."""
        decays = decay_rate_per_s * self.length_s
        some = (decays > 0.5) & (decays < 10.0) & (decay_rate_per_s * self.start_s < 2.0)
        return int(np.count_nonzero(some & (self.bandwidth_hz < WIDEST * frequency_hz)))


@dataclass(frozen=True, slots=True)
class Sightings:
    """Lines seen, each (S,): angular frequency (rad/s), decay rate (1/s), variance of either, amplitude at the ring's `start`, window."""

    omega: FloatArray
    decay: FloatArray
    variance: FloatArray
    amplitude: ComplexArray
    window: IntArray

    def take(self, which: np.ndarray) -> Sightings:
        """Some of them."""
        return Sightings(self.omega[which], self.decay[which], self.variance[which], self.amplitude[which], self.window[which])


def chart_of(ring: Ring, start: int) -> tuple[Sightings, Ladder]:
    """Every line of every window of the ring from sample `start` on."""
    samples = ring.samples[start:]
    bands = Subbands(samples, ring.rate)
    seen: list[Sightings] = []
    count = 0
    for look_s in _looks(bands.duration_s):
        bandwidth_hz = BAND_BINS / look_s
        centre_hz = _tiles(_peaks(ring, samples, look_s), bandwidth_hz)
        if not len(centre_hz):
            continue
        longest = min(max(STARTS) + max(LENGTHS), int(bands.duration_s * bandwidth_hz))
        envelopes = bands.envelopes(centre_hz, bandwidth_hz, longest)
        for first in STARTS:
            for length in LENGTHS:
                if first + length <= envelopes.samples.shape[1]:
                    seen.append(_lines_in(envelopes, first, length, count))
                    count += len(centre_hz)
    return _joined(seen), Ladder.over(bands.duration_s)


def _looks(duration_s: float) -> list[float]:
    looks = []
    look_s = min(duration_s, LONGEST_S)
    while look_s > SHORTEST_S:
        looks.append(look_s)
        look_s /= 2
    return looks


def _peaks(ring: Ring, samples: FloatArray, look_s: float) -> FloatArray:
    """Frequencies of the peaks of one look that stand out of the noise and of their surroundings."""
    length = fast_length(min(int(look_s * ring.rate), len(samples)))
    window = np.sin(np.pi * np.sqrt((np.arange(length) + 0.5) / length)) ** 2  # leans to the early part: fast modes count too
    part = np.zeros(length)
    part[: min(length, len(samples))] = samples[:length]
    bins = spectrum_of(part * window, length)
    power = bins.real**2 + bins.imag**2
    share = float(np.mean(window**2))
    floor = floor_of(power, ring, length, hann=share, over_local=_PEAK_OVER_LOCAL, over_noise=_PEAK_OVER_NOISE, block=96)
    step = ring.rate / length
    low, high = max(int(ring.low_hz / step), 2), min(int(ring.high_hz / step) + 1, len(power) - 2)
    if high - low < 2:
        return np.zeros(0)
    peaks = peaks_over(power, floor, low, high)
    if len(peaks) > _MOST_PEAKS:
        peaks = np.sort(peaks[np.argsort(power[peaks])[-_MOST_PEAKS:]])
    return np.asarray(peaks * step)


def _tiles(peaks_hz: FloatArray, bandwidth_hz: float) -> FloatArray:
    """Centres of the bands that hold the peaks; none so low that its band would reach over zero."""
    peaks_hz = peaks_hz[WIDEST * peaks_hz > bandwidth_hz]
    centres: list[float] = []
    i = 0
    while i < len(peaks_hz):
        j = max(int(np.searchsorted(peaks_hz, peaks_hz[i] + TILE * bandwidth_hz)), i + 1)
        centres.append(0.5 * float(peaks_hz[i] + peaks_hz[j - 1]))
        i = j
    return np.array(centres)


def _lines_in(envelopes: Envelopes, first: int, length: int, number: int) -> Sightings:
    """The lines of one window of every band, of all orders; `number` is the first band's window."""
    series = np.ascontiguousarray(envelopes.samples[:, first : first + length])
    rate = envelopes.rate_hz
    parts: list[Sightings] = []
    for z in pencil(series, ORDERS).values():
        lines = lines_of(series, z)
        turn = np.mod(lines.pole.imag / (2.0 * np.pi), 1.0)
        decays = -lines.pole.real
        good = (decays * length > LEAST_DECAYS) & (decays * length < MOST_DECAYS) & (decays * first < LATEST)
        good &= (np.abs(turn - 0.5) < 0.5 - CLEAR) & (lines.energy > _LEAST_ENERGY * lines.residual[:, None])
        row, line = np.nonzero(good & np.isfinite(lines.variance))
        s = -decays[row, line] + 2j * np.pi * turn[row, line]
        parts.append(
            Sightings(
                2.0 * np.pi * envelopes.first_hz[row] + s.imag * rate,
                -s.real * rate,
                lines.variance[row, line] * (rate**2 / FADED),
                lines.amplitude[row, line] * np.exp(-s * first) / gain(turn[row, line], decays[row, line]),
                number + row,
            )
        )
    return _joined(parts)


def _joined(parts: list[Sightings]) -> Sightings:
    if not parts:
        none = np.zeros(0)
        return Sightings(none, none, none, none.astype(complex), none.astype(np.int64))
    fields = ("omega", "decay", "variance", "amplitude", "window")
    return Sightings(*(np.concatenate([getattr(p, f) for p in parts]) for f in fields))
