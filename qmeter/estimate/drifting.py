"""A drifting line as a mode of the reading: its chord over the stretch it was followed, its decay strip, its doubt."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from qmeter.dsp.band import ring_sum
from qmeter.estimate.drift import Drift
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.modes import DecayTrace, Mode, Spread
from qmeter.estimate.pool import clock_part

_DB_PER_NEPER = 8.685889638
_TRACE_POINTS = 120
_SILENT = 1e-10
LEFTOVER_DB = 26.0
"""what lies this far below a drifting line and close to it is what its law left over, no mode"""


def leftover(poles: Poles, drifts: tuple[Drift, ...], rate: float) -> np.ndarray:
    """(M,) true for poles far below a drifting line, within four of its widths, 1.5 times its shift, or their own width if that is wider.

    What a law of two numbers misses of the onset of a line is over soon: a fast, faint pole beside it.
    """
    out = np.zeros(len(poles), bool)
    hz, own_width = poles.pole.imag * rate / (2 * np.pi), -poles.pole.real * rate / np.pi
    for d in drifts:
        shift = abs(d.k_frequency) * d.limit_frequency_hz
        reach = max(4.0 * d.decay_rate_per_s / np.pi, 1.5 * shift)
        low = 20 * np.log10(np.abs(poles.amplitude) / abs(d.amplitude)) < -LEFTOVER_DB
        out |= (np.abs(hz - d.damped_frequency_hz) < np.maximum(reach, own_width)) & low
    return out


def drift_mode(d: Drift, ring: Ring, others: Poles, clock_ppm: float) -> Mode:
    """The mode that a drift stands for; `ring` is what is left without the drifting lines, `others` the straight modes in it."""
    hz, decay = d.damped_frequency_hz, d.decay_rate_per_s
    level = float(20 * np.log10(abs(d.amplitude)))
    noise_db = float(10 * np.log10(float(ring.noise.at(hz)) * decay / np.pi))
    fit = Spread(float(d.covariance[0, 0]), float(d.covariance[1, 1]), float(d.covariance[0, 1]))
    return Mode(
        damped_frequency_hz=float(hz),
        amplitude_decay_rate_per_s=float(decay),
        amplitude=complex(d.amplitude),
        budget={"fit": fit} | clock_part(hz, decay, clock_ppm),
        level_db=0.0,
        level_dbfs=level,
        snr_db=level - 3.0103 - noise_db,
        decay_range_db=float(d.level_range_db),
        doubts=(d.doubt(ring.rate),),
        trace=_trace(d, ring, others, level),
    )


def by_level(modes: Sequence[Mode]) -> tuple[Mode, ...]:
    """Strongest first, levels counted from the strongest."""
    if not modes:
        return ()
    top = max(mode.level_dbfs for mode in modes)
    return tuple(sorted((replace(mode, level_db=mode.level_dbfs - top) for mode in modes), key=lambda mode: -mode.level_dbfs))


def _trace(d: Drift, ring: Ring, others: Poles, level: float) -> DecayTrace:
    """The envelope of the band that the line runs through; the straight line of the chord over the stated stretch."""
    count = len(ring.samples)
    alone = ring.samples - ring_sum(others.pole, others.amplitude, 0, count) + d.synthesise(count, ring.rate)
    spectrum = np.fft.rfft(alone)
    step = ring.rate / count
    half = max(8.0 * d.decay_rate_per_s / np.pi, 2.0 * abs(d.k_frequency) * d.limit_frequency_hz, 16 * step)
    low = max(int((d.damped_frequency_hz - half) / step), 1)
    band = spectrum[low : int((d.damped_frequency_hz + half) / step) + 1]
    power = np.abs(np.fft.ifft(band) * (2.0 * len(band) / count)) ** 2
    join = -(-len(power) // _TRACE_POINTS)
    joined = power[: len(power) // join * join].reshape(-1, join).mean(axis=1)
    bandwidth = len(band) * step
    floor = float(10 * np.log10(max(2.0 * float(ring.noise.at(d.damped_frequency_hz)) * bandwidth, _SILENT**2)))
    top = level - _DB_PER_NEPER * d.decay_rate_per_s * d.start_s
    end = top - _DB_PER_NEPER * d.decay_rate_per_s * (d.end_s - d.start_s)
    levels = tuple(float(x) for x in 10 * np.log10(np.maximum(joined, _SILENT**2)))
    points = count / ring.rate / len(power) * join
    return DecayTrace(0.5 * points, points, levels, floor, float(d.start_s), float(d.end_s), (top, end))
