"""Modes that change as they decay: one drifting line where straight lines would need two or three, or would hide the bend.

Each strong line is asked. A lone one is first given a score test (Rao, Proc. Camb. Phil. Soc. 44 (1948) 50): along the bend, to first
order in k and g, lies exp((s - p a) t), a straight line of known pole, so the test costs six columns and no fit. Where it speaks, or where
settled modes crowd the line, the law of `drift_line` is fitted to the plain bins from the line's own start with its crowd put back,
linear and squared, and set against one, two and three straight lines on the same bins.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from qmeter import relations
from qmeter.dsp.band import bins_around, ring_sum, spectrum_of
from qmeter.dsp.noise import FloatArray, fast_length
from qmeter.estimate.drift_line import Law, LineFit, chord, chord_covariance, envelope_of, fit_line, guess, rivals, score
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.modes import Doubt
from qmeter.estimate.poles import BinRows, ComplexArray, IntArray, bin_response, fit_rows
from qmeter.estimate.profile import profiles

LEAST_SNR_DB = 25.0
MOST_LINES = 8
CROWD_WIDTHS, CROWD_SHARE = 4.0, 0.015
"""settled modes this near (half-power widths, or share of the frequency) may be splinters of the line"""
SPLINTER_SHIFTS = 1.5
LONG = 10.0
"""time constants of the row of bins"""
HALF_BAND_WIDTHS = 8.0
MOST_BINS = 768
STRETCH_DB = 30.0
"""level range over which the chord values are stated"""
LEAST_END_DB = 6.0
"""over the noise in the half-power width at the end of the stretch"""
EVIDENCE = 9.0
"""gain of log likelihood over one straight line: noise alone reaches it (two parameters more) once in exp(9) = 8000 lines"""
MORE = 6.0
"""gain of log likelihood that the two parameters which two lines have more must bring: ln of the number of real data, as in BIC"""
LATE = 0.25
"""time constants of a late start that call for a second look from the earliest"""
MOST_UNSETTLED = 2
KNOCK = 0.5
"""time constants at the start whose band is watched for a knock"""
HOPELESS = 8.0
"""times the chi2 of the settled lines above which a fit in a crowd is given up after six steps"""
LEAST_WORTH = 0.1
"""relative standard uncertainty of the decay rate above which a drift says nothing"""
AT_NOISE = 1.6
"""chi2 per bin up to which a fit counts as having reached the noise"""
FAR_FROM_BENT = 1000.0
LEAST_BENT = 0.5
"""share of one line's misfit that a bend must explain to first order; drifting lines had 0.7 and more, real clutter mostly less"""
BENT_LEAVES, BENT_SHARE = 0.05, 0.2
"""Close pairs leave more of one line's misfit than this, to first order in the bins and in the envelope, and lie further from a bend than
`FAR_FROM_BENT` (squared misfit over noise); drifts that lines can mimic down to the noise have one of the three below (300 cases)"""
NEPER_DB = 20.0 / math.log(10.0)


@dataclass(frozen=True, slots=True)
class Drift:
    """A mode that drifts, in SI units; times from sample 0 of the ring.

    damped_frequency_hz and decay_rate_per_s are chords: cycles and nepers from start_s to end_s by their distance. covariance: (2, 2) of
    these two, with what the choice of law and the misfit add. amplitude: at sample 0, the instantaneous pole carried back from the
    start. k_loss, k_frequency: the share by which decay rate and frequency at the start exceed their small-amplitude limits.
    significance: gain of log likelihood over one straight line.
    """

    replaces: tuple[int, ...]
    damped_frequency_hz: float
    decay_rate_per_s: float
    amplitude: complex
    covariance: FloatArray
    start_s: float
    end_s: float
    level_range_db: float
    limit_frequency_hz: float
    limit_decay_rate_per_s: float
    u_limit_frequency_hz: float
    u_limit_decay_rate_per_s: float
    k_loss: float
    u_k_loss: float
    k_frequency: float
    u_k_frequency: float
    significance: float
    law: Law
    start_amplitude: complex

    @property
    def power(self) -> int:
        """1: linear in the amplitude; 2: in its square."""
        return self.law.power

    def pole_at(self, time_s: float, rate: float) -> tuple[float, float]:
        """Frequency (Hz) and decay rate (1/s) at a time not before the start."""
        s = complex(self.law.rate(np.array([(time_s - self.start_s) * rate]))[0]) * rate
        return s.imag / (2 * math.pi), -s.real

    def synthesise(self, count: int, rate: float) -> FloatArray:
        """The line as samples 0 .. count-1 of the ring; before its start the pole it has there."""
        first = round(self.start_s * rate)
        out = np.empty(count)
        early = np.arange(min(first, count)) - first
        out[: len(early)] = (self.start_amplitude * np.exp(complex(self.law.rate(np.zeros(1))[0]) * early)).real
        later = np.arange(max(count - first, 0), dtype=float)
        out[len(early) :] = (self.start_amplitude * np.exp(self.law.log_line(later))).real
        return out

    def doubt(self, rate: float) -> Doubt:
        """How far it moves, over which range the figures stand, and what to do."""
        (f1, a1), (f2, a2) = self.pole_at(self.start_s, rate), self.pole_at(self.end_s, rate)
        q1, q2 = relations.q_from_damped(f1, a1), relations.q_from_damped(f2, a2)
        limit = relations.q_from_damped(self.limit_frequency_hz, self.limit_decay_rate_per_s)
        return Doubt(
            "curved-decay",
            f"The mode changes as it decays: over its first {self.level_range_db:.0f} dB ({self.start_s:.3g} to {self.end_s:.3g} s) the "
            f"frequency goes from {f1:.6g} to {f2:.6g} Hz ({100 * (f2 / f1 - 1):+.2g} %) and Q from {q1:.3g} to {q2:.3g}. The figures are "
            f"the means of that stretch; towards silence they tend to {self.limit_frequency_hz:.6g} Hz and Q = {limit:.3g}: tap softer, or "
            "measure a late part.",
        )


def find_drifts(
    ring: Ring, settled: Poles, start: IntArray, contact: int = 0, candidates: Poles | None = None, rest: FloatArray | None = None
) -> tuple[Drift, ...]:
    """The drifting modes among the settled ones, strongest first.

    `start` (M,) is the sample from which each settled mode was fitted, `contact` that at which the contact force has ended.
    `candidates` are what `find_modes` gave: a line that drifts so far that no fit of it settled is found through them (it then
    replaces nothing). `rest` is what the settled modes leave of the ring, where it is at hand; steady tones may be taken away there too.
    """
    poles, start = _pool(settled, start, candidates, contact)
    strong = _strong_lines(ring, poles, len(settled))
    if not len(strong):
        return ()
    left = rest if rest is not None else ring.samples - ring_sum(settled.pole, settled.amplitude, 0, len(ring.samples))
    asker = _Asker(ring, poles, len(settled), left)
    taken, out = set[int](), list[Drift]()
    for i in (int(j) for j in strong):
        if i in taken:
            continue
        everyone = crowd(poles, i)
        members = [i, *(j for j in everyone if j not in taken)]
        late, early = int(start[i]), _early(poles, i, contact, len(ring.samples))
        # a line that misses the noise is started late by `settle`, past most of its bend
        found = asker.ask(members, early, wary=True) if -poles.pole[i].real * (late - early) > LATE else None
        found = found or asker.ask(members, late, wary=i >= len(settled))
        if found is None or math.sqrt(found.covariance[1, 1]) > LEAST_WORTH * found.decay_rate_per_s:
            continue
        passed = _passed(poles, i, found, ring.rate)
        if not passed & taken:
            taken |= passed | {j for j in everyone if j >= len(settled)}
            out.append(replace(found, replaces=tuple(sorted(j for j in passed if j < len(settled)))))
    return tuple(out)


def _pool(poles: Poles, start: IntArray, candidates: Poles | None, contact: int) -> tuple[Poles, IntArray]:
    """The settled modes and the candidates that none of them stands for, with their starts."""
    if candidates is None or not len(candidates):
        return poles, start
    gap = np.abs(candidates.pole.imag[:, None] - poles.pole.imag)
    apart = np.all(gap > CROWD_WIDTHS * 2 * np.maximum(-candidates.pole.real[:, None], -poles.pole.real), axis=1)
    unsettled = candidates.take(apart)
    return poles.plus(unsettled), np.append(start, [_early(unsettled, j, contact, 1 << 62) for j in range(len(unsettled))]).astype(int)


def _early(poles: Poles, i: int, contact: int, frames: int) -> int:
    """The earliest start: after the contact, but never so late that a fast mode is gone."""
    return int(min(contact, frames // 4, 0.3 / -poles.pole[i].real))


def _strong_lines(ring: Ring, poles: Poles, settled: int) -> np.ndarray:
    """Indices of the strongest lines by energy, those well above the noise in their own width; of the unsettled only the very first."""
    pole, amplitude = poles.pole, poles.amplitude
    noise = ring.noise.at(np.asarray(pole.imag * ring.rate / (2 * np.pi))) * (-pole.real * ring.rate / np.pi)
    snr = 10 * np.log10(np.abs(amplitude) ** 2 / 2 / noise)
    order = np.argsort(np.abs(amplitude) ** 2 / pole.real)
    order = order[snr[order] > LEAST_SNR_DB]
    return order[(order < settled) | (np.cumsum(order >= settled) <= MOST_UNSETTLED)][:MOST_LINES]


def crowd(poles: Poles, i: int) -> list[int]:
    """Modes near line i that may be splinters of it."""
    pole = poles.pole
    reach = max(CROWD_WIDTHS * 2 * -pole[i].real, CROWD_SHARE * pole[i].imag)
    return [int(j) for j in np.flatnonzero(np.abs(pole.imag - pole[i].imag) < reach) if j != i]


class _Asker:
    """Asks line by line, on the bins of what is left of the ring with chosen modes put back; spectra are shared."""

    def __init__(self, ring: Ring, poles: Poles, settled: int, rest: FloatArray) -> None:
        self._ring, self._poles, self._settled, self._rest = ring, poles, settled, rest
        self._spectra: dict[tuple[int, int], ComplexArray] = {}

    def ask(self, members: list[int], start: int, *, wary: bool = False) -> Drift | None:
        """The drift, if one line that drifts is what the bins around the members ask for; the first of them sets width and length.

        `wary`: the start is one that `settle` avoided, or the line one that it dropped: only a fit that reaches the noise counts, and
        with three times the evidence.
        """
        row, without = self.rows(members, start)
        bins = row.data.shape[1]
        if bins < 12:
            return None
        pole, near = self._poles.pole[members], len(members) > 1
        # a pole a little off its best only adds to the score, so the clean case needs no fit
        if not near and score(row, complex(pole[0])) < 0.7 * EVIDENCE:
            return None
        one = fit_rows(row, pole[None, :1], steps=12)
        line, one_chi2 = complex(one.pole[0, 0]), float(one.chi2[0])
        settled_chi2 = float(np.sum(without.weight * np.abs(without.data) ** 2))
        behind = float(self._ring.noise.bins_at(line.imag * self._ring.rate / (2 * np.pi)))
        level = _level(min(settled_chi2, one_chi2), bins - 2.0 * len(members), behind)
        bend = score(row, line)
        if not near and bend < 0.7 * EVIDENCE * level:
            return None
        fits = _fits(row, line, one_chi2, settled_chi2, bend, alone=not near)
        if not fits:
            return None
        best = min(fits, key=lambda f: f.chi2)
        level = _level(min(settled_chi2, best.chi2), bins - 3.0, behind)
        gain = (one_chi2 - best.chi2) / level
        if gain < EVIDENCE or (level > AT_NOISE and best.chi2 > 0.5 * one_chi2):
            return None
        if near and best.chi2 > max(1.25 * settled_chi2, settled_chi2 + MORE * level):
            return None
        if wary and (gain < 3 * EVIDENCE or level > AT_NOISE):
            return None
        two, three = rivals(row, pole, self._poles.amplitude[members], line)
        more = MORE * level if level < AT_NOISE else 0.0
        if best.chi2 > two + more or best.chi2 > max(1.25 * three, three + 2 * more):
            return None
        drift = _drift(self._ring, row, start, fits, level, gain)
        knock = self._knock(drift, members)
        if knock <= level or level > AT_NOISE:
            return drift
        if gain * level / knock < EVIDENCE:
            return None
        return replace(drift, significance=gain * level / knock, covariance=drift.covariance * (knock / level))

    def _knock(self, drift: Drift, members: list[int]) -> float:
        """What stands in the band beside the line in its first half time constant, over what does later: a knock bends every line."""
        rate, own = self._ring.rate, [m for m in members if m < self._settled]
        rest = self._rest - drift.synthesise(len(self._rest), rate)
        rest += ring_sum(self._poles.pole[own], self._poles.amplitude[own], 0, len(rest))
        rest[: round(drift.start_s * rate)] = 0.0
        a, t = drift.decay_rate_per_s, drift.start_s
        band = profiles(self._ring, rest, self._poles).near(drift.damped_frequency_hz, a)
        means = band.mean_between(np.array([t, t + 3.0 / a]), np.array([t + KNOCK / a, t + 8.0 / a]))
        return float(means[0] / max(float(means[1]), 1.0))

    def rows(self, members: list[int], start: int) -> tuple[BinRows, BinRows]:
        """From `start`: the bins around the members, with them and without the settled ones among them."""
        ring, pole = self._ring, self._poles.pole[members]
        length = self._length(start, LONG / -pole[0].real)
        width, step = 2 * -pole[0].real, 2 * np.pi / length
        half = max(HALF_BAND_WIDTHS * width, 10 * step)
        lo = max(int((pole.imag.min() - half) / step), int(pole[0].imag / step) - MOST_BINS // 2, 1)
        hi = min(int((pole.imag.max() + half) / step) + 2, length // 2)
        bins = min(hi - lo, MOST_BINS)
        first, n = np.array([lo]), np.array([length])
        without = bins_around(self._spectrum(start, length), first, bins)
        amplitude = self._poles.amplitude[members] * np.exp(pole * start) * (np.array(members) < self._settled)
        d, _, mirror, _ = bin_response(pole[None], first, n, bins, hann=False)
        own = 0.5 * (amplitude[:, None] * d[0] + amplitude.conj()[:, None] * mirror[0]).sum(axis=0)
        hz = np.arange(lo, lo + bins) * (ring.rate / length)
        weight = 2.0 / (ring.noise.at(np.asarray(hz)) * length * ring.rate)[None]
        return BinRows(without + own, weight, first, n), BinRows(without, weight, first, n)

    def _length(self, start: int, wanted: float) -> int:
        """The shortest halving of the ring that covers `wanted` samples (or all there is)."""
        n, best = len(self._rest), fast_length(len(self._rest) - start)
        longest = best
        while n >= max(wanted, 64):
            best = fast_length(n) if n <= longest else best
            n //= 2
        return best

    def _spectrum(self, start: int, length: int) -> ComplexArray:
        if (start, length) not in self._spectra:
            self._spectra[start, length] = spectrum_of(self._rest[start:], length)
        return self._spectra[start, length]


def _level(chi2: float, freedom: float, behind: float) -> float:
    """Residual over assumed noise, never below it: the two estimates weighted by the bins behind each unless they plainly differ."""
    ratio = chi2 / max(freedom, 1.0)
    return max(ratio if ratio > 1.6 else (behind + max(freedom, 1.0) * ratio) / (behind + max(freedom, 1.0)), 1.0)


def _fits(row: BinRows, one: complex, one_chi2: float, settled_chi2: float, bend: float, *, alone: bool) -> list[LineFit]:
    """The laws of either power from the envelope's guess, a lone line's also from the straight fit; none where it is no bend.

    `bend` is the gain of the score test. What a bend does not explain to first order, neither in the bins nor in the envelope, is
    clutter. Where the settled lines reach the noise and the envelope is far from any bend, they are what they seem.
    """
    bins = row.data.shape[1]
    known = [g for g in (guess(row, -one.real, power) for power in (1, 2)) if g is not None]
    bent = min((g.bent for g in known), default=math.inf)
    unlike = bent > BENT_SHARE * max((g.straight for g in known), default=0.0)
    if unlike and one_chi2 - bend > AT_NOISE * bins and bend < LEAST_BENT * one_chi2:
        return []
    resolved = not alone and settled_chi2 < AT_NOISE * bins and one_chi2 - bend > BENT_LEAVES * one_chi2
    if resolved and unlike and bent > FAR_FROM_BENT:
        return []
    hopeless = max(0.8 * settled_chi2, 2.0 * bins) if alone else HOPELESS * max(settled_chi2, float(bins))
    straight = [Law(one.imag, -one.real, 0.0, 0.0, power) for power in (1, 2)] if alone or not known else []
    fits: dict[int, LineFit] = {}
    for start in [g.law for g in known] + straight:
        had = fits.get(start.power)
        if had is None or had.chi2 > AT_NOISE * bins:
            fit = fit_line(row, start, hopeless=hopeless)
            fits[start.power] = fit if had is None or fit.chi2 < had.chi2 else had
    return list(fits.values())


def _drift(ring: Ring, row: BinRows, start: int, fits: list[LineFit], level: float, gain: float) -> Drift:
    """The result: chords over the stretch, averaged over the laws by their likelihood, with what these disagree by."""
    best = min(fits, key=lambda f: f.chi2)
    end = _end_of(ring, best, start)
    share = np.exp(-np.array([f.chi2 - best.chi2 for f in fits]) / level)
    share /= share.sum()
    values = np.array([chord(f.law.vector, f.law.power, end) for f in fits])
    mean = share @ values
    covariance = np.zeros((2, 2))
    for w, fit, value in zip(share, fits, values, strict=True):
        covariance += w * (chord_covariance(fit, end) * level + np.outer(value - mean, value - mean))
    covariance += np.diag(_misfit(row, best, end))
    to_si = np.array([ring.rate / (2 * math.pi), ring.rate])
    back = complex(best.law.rate(np.zeros(1))[0]) * start
    u = np.sqrt(np.maximum(np.diag(best.covariance) * level, 0.0))
    law = best.law
    return Drift(
        replaces=(),
        damped_frequency_hz=float(mean[0] * to_si[0]),
        decay_rate_per_s=float(mean[1] * to_si[1]),
        amplitude=best.amplitude * np.exp(-back),
        covariance=covariance * to_si[:, None] * to_si,
        start_s=start / ring.rate,
        end_s=(start + end) / ring.rate,
        level_range_db=float(NEPER_DB * mean[1] * end),
        limit_frequency_hz=law.omega * float(to_si[0]),
        limit_decay_rate_per_s=law.decay * ring.rate,
        u_limit_frequency_hz=float(u[0] * to_si[0]),
        u_limit_decay_rate_per_s=float(u[1] * law.decay * ring.rate),
        k_loss=law.k,
        u_k_loss=float(u[2]),
        k_frequency=law.glide * law.decay / law.omega,
        u_k_frequency=float(u[3]) * law.decay / law.omega,
        significance=gain,
        law=law,
        start_amplitude=best.amplitude,
    )


def _end_of(ring: Ring, fit: LineFit, start: int) -> float:
    """Samples from the start to the end of the stretch: `STRETCH_DB` lower, near the noise, or the ring's end."""
    last = float(len(ring.samples) - start)
    psd = float(ring.noise.at(fit.law.omega * ring.rate / (2 * math.pi)))
    noise_db = 10 * math.log10(2 * psd * fit.law.decay * ring.rate / math.pi)
    above = 20 * math.log10(abs(fit.amplitude)) - noise_db - LEAST_END_DB
    t = np.linspace(0.0, min(last, 12.0 / fit.law.decay), 600)
    fallen = -NEPER_DB * fit.law.log_line(t).real
    return float(t[max(int(np.searchsorted(fallen, min(STRETCH_DB, max(above, 10.0)))) - 1, 1)])


def _misfit(row: BinRows, fit: LineFit, end: float) -> FloatArray:
    """Variance to add where the chord of the envelope itself differs from the law's by more than twice its noise.

    d ln z = residual / model, averaged over the first and the last fifth of the stretch with the model's power as weight.
    """
    bins = row.data.shape[1]
    spacing = int(row.length[0]) / bins
    left, model = envelope_of(fit.residual), envelope_of(fit.model)
    noise = float(np.sum(1.0 / row.weight[0])) / bins**2
    count = min(int(end / spacing), bins - 2)
    fifth = max(count // 5, 2)
    if count < 10:
        return np.zeros(2)
    change, variance = 0j, 0.0
    for sign, part in ((-1.0, slice(2, 2 + fifth)), (1.0, slice(count - fifth, count))):
        power = float(np.sum(np.abs(model[part]) ** 2))
        change += sign * complex(np.sum(left[part] * model[part].conj())) / power
        variance += 0.5 * noise / power
    over = (count - fifth - 2) * spacing
    shift = np.array([change.imag, change.real]) ** 2
    return np.asarray(np.where(shift > 4 * variance, shift - variance, 0.0) / over**2)


def _passed(poles: Poles, i: int, drift: Drift, rate: float) -> set[int]:
    """The line and its splinters: modes within 4 widths or 1.5 times the shift of where the line passes."""
    passed = np.sort(drift.law.rate(np.array([0.0, (drift.end_s - drift.start_s) * rate])).imag)
    width = 2 * drift.law.decay * max(1.0, 1.0 + drift.law.k)
    margin = max(CROWD_WIDTHS * width, SPLINTER_SHIFTS * float(passed[1] - passed[0]))
    omega = poles.pole.imag
    return {i, *(int(j) for j in np.flatnonzero((omega > passed[0] - margin) & (omega < passed[1] + margin)))}
