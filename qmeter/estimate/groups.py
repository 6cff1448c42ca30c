"""Modes that must be fitted together, and the bins their fit takes.

Two lines closer than a few half-power widths share their bins; a joint fit (all of them in one row of `poles.fit_rows`) keeps
their covariance. Rows come in few sizes, so that most of them share one batch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.band import bins_around, ring_sum, spectrum_of
from qmeter.dsp.noise import FloatArray, fast_length
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.poles import BinRows, ComplexArray, IntArray, RowFit, bin_response, fit_rows

JOINT_WIDTHS = 4.0
"""|omega_i - omega_j| < 4 (a_i + a_j) is fitted jointly: eight half-power widths (of the mean) or less apart"""
JOINT_DECAYS = 12.0
"""ratio of decay rates beyond which two overlapping modes are fitted in turn"""
LONG = 9.0
"""time constants of the slowest mode that a fit covers: less than 1 % of the information lies beyond 4"""
HALF_BAND_WIDTHS = 8.0
GROUP_MOST = 6
LEASH_DECAYS, LEASH_WIDTHS = 2.5, 1.0
"""a fit that changes a decay rate by this factor, or moves a line by this many half-power widths, follows something else than its line"""
BIN_SIZES = (24, 32, 48, 64, 96, 128, 192, 256, 384, 512, 768)


def joint_groups(poles: Poles, steady_decay: float) -> list[IntArray]:
    """Indices of the modes of each joint group, neighbours by frequency.

    Slower than `steady_decay` (per sample) is as good as a steady tone: it joins the modes beside it, however fast they are.
    """
    order = np.argsort(poles.pole.imag)
    s = poles.pole[order]
    groups: list[list[int]] = []
    for i in range(len(s)):
        home = None
        for group in reversed(groups[-4:]):
            if len(group) >= GROUP_MOST:
                continue
            for j in group:
                near = s[i].imag - s[j].imag < -JOINT_WIDTHS * (s[i].real + s[j].real)
                if near and (_alike(s[i], s[j]) or min(-s[i].real, -s[j].real) < steady_decay):
                    home = group
                    break
            if home is not None:
                break
        if home is None:
            groups.append([i])
        else:
            home.append(i)
    return [order[np.array(g)] for g in groups]


def _alike(one: complex, other: complex) -> bool:
    return 1 / JOINT_DECAYS < one.real / other.real < JOINT_DECAYS


@dataclass(frozen=True, slots=True)
class Batch:
    """Groups of one shape: which modes (R, M), where each row starts and how long it is, and its bins."""

    members: IntArray
    start: IntArray
    rows: BinRows
    pole: ComplexArray


class Looks:
    """Spectra of what is left of the ring, cut at shared starts and lengths; computed when first asked for."""

    def __init__(self, ring: Ring, rest: FloatArray) -> None:
        self._ring, self._rest = ring, rest
        self._spectra: dict[tuple[int, int], ComplexArray] = {}
        self._lengths = list(_halvings(len(rest)))

    def length_for(self, wanted: float, start: int) -> int:
        """The shortest shared length that covers `wanted` samples from `start` (or the longest there is)."""
        best = fast_length(len(self._rest) - start)
        for n in self._lengths:
            if wanted <= n <= best:
                best = n
        return best

    def spectrum(self, start: int, length: int) -> ComplexArray:
        key = (start, length)
        if key not in self._spectra:
            self._spectra[key] = spectrum_of(self._rest[start:], length)
        return self._spectra[key]


def _halvings(frames: int) -> list[int]:
    lengths = []
    n = frames
    while n >= 64:
        lengths.append(fast_length(n))
        n //= 2
    return lengths


def batches(
    ring: Ring,
    poles: Poles,
    groups: list[IntArray],
    starts: IntArray,
    looks: Looks,
    still: float,
    changed: tuple[Poles, list[IntArray]] | None = None,
    *,
    long: float = LONG,
) -> list[Batch]:
    """The rows that fit `groups`: what is left of the ring around each, with the group's own modes put back.

    `changed` holds poles that have moved since the looks were taken, and for each group the modes beside it that did: the rest
    is corrected for them, bin by bin.
    """
    shapes: dict[tuple[int, int], list[tuple[IntArray, int, int, int, int]]] = {}
    for number, group in enumerate(groups):
        s = poles.pole[group]
        start = int(starts[group].min())
        length = looks.length_for(_span_of(-s.real, long, still), start)
        first, bins = _bins_for(s, length)
        shapes.setdefault((len(group), bins), []).append((group, start, length, first, number))
    out = []
    for (_, bins), items in shapes.items():
        members = np.array([i[0] for i in items])
        at, lengths, firsts = (np.array([i[j] for i in items], dtype=np.int64) for j in (1, 2, 3))
        data = np.empty((len(items), bins), complex)
        for r, (_, t0, n, k0, number) in enumerate(items):
            data[r] = bins_around(looks.spectrum(t0, n), np.array([k0]), bins)[0]
            if changed is not None and len(changed[1][number]):
                beside, place = changed[1][number][None, :], (np.array([t0]), np.array([k0]), np.array([n]))
                data[r] += own_bins(poles, beside, *place, bins)[0] - own_bins(changed[0], beside, *place, bins)[0]
        data += own_bins(poles, members, at, firsts, lengths, bins)
        centre = (firsts[:, None] + np.arange(bins)) * (ring.rate / lengths[:, None])
        weight = 2.0 / (ring.noise.at(np.abs(centre)) * (lengths * ring.rate)[:, None])
        out.append(Batch(members, at, BinRows(data, weight, firsts, lengths), poles.pole[members]))
    return out


def _span_of(decay: FloatArray, long: float, still: float) -> float:
    """Samples to fit: `long` time constants of the slowest; beside a steady tone four times those of the slowest that decays."""
    ringing = decay[decay > still]
    if len(ringing) == len(decay) or not len(ringing):
        return float(long / decay.min())
    return float(4 * long / ringing.min())


def own_bins(poles: Poles, members: IntArray, start: IntArray, first: IntArray, length: IntArray, bins: int) -> ComplexArray:
    """Bins (R, K) of the modes `members` (R, M) from `start` on."""
    s = poles.pole[members]
    c = poles.amplitude[members] * np.exp(s * start[:, None])
    d, _, db, _ = bin_response(s, first, length, bins, False)
    return np.asarray(0.5 * (np.einsum("rm,rmk->rk", c, d) + np.einsum("rm,rmk->rk", c.conj(), db)))


def _bins_for(s: ComplexArray, length: int) -> tuple[int, int]:
    """First bin and number of bins: eight half-power widths either side of every mode, ten bins at least."""
    width = np.maximum(HALF_BAND_WIDTHS * -s.real * length / np.pi, 10.0)
    at = s.imag * length / (2 * np.pi)
    low, high = float(np.min(at - width)), float(np.max(at + width))
    low, high = max(low, 1.0), min(high, length / 2 - 1.0)
    need = int(np.ceil(high - low)) + 1
    bins = next((b for b in BIN_SIZES if b >= need), BIN_SIZES[-1])
    bins = max(min(bins, length // 2 - 1), 4)
    first = round((low + high) / 2 - bins / 2)
    return int(np.clip(first, 1, max(length // 2 - bins, 1))), bins


@dataclass(frozen=True, slots=True)
class GroupFit:
    """The fit of one batch beside the batch itself."""

    batch: Batch
    fit: RowFit

    @property
    def freedom(self) -> FloatArray:
        """Expected chi2 of each row for noise alone: bins minus the two complex parameters of each mode."""
        return np.full(len(self.fit.chi2), max(self.batch.rows.data.shape[1] - 2.0 * self.batch.members.shape[1], 1.0))


def fit_groups(
    ring: Ring,
    poles: Poles,
    groups: list[IntArray],
    starts: IntArray,
    looks: Looks,
    still: float,
    *,
    steps: int,
    loudest: float = np.inf,
    long: float = LONG,
) -> list[GroupFit]:
    """Fit every group from where its poles stand, every second group along the frequency axis first.

    Neighbours never move at the same time (red-black Gauss-Seidel): each of the second half is fitted against what the first half
    has become. All at once they would correct the same misfit twice, and in a crowd run away.
    """
    order = sorted(range(len(groups)), key=lambda g: float(poles.pole[groups[g]].imag.mean()))
    red = [groups[g] for g in order[0::2]]
    black = [groups[g] for g in order[1::2]]
    fits = _fit_batches(batches(ring, poles, red, starts, looks, still, long=long), steps)
    if black:
        now = successors(poles, fits, loudest, still)[0]
        beside = [np.concatenate([red[i], red[i + 1]]) if i + 1 < len(red) else red[i] for i in range(len(black))]
        fits += _fit_batches(batches(ring, poles, black, starts, looks, still, (now, beside), long=long), steps)
    return fits


def _fit_batches(items: list[Batch], steps: int) -> list[GroupFit]:
    return [GroupFit(b, fit_rows(b.rows, b.pole, steps=steps if b.members.shape[1] == 1 else 2 * steps)) for b in items]


def successors(
    poles: Poles, fits: list[GroupFit], loudest: float, steady_decay: float, leash: float = 1.0
) -> tuple[Poles, np.ndarray, np.ndarray]:
    """The poles after these fits (all of them, in their places), which of them have a fit that says something, and which were fitted.

    A fit says nothing when the decay rate is not told from zero within a factor of two, the amplitude is several times the loudest
    sample, or the line ran far from where it was seen.
    """
    s, c = poles.pole.copy(), poles.amplitude.copy()
    good_all, fitted = np.zeros(len(poles), bool), np.zeros(len(poles), bool)
    for g in fits:
        m = g.batch.members
        new = g.fit.pole
        with np.errstate(all="ignore"):
            amplitude = g.fit.amplitude * np.exp(-new * g.batch.start[:, None])
            decay = -new.real
            u = np.sqrt(np.diagonal(g.fit.covariance, axis1=1, axis2=2)[:, 0::2])
            was = -poles.pole[m].real
            ran = (
                np.abs(new.imag - poles.pole[m].imag)
                > leash * LEASH_WIDTHS * 2.0 * np.maximum(decay, was) + 6.0 / g.batch.rows.length[:, None]
            )
            ran |= (np.abs(np.log(decay / was)) > leash * np.log(LEASH_DECAYS)) & (decay > steady_decay)
            told = (u < 0.5 * decay) | (decay < steady_decay)
            good = told & ~ran & (np.abs(amplitude) < 3.0 * loudest) & np.isfinite(amplitude) & (decay > 0)
        s[m[good]], c[m[good]] = new[good], amplitude[good]
        c[m[~good]] = 0.0
        good_all[m[good]] = True
        fitted[m] = True
    return Poles(s, c), good_all, fitted


def moved(poles: Poles, fits: list[GroupFit], loudest: float, steady_decay: float, leash: float = 1.0) -> tuple[Poles, np.ndarray]:
    """The poles after these fits without those whose fit says nothing: dropped before they are subtracted and spoil their neighbours."""
    after, good, _ = successors(poles, fits, loudest, steady_decay, leash)
    return after.take(good), good


def rest_of(ring: Ring, poles: Poles) -> FloatArray:
    """What the modes leave of the ring."""
    return np.asarray(ring.samples - ring_sum(poles.pole, poles.amplitude, 0, len(ring.samples)))
