"""One strike read: its ring, the noise it stands in, its modes with their budget, its doubts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from qmeter.dsp.noise import FloatArray, NoiseSpectrum, noise_spectrum, white_noise
from qmeter.dsp.strikes import StrikeSpan
from qmeter.estimate.find import Ring, find_modes
from qmeter.estimate.modes import Doubt, Mode, Settings, Spread, Strike
from qmeter.estimate.settle import Settled, settle

LOWEST_HZ = 20.0
HIGHEST_OF_RATE = 0.45
_QUIET_LEAST_S = 0.02
_QUIET_LEAST_FRAMES = 512


def read_strike(samples: FloatArray, rate: float, span: StrikeSpan, settings: Settings) -> Strike:
    """The reading of one strike of `samples` (one channel, full scale 1)."""
    quiet = samples[span.quiet_from : span.quiet_to]
    ring = ring_of(samples, rate, span, settings)
    found = find_modes(ring)
    settled = settle(ring, found, span.contact_end - span.onset)
    modes = _modes(ring, settled, settings)
    noise_dbfs = _dbfs(float(np.sqrt(np.mean(np.square(quiet - np.mean(quiet)))))) if len(quiet) > 16 else _dbfs(float(np.sqrt(ring.noise.psd[-1] * rate / 2)))
    return Strike(
        onset_s=span.onset / rate,
        usable_s=span.usable / rate,
        peak_dbfs=_dbfs(span.peak),
        noise_dbfs=noise_dbfs,
        accepted=bool(modes),
        doubts=(),
        modes=modes,
    )


def ring_of(samples: FloatArray, rate: float, span: StrikeSpan, settings: Settings) -> Ring:
    """The samples from the onset on, with the offset of the quiet taken away, and the noise spectrum."""
    quiet = samples[span.quiet_from : span.quiet_to]
    piece = samples[span.onset : span.end]
    if len(quiet) >= max(_QUIET_LEAST_S * rate, _QUIET_LEAST_FRAMES):
        noise = noise_spectrum(quiet, rate)
        offset = float(np.mean(quiet))
    else:
        noise = _noise_of_tail(piece, rate)
        offset = float(np.mean(piece[-len(piece) // 4 :]))
    low, high = settings.range_hz or (LOWEST_HZ, HIGHEST_OF_RATE * rate)
    return Ring(piece - offset, rate, noise, max(low, LOWEST_HZ), min(high, HIGHEST_OF_RATE * rate))


def _noise_of_tail(piece: FloatArray, rate: float) -> NoiseSpectrum:
    """Noise from the last quarter of the ring, lines left out."""
    tail = piece[-max(len(piece) // 4, 64) :]
    if len(tail) < 128:
        return white_noise(float(np.var(tail)) * 2 / rate + 1e-20, rate)
    return noise_spectrum(tail, rate)


def _modes(ring: Ring, s: Settled, settings: Settings) -> tuple[Mode, ...]:
    """Result objects, strongest first."""
    if not len(s.poles):
        return ()
    rate = ring.rate
    to_si = np.array([rate, rate / (2 * np.pi)])
    level = 20 * np.log10(np.abs(s.poles.amplitude))
    order = np.argsort(-level)
    modes = []
    for i in order:
        pole = s.poles.pole[i]
        decay, hz = -pole.real * rate, pole.imag * rate / (2 * np.pi)
        cov = s.covariance[i] * to_si[:, None] * to_si[None, :]
        budget = {"fit": Spread(float(cov[1, 1]), float(cov[0, 0]), float(cov[0, 1]))}
        if settings.clock_ppm:
            budget["clock"] = clock_spread(hz, decay, settings.clock_ppm)
        noise_rms = float(np.sqrt(ring.noise.at(hz) * decay / np.pi))
        modes.append(
            Mode(
                damped_frequency_hz=float(hz),
                amplitude_decay_rate_per_s=float(decay),
                amplitude=complex(s.poles.amplitude[i]),
                budget=budget,
                level_db=float(level[i] - level[order[0]]),
                level_dbfs=float(level[i]),
                snr_db=float(level[i] - 3.0103 - 20 * np.log10(noise_rms)),
                decay_range_db=float(min(8.6859 * decay * s.length[i] / rate, level[i] - 20 * np.log10(noise_rms))),
            )
        )
    return tuple(modes)


def clock_spread(hz: float, decay: float, ppm: float) -> Spread:
    """The sample clock's part: rectangular of half-width `ppm`, on frequency and decay rate alike (so Q does not feel it)."""
    relative = (ppm * 1e-6) ** 2 / 3.0
    return Spread(relative * hz**2, relative * decay**2, relative * hz * decay)


def _dbfs(level: float) -> float:
    return float(20 * np.log10(max(level, 1e-10)))


__all__ = ["Doubt", "clock_spread", "read_strike", "replace", "ring_of"]
