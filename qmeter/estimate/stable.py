"""What the windows of the chart agree on: lines seen again and again at one place, and how far the windows are apart there.

A line's value is the weighted mean over its windows. Windows share their samples, so their scatter is not divided by their number. It
holds what a single window's noise explains already: only what exceeds that is the model's part of the uncertainty.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array
from scipy.spatial import cKDTree

from qmeter.dsp.band import ComplexArray, FloatArray, hann_bins, spectrum_of
from qmeter.dsp.noise import fast_length
from qmeter.estimate.chart import Ladder, Sightings
from qmeter.estimate.poles import IntArray

SAME_WIDTHS, SAME_DECAYS = 0.3, 0.35
"""sightings of one line: within so many half-power widths, and the logarithm of the decay rates' ratio"""
LEAST_WINDOWS = 4
HEAVIEST = 0.12
"""share of the total weight that one window may have"""
OUTLIER = 3.0
"""times the scatter beyond which a window is left out"""
HELD = 0.45
"""share of the windows in which a line ought to show that it must be seen in"""
ACCEPT = ((8, 0.2), (14, 0.3))
"""(windows that show the line, standard uncertainty of its decay rate over the decay rate): one of these makes a mode"""
PROMINENT = 6.0
"""power of a line's peak over the median of the spectrum around it, over three time constants; what a knock or a cymbal's hiss makes up
mostly lies below"""
AROUND_WIDTHS, AROUND_BINS = 30.0, 24.0
"""half-power widths, and bins at least, either side of a line that are its surroundings"""
LOUDER = 10.0
"""in energy: a loud wide mode and a faint narrow one may share a place"""
BEST = 3
"""windows whose variances are averaged: what one good look is worth"""


@dataclass(frozen=True, slots=True)
class Stable:
    """Lines that hold still, each (M,) or (M, 2) of (decay, omega): value, variance of a good window, variance among windows.

    held: windows that show the line over those that ought to (above 1 where neighbouring bands see it too). seen: windows.
    """

    value: FloatArray
    amplitude: ComplexArray
    single: FloatArray
    scatter: FloatArray
    held: FloatArray
    seen: IntArray

    def take(self, which: np.ndarray) -> Stable:
        """Some of them."""
        return Stable(self.value[which], self.amplitude[which], self.single[which], self.scatter[which], self.held[which], self.seen[which])


def stable_lines(seen: Sightings, ladder: Ladder) -> Stable:
    """Lines that enough windows agree on, each once."""
    joined = agreed(seen)
    order = np.argsort(joined.omega)
    joined = joined.take(order)
    lines = [_line(joined.take(members), ladder) for members in _clusters(joined)]
    if not lines:
        none = np.zeros(0)
        return Stable(np.zeros((0, 2)), none.astype(complex), none, np.zeros((0, 2)), none, none.astype(np.int64))
    value, amplitude, single, scatter, held, count = (np.array(column) for column in zip(*lines, strict=True))
    every = Stable(value, amplitude, single, scatter, held, count)
    return _each_once(every.take(_accepted(every)))


def agreed(seen: Sightings) -> Sightings:
    """One sighting a window and line: the mean over the orders that see it, weighted by their variances, widened by their scatter."""
    if not len(seen.omega):
        return seen
    by_window = np.argsort(seen.window, kind="stable")
    seen = seen.take(by_window)
    window, first = np.unique(seen.window, return_index=True)
    row = np.repeat(np.arange(len(window)), np.diff(np.append(first, len(seen.window))))
    place = np.arange(len(row)) - first[row]
    shape = (len(window), int(place.max()) + 1)
    left = np.zeros(shape, bool)
    left[row, place] = True
    omega, decay, variance = np.ones(shape), np.ones(shape), np.full(shape, np.inf)
    amplitude = np.zeros(shape, complex)
    omega[row, place], decay[row, place], variance[row, place] = seen.omega, seen.decay, seen.variance
    amplitude[row, place] = seen.amplitude
    same = _same(omega[:, :, None], decay[:, :, None], omega[:, None, :], decay[:, None, :])
    precision = 1.0 / np.maximum(variance / decay**2, 1e-4)
    out: list[Sightings] = []
    active = np.arange(len(window))
    while len(active):
        support = np.einsum("rij,rj->ri", same[active], np.where(left[active], precision[active], 0.0))
        best = np.argmax(np.where(left[active], support, -1.0), axis=1)
        members = same[active, best] & left[active]
        weight = np.where(members, 1.0 / variance[active], 0.0)
        total = weight.sum(axis=1)
        weight /= total[:, None]
        o, d = (np.sum(weight * x[active], axis=1) for x in (omega, decay))
        spread = np.maximum(*(np.sum(weight * (x[active] - m[:, None]) ** 2, axis=1) for x, m in ((omega, o), (decay, d))))
        out.append(Sightings(o, d, members.sum(axis=1) / total + spread, np.sum(weight * amplitude[active], axis=1), window[active]))
        left[active] &= ~members
        active = active[left[active].any(axis=1)]
    fields = ("omega", "decay", "variance", "amplitude", "window")
    return Sightings(*(np.concatenate([getattr(p, f) for p in out]) for f in fields))


def _same(omega: FloatArray, decay: FloatArray, other_omega: FloatArray, other_decay: FloatArray) -> np.ndarray:
    close = np.abs(omega - other_omega) < 2.0 * SAME_WIDTHS * np.minimum(decay, other_decay)
    return np.asarray(close & (np.abs(np.log(decay / other_decay)) < SAME_DECAYS))


def _clusters(s: Sightings) -> list[IntArray]:
    """Members of each line, the line with the most sightings around one of them first."""
    i, j = _pairs(s)
    n = len(s.omega)
    near = coo_array((np.ones(2 * len(i), np.int8), (np.concatenate([i, j]), np.concatenate([j, i]))), shape=(n, n)).tocsr()
    start, neighbour = near.indptr, near.indices
    precision = 1.0 / np.maximum(s.variance / s.decay**2, 1e-4)
    left = np.ones(n, bool)
    out: list[IntArray] = []
    for k in np.argsort(-np.diff(start), kind="stable").tolist():
        if not left[k]:
            continue
        members = np.append(neighbour[start[k] : start[k + 1]], k)
        members = members[left[members]]
        if len(members) < LEAST_WINDOWS:
            continue
        # once more, around their own middle
        omega = float(np.average(s.omega[members], weights=precision[members]))
        decay = float(np.exp(np.average(np.log(s.decay[members]), weights=precision[members])))
        lo, hi = np.searchsorted(s.omega, [omega - 2.0 * SAME_WIDTHS * decay, omega + 2.0 * SAME_WIDTHS * decay])
        about = np.arange(lo, hi)
        about = about[left[lo:hi] & _same(s.omega[lo:hi], s.decay[lo:hi], np.array(omega), np.array(decay))]
        if len(about) >= LEAST_WINDOWS:
            members = about
        left[members] = False
        left[k] = False
        if len(np.unique(s.window[members])) >= LEAST_WINDOWS:
            out.append(members)
    return out


def _pairs(s: Sightings) -> tuple[IntArray, IntArray]:
    """Pairs (i < j) of sightings that may be of one line, layer by layer of the decay rate."""
    layer = np.floor(np.log(np.maximum(s.decay, 1e-9)) / SAME_DECAYS).astype(np.int64)
    found: list[IntArray] = []
    for k in np.unique(layer):
        members = np.flatnonzero((layer == k) | (layer == k + 1))
        if len(members) < 2:
            continue
        reach = 2.0 * SAME_WIDTHS * np.exp((k + 2) * SAME_DECAYS)
        tree = cKDTree(np.column_stack([s.omega[members] / reach, np.log(s.decay[members]) / SAME_DECAYS]))
        pairs = tree.query_pairs(1.0, p=np.inf, output_type="ndarray")
        i, j = members[pairs[:, 0]], members[pairs[:, 1]]
        # pairs within layer k + 1 come up again with the next layer
        good = _same(s.omega[i], s.decay[i], s.omega[j], s.decay[j]) & ((layer[i] == k) | (layer[j] == k))
        found.append(np.column_stack([i[good], j[good]]))
    every = np.concatenate(found) if found else np.zeros((0, 2), np.int64)
    return every[:, 0], every[:, 1]


def _line(s: Sightings, ladder: Ladder) -> tuple[FloatArray, complex, float, FloatArray, float, int]:
    values = np.column_stack([s.decay, s.omega])
    weight = 1.0 / s.variance
    weight /= weight.sum()
    for _ in range(4):
        weight = np.minimum(weight, HEAVIEST)
        weight /= weight.sum()
    mean = weight @ values
    for _ in range(2):
        off = values - mean
        inside = np.all(np.abs(off) <= OUTLIER * np.sqrt(weight @ off**2) * (1.0 + 1e-9), axis=1)
        weight = np.where(inside, weight, 0.0)
        weight /= weight.sum()
        mean = weight @ values
    scatter = weight @ (values - mean) ** 2
    single = float(np.mean(np.partition(s.variance, BEST - 1)[:BEST])) if len(s.variance) > BEST else float(np.mean(s.variance))
    count = len(np.unique(s.window))
    held = count / max(ladder.showing(float(mean[1]) / (2.0 * np.pi), float(mean[0])), 1)
    return mean, complex(weight @ s.amplitude), single, scatter, held, count


def _accepted(s: Stable) -> np.ndarray:
    """Lines that hold in enough of the windows; those less well determined in more."""
    relative = np.sqrt(np.maximum(s.single, s.scatter[:, 0])) / s.value[:, 0]
    told = np.any([(s.seen >= count) & (relative < limit) for count, limit in ACCEPT], axis=0)
    return np.asarray((s.held >= HELD) & told)


def prominence(samples: FloatArray, rate: float, omega: FloatArray, decay: FloatArray) -> FloatArray:
    """Power of each line's peak over the median of the Hann-weighted spectrum around it, over about three of its time constants."""
    out = np.full(len(omega), np.inf)
    wanted = np.clip(3.0 / decay, 64.0 / rate, len(samples) / rate)
    step = np.round(2.0 * np.log2(wanted * rate)).astype(np.int64)
    for k in np.unique(step):
        length = fast_length(min(int(2.0 ** (k / 2.0)), len(samples)))
        bins = hann_bins(spectrum_of(samples, length))
        power = bins.real**2 + bins.imag**2
        for i in np.flatnonzero(step == k):
            at = omega[i] / (2.0 * np.pi) * length / rate
            reach = max(AROUND_WIDTHS * decay[i] / np.pi * length / rate, AROUND_BINS)
            around = power[max(int(at - reach), 1) : int(at + reach) + 2]
            peak = power[max(int(at) - 1, 1) : int(at) + 3]
            if len(around) and len(peak):
                out[i] = peak.max() / max(float(np.median(around)), 1e-300)
    return out


def _each_once(s: Stable) -> Stable:
    """Without second readings of a line: within half a half-power width of one that holds better, with a like decay, and not far louder."""
    with np.errstate(all="ignore"):
        rank = s.held * s.seen * s.value[:, 0] / np.sqrt(np.maximum(s.single, s.scatter[:, 0]))
    energy = np.abs(s.amplitude) ** 2 / s.value[:, 0]
    kept: list[int] = []
    for i in np.argsort(-rank):
        others = s.value[kept]
        apart = np.abs(s.value[i, 1] - others[:, 1])
        like = np.abs(np.log(s.value[i, 0] / others[:, 0])) < np.log(3.0)
        softer = energy[i] < LOUDER * energy[kept]
        if not np.any((apart < np.maximum(s.value[i, 0], others[:, 0])) & like & softer):
            kept.append(int(i))
    return s.take(np.sort(np.array(kept, dtype=np.int64)))
