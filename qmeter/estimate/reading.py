"""One strike read: its ring, the noise it stands in, its modes with their budget, its doubts."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qmeter.dsp.noise import FloatArray, NoiseSpectrum
from qmeter.dsp.strikes import StrikeSpan
from qmeter.estimate import doubts
from qmeter.estimate.crowd import crowd_modes
from qmeter.estimate.drift import Drift, find_drifts
from qmeter.estimate.drifting import by_level, drift_mode, leftover
from qmeter.estimate.find import Poles, Ring, find_modes
from qmeter.estimate.groups import rest_of
from qmeter.estimate.half_power import ModeRing
from qmeter.estimate.hearing import (
    DRIVEN_CROWD,
    FEWEST_CROWD,
    GROWTH_CROWD_DB,
    WELL_EXPLAINED,
    Heard,
    growth_db,
    heard,
    is_driven,
    is_voiced,
    unexplained,
)
from qmeter.estimate.leavings import LOUD_DB, MUCH, share_left
from qmeter.estimate.modes import DecayTrace, Doubt, Mode, Settings, Spread, Strike
from qmeter.estimate.pool import clock_part
from qmeter.estimate.routes import cross_checked, mode_rings
from qmeter.estimate.settle import SHORTEST, Settled, is_forest, settle, settle_forest

_ALONE = 25.0
"""power over the local median of peaks that stand alone: a line that runs far leaves a crowd of lesser ones behind it"""
_DB_PER_NEPER = 8.685889638
_TRACE_POINTS = 240
_HEARD_DB = 20.0
"""and set aside when one this near to the strongest of a longer strike cannot be told in it"""

"""share of the energy; speech leaves three times as much and more"""
_FALLEN_DB = 20.0
"""a strike that has fallen by less when it is cut off is set aside where others are good"""
_LOUD_DB = 10.0
"""a strike is cut off when one of its modes this near to the strongest is"""
_SILENT = 1e-10
"""-200 dBFS: what a level of nothing is written as"""


@dataclass(frozen=True, slots=True)
class Reading:
    """A strike, whether something spoils it though modes rang, whether it is cut off above the noise, and the noise before it."""

    strike: Strike
    spoiled: bool
    cut: bool
    noise: NoiseSpectrum

    def too_short_for(self, modes: tuple[Mode, ...]) -> bool:
        """Whether it is cut off before a loud one of these modes, read in another strike, has fallen by three time constants."""
        loud = [mode.amplitude_decay_rate_per_s for mode in modes if mode.level_db > -_HEARD_DB]
        return self.cut and bool(loud) and min(loud) * self.strike.usable_s < doubts.TIME_CONSTANTS_WANTED


def read_strike(samples: FloatArray, rate: float, span: StrikeSpan, settings: Settings, quantum: float = 0.0) -> Reading:
    """The reading of one strike of `samples` (one channel, full scale 1); `quantum` is the step of the samples."""
    what = heard(samples, rate, span, quantum)
    said = _contact_doubts(span, rate)
    modes: tuple[Mode, ...] = ()
    cut: list[Doubt] = []
    if len(what.ring.samples) < SHORTEST:
        said.append(doubts.too_short(len(what.ring.samples) / rate))
    else:
        modes, reason = _rung(what, span, settings)
        if not modes:
            said.append(reason or doubts.nothing_rang(_dbfs(span.peak), _dbfs(what.noise_rms)))
        elif span.cut_by_end or span.cut_by_next or _short(modes, what, span):
            cut.append(doubts.strike_cut_off(span, (span.end - span.onset) / rate, _end_over_noise_db(what)))
    strike = Strike(
        onset_s=span.onset / rate,
        usable_s=span.usable / rate,
        peak_dbfs=_dbfs(span.peak),
        noise_dbfs=_dbfs(what.noise_rms),
        accepted=bool(modes),
        doubts=(*said, *cut),
        modes=modes,
    )
    spoiled = bool(modes) and (span.clipped or span.second_contact is not None or _short(modes, what, span))
    return Reading(strike, spoiled, span.cut_by_end or span.cut_by_next, what.ring.noise)


def _contact_doubts(span: StrikeSpan, rate: float) -> list[Doubt]:
    said = []
    if span.clipped:
        said.append(doubts.clipped(_dbfs(span.peak)))
    if span.second_contact is not None:
        said.append(doubts.double_strike((span.second_contact - span.onset) / rate))
    return said


def _rung(what: Heard, span: StrikeSpan, settings: Settings) -> tuple[tuple[Mode, ...], Doubt | None]:
    """The modes of a ring, checked and doubted, or why there are none."""
    ring, contact = what.ring, what.contact
    try:
        # rows that run away in a fit overflow; what they come to is not finite, and is dropped
        with np.errstate(all="ignore"):
            found = find_modes(ring)
            # the rough fit says it of most speech, whose forest of harmonics would take long to settle
            left = unexplained(ring, found, contact)
            forest, driven = is_forest(found, left), len(found) > 0 and is_driven(what, left)
            settled = None
            if driven and len(found) <= FEWEST_CROWD:
                # two lines that beat grow, too, and a rough fit of few lines is no witness against them
                settled = _finite(settle(ring, found, contact))
                driven = unexplained(ring, settled.poles, contact) >= WELL_EXPLAINED
            if driven and not _holds_still(ring, contact, what.noise_rms):
                return (), doubts.driven(what.growth_db, left)
            if settled is None:
                settled = _finite(settle_forest(ring, contact) if forest else settle(ring, found, contact))
            drifts = find_drifts(ring, settled.poles, settled.start, contact=contact, candidates=found)
            if not drifts and not forest and _unstood(found, settled):
                found = find_modes(ring, over_local=_ALONE)
                alone = _finite(settle(ring, found, contact))
                drifts = find_drifts(ring, alone.poles, alone.start, contact=contact, candidates=found)
                settled = alone if drifts else settled
            if drifts:
                ring, settled = _without(ring, settled, drifts, contact)
            if not len(settled.poles) and not drifts:
                return (), None
            modes = _modes(ring, settled, settings, settled.model) if len(settled.poles) else []
            straight = _doubted(replace(what, ring=ring), span, settled, modes) if modes else ()
            return by_level([*straight, *(drift_mode(d, ring, settled.poles, settings.clock_ppm) for d in drifts)]), None
    except np.linalg.LinAlgError:
        return (), None


def _holds_still(ring: Ring, contact: int, noise_rms: float) -> bool:
    """Whether the ring itself, from its last contact on, hardly grows, and many modes that hold still and share no pitch explain it.

    They do for a ring after clatter, however crowded. The end of a syllable dies away, too, but on the harmonics of a voice.
    """
    if growth_db(ring.samples, ring.rate, noise_rms**2) > GROWTH_CROWD_DB:
        return False
    modes = crowd_modes(ring, contact).poles
    if len(modes) < FEWEST_CROWD or is_voiced(modes.pole.imag * ring.rate / (2.0 * np.pi)):
        return False
    return unexplained(ring, modes, contact) < DRIVEN_CROWD


def _unstood(found: Poles, settled: Settled) -> bool:
    """Whether the loudest candidate has no settled mode within three widths: it may run so far that it was taken for many."""
    if not len(found):
        return False
    top = int(np.argmax(np.abs(found.amplitude) ** 2 / -found.pole.real))
    gap = np.abs(settled.poles.pole.imag - found.pole[top].imag)
    return bool(np.all(gap > 6.0 * np.maximum(-settled.poles.pole.real, -found.pole[top].real)))


def _without(ring: Ring, settled: Settled, drifts: tuple[Drift, ...], contact: int) -> tuple[Ring, Settled]:
    """The ring less its drifting lines, and what else is in it, looked for anew: a line that runs hides its neighbours."""
    count = len(ring.samples)
    rest = ring.samples - np.sum([d.synthesise(count, ring.rate) for d in drifts], axis=0)
    ring = replace(ring, samples=rest)
    gone = np.array([i in {j for d in drifts for j in d.replaces} for i in range(len(settled.poles))], dtype=bool)
    if not np.any(~gone) and not len(find_modes(ring, rounds=1)):
        return ring, settled.take(~gone)
    again = _finite(settle(ring, find_modes(ring), contact))
    return ring, again.take(~leftover(again.poles, drifts, ring.rate))


def _finite(s: Settled) -> Settled:
    """Modes all of whose numbers are numbers."""
    ok = np.isfinite(s.poles.pole) & np.isfinite(s.poles.amplitude) & (np.abs(s.poles.amplitude) > 0) & (s.poles.pole.real < 0)
    variance = np.diagonal(s.covariance, axis1=1, axis2=2)
    told = np.isfinite(s.covariance).all(axis=(1, 2)) & np.isfinite(s.model).all(axis=(1, 2)) & (variance > 0).all(axis=1)
    return s.take(ok & told)


def _modes(ring: Ring, s: Settled, settings: Settings, model: FloatArray | None = None) -> list[Mode]:
    """Result objects in the order of the poles.

    `model`: (M, 2, 2) covariance of (alpha, omega) per sample of what the model leaves out, found by fitting from other starts, over
    other lengths and windows; it becomes that part of the budget.
    """
    rate = ring.rate
    level = 20.0 * np.log10(np.abs(s.poles.amplitude))
    modes = []
    for i, pole in enumerate(s.poles.pole):
        decay, hz = float(-pole.real * rate), float(pole.imag * rate / (2.0 * np.pi))
        budget = {"fit": _spread(s.covariance[i], rate)}
        if model is not None:
            budget["model"] = _spread(model[i], rate)
        noise_db = 10.0 * np.log10(float(ring.noise.at(hz)) * decay / np.pi)
        snr = float(level[i] - 3.0103 - noise_db)
        seen = decay * min(float(s.length[i]), len(ring.samples) - float(s.start[i])) / rate
        modes.append(
            Mode(
                damped_frequency_hz=hz,
                amplitude_decay_rate_per_s=decay,
                amplitude=complex(s.poles.amplitude[i]),
                budget=budget | clock_part(hz, decay, settings.clock_ppm),
                level_db=float(level[i] - np.max(level)),
                level_dbfs=float(level[i]),
                snr_db=snr,
                decay_range_db=max(min(_DB_PER_NEPER * seen, snr - _DB_PER_NEPER * decay * float(s.start[i]) / rate), 0.0),
            )
        )
    return modes


def _spread(covariance: FloatArray, rate: float) -> Spread:
    """(alpha, omega) per sample to (Hz, 1/s)."""
    to_hz = rate / (2.0 * np.pi)
    return Spread(float(covariance[1, 1] * to_hz**2), float(covariance[0, 0] * rate**2), float(covariance[0, 1] * rate * to_hz))


def _doubted(what: Heard, span: StrikeSpan, s: Settled, modes: list[Mode]) -> tuple[Mode, ...]:
    """The modes with their other routes, decay strips and doubts; strongest first."""
    ring = what.ring
    cut = span.cut_by_end or span.cut_by_next
    paired = doubts.close_pairs(modes)
    own: list[Mode] = []
    for i, mode in enumerate(modes):
        said = [paired[i], doubts.filter_limited(mode, ring.low_hz, ring.high_hz), doubts.unsettled(mode)]
        seen_s = len(ring.samples) / ring.rate
        nepers = mode.amplitude_decay_rate_per_s * seen_s
        fallen_db = _DB_PER_NEPER * nepers
        over = mode.snr_db - fallen_db
        short = nepers < doubts.TIME_CONSTANTS_WANTED or (cut and fallen_db < doubts.FALL_WANTED_DB)
        if over > doubts.CUT_DB and short:
            said.append(doubts.mode_cut_off(mode.amplitude_decay_rate_per_s, seen_s, over))
        elif mode.decay_range_db < doubts.FEW_DB:
            said.append(doubts.few_decibels(mode.decay_range_db))
        own.append(replace(mode, doubts=tuple(doubt for doubt in said if doubt is not None)))
    rest = rest_of(ring, s.poles)
    rings = _rings(ring, s, rest)
    checked = [_bent(mode, ring, rest, s, i) for i, mode in enumerate(cross_checked(own, rings))]
    drawn = [replace(mode, trace=_trace(mode, r, s, i, what)) for i, (mode, r) in enumerate(zip(checked, rings, strict=True))]
    return tuple(drawn)


def _bent(mode: Mode, ring: Ring, rest: FloatArray, s: Settled, i: int) -> Mode:
    """A loud mode of a crowd, with the doubt that it bends at first where all modes together leave much of the sound around it."""
    if np.isfinite(s.excess[i]) or mode.level_db < -LOUD_DB or any(d.code == "curved-decay" for d in mode.doubts):
        return mode
    start, decay = int(s.start[i]), mode.amplitude_decay_rate_per_s
    share = share_left(ring.samples, rest, ring.rate, start, mode.damped_frequency_hz, decay)
    return replace(mode, doubts=(*mode.doubts, doubts.bends_early(share, 1.0 / decay))) if share > MUCH else mode


def _rings(ring: Ring, s: Settled, rest: FloatArray) -> list[ModeRing | None]:
    hz = s.poles.pole.imag * ring.rate / (2.0 * np.pi)
    return mode_rings(rest, ring.rate, s.poles.pole, s.poles.amplitude, s.start.tolist(), ring.noise.at(hz).tolist())


def _trace(mode: Mode, alone: ModeRing | None, s: Settled, i: int, what: Heard) -> DecayTrace | None:
    """The envelope of the mode's band, and the fitted line down to the noise in it."""
    if alone is None or not np.iscomplexobj(alone.samples):
        return None
    power = np.abs(alone.samples) ** 2
    join = -(-len(power) // _TRACE_POINTS)
    joined = power[: len(power) // join * join].reshape(-1, join).mean(axis=1)
    step = alone.step_s * join
    decay = mode.amplitude_decay_rate_per_s
    start = float(s.start[i]) / what.ring.rate
    floor = float(10.0 * np.log10(max(alone.noise_variance, _SILENT**2)))
    top = mode.level_dbfs - _DB_PER_NEPER * decay * start
    until = min(
        (top - floor) / (_DB_PER_NEPER * decay), float(s.length[i]) / what.ring.rate, len(what.ring.samples) / what.ring.rate - start
    )
    until = max(until, step)
    levels = tuple(float(x) for x in 10.0 * np.log10(np.maximum(joined, _SILENT**2)))
    return DecayTrace(
        start + 0.5 * (step - alone.step_s), step, levels, floor, start, start + until, (top, top - _DB_PER_NEPER * decay * until)
    )


def _short(modes: tuple[Mode, ...], what: Heard, span: StrikeSpan) -> bool:
    """Whether the strike, or a loud mode of it, is cut off before it has fallen far enough."""
    samples = what.ring.samples
    seen_s = len(samples) / what.ring.rate
    twentieth = max(int(0.02 * what.ring.rate), 16)
    head, end = (float(np.sqrt(np.mean(part**2))) for part in (samples[:twentieth], samples[-twentieth:]))
    if (span.cut_by_end or span.cut_by_next) and _dbfs(head) - _dbfs(end) < _FALLEN_DB and end > 2.0 * what.noise_rms:
        return True
    return any(
        mode.level_db > -_LOUD_DB
        and mode.amplitude_decay_rate_per_s * seen_s < doubts.TIME_CONSTANTS_WANTED
        and mode.snr_db - _DB_PER_NEPER * mode.amplitude_decay_rate_per_s * seen_s > doubts.CUT_DB
        for mode in modes
    )


def _end_over_noise_db(what: Heard) -> float | None:
    """Level of the last 20 ms over the noise; None where it does not stand above it."""
    last = what.ring.samples[-max(int(0.02 * what.ring.rate), 16) :]
    over = _dbfs(float(np.sqrt(np.mean(last**2)))) - _dbfs(what.noise_rms)
    return over if over > 3.0 else None


def _dbfs(level: float) -> float:
    return float(20.0 * np.log10(max(level, _SILENT)))
