"""Rings of known truth: modes, the contact that starts them, and everything a recording adds to them.

Arrays in, arrays out; a random part takes the numpy Generator it draws from, so that a seed names the whole recording.
Full scale is 1. One-sided spectral densities are in full scale squared per hertz: the density of white noise of rms s is 2 s^2 / rate.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import fft

Samples = npt.NDArray[np.float64]

_BLOCK = 1024
"""Samples a block in `ring`: z^(block + j) is the product of two short tables, a hundred times cheaper than one long exponential."""

PINK_CORNER_HZ = 20.0
"""Below this the pink spectrum is flat, so that its power is finite."""


@dataclass(frozen=True, slots=True)
class RingingMode:
    """x(t) = Re(amplitude exp((-decay + 2 pi i f) t)), t counted from the onset; f is the damped frequency."""

    damped_frequency_hz: float
    decay_rate_per_s: float
    amplitude: complex

    def __post_init__(self) -> None:
        if not (self.damped_frequency_hz > 0.0 and self.decay_rate_per_s >= 0.0):
            raise ValueError(
                f"a mode needs a frequency above 0 Hz and a decay rate of 0 or more,"
                f" not {self.damped_frequency_hz} Hz and {self.decay_rate_per_s} 1/s"
            )

    @classmethod
    def from_q(cls, damped_frequency_hz: float, q: float, amplitude: complex) -> RingingMode:
        """The mode of this damped frequency and Q = omega0 / (2 decay), omega0^2 = omega_d^2 + decay^2; q above 1/2."""
        if q <= 0.5:
            raise ValueError(f"a mode of Q {q} does not ring; Q must be above 0.5")
        return cls(damped_frequency_hz, 2 * math.pi * damped_frequency_hz / math.sqrt(4 * q * q - 1), amplitude)

    @property
    def q(self) -> float:
        """Q = omega0 / (2 decay)."""
        if self.decay_rate_per_s == 0.0:
            return math.inf
        return math.hypot(2 * math.pi * self.damped_frequency_hz, self.decay_rate_per_s) / (2 * self.decay_rate_per_s)


def ring(modes: Sequence[RingingMode], rate_hz: float, count: int, onset_s: float = 0.0) -> Samples:
    """The sum of the modes, zero before `onset_s`, which may fall between two samples. Shape (count,)."""
    out = np.zeros(count)
    first = max(math.ceil(onset_s * rate_hz - 1e-9), 0)
    length = count - first
    if length <= 0 or not modes:
        return out
    late_s = first / rate_hz - onset_s
    poles = np.array([complex(-m.decay_rate_per_s, 2 * math.pi * m.damped_frequency_hz) for m in modes])
    amplitudes = np.array([m.amplitude for m in modes]) * np.exp(poles * late_s)
    block_starts = np.arange(0, length, _BLOCK) / rate_hz
    within = np.arange(min(_BLOCK, length)) / rate_hz
    left = amplitudes * np.exp(np.multiply.outer(block_starts, poles))
    right = np.exp(np.multiply.outer(poles, within))
    # Re(LR) by two real products: half the work of the complex one, and BLAS does it.
    grid = left.real @ right.real - left.imag @ right.imag
    out[first:] = grid.reshape(-1)[:length]
    return out


def contact_pulse(rate_hz: float, count: int, onset_s: float, contact_s: float, height: float) -> Samples:
    """A half-sine of this height and length: what the contact force itself leaves in a recording."""
    t = np.arange(count) / rate_hz - onset_s
    inside = (t >= 0) & (t < contact_s)
    return np.where(inside, height * np.sin(math.pi * np.clip(t, 0.0, contact_s) / contact_s), 0.0)


def knock(rng: np.random.Generator, rate_hz: float, count: int, onset_s: float, rms: float, time_constant_s: float) -> Samples:
    """Broadband noise that starts at the onset with this rms and dies with this (amplitude) time constant, a few milliseconds."""
    out = np.zeros(count)
    first = max(math.ceil(onset_s * rate_hz - 1e-9), 0)
    length = min(count - first, math.ceil(40 * time_constant_s * rate_hz))
    if length > 0:
        t = np.arange(length) / rate_hz
        out[first : first + length] = rms * rng.standard_normal(length) * np.exp(-t / time_constant_s)
    return out


def silence(count: int) -> Samples:
    """Zeros."""
    return np.zeros(count)


def white_noise(rng: np.random.Generator, count: int, rms: float) -> Samples:
    """White Gaussian noise."""
    return rms * rng.standard_normal(count)


def white_density(rate_hz: float, rms: float) -> float:
    """One-sided spectral density of white noise of this rms, per hertz."""
    return 2.0 * rms * rms / rate_hz


def pink_noise(rng: np.random.Generator, rate_hz: float, count: int, rms: float, corner_hz: float = PINK_CORNER_HZ) -> Samples:
    """Gaussian noise with a density that falls as 1/f above the corner and is flat below; `rms` is that of the full band."""
    length = int(fft.next_fast_len(count, real=True))
    spectrum = fft.rfft(rng.standard_normal(length))
    frequency_hz = np.arange(spectrum.size) * rate_hz / length
    spectrum *= np.sqrt(pink_density(frequency_hz, rate_hz, rms, corner_hz) * rate_hz / 2.0)
    spectrum[0] = 0.0
    shaped: Samples = fft.irfft(spectrum, length)[:count]
    return shaped


def pink_density(frequency_hz: npt.ArrayLike, rate_hz: float, rms: float, corner_hz: float = PINK_CORNER_HZ) -> Samples:
    """One-sided spectral density of `pink_noise`, per hertz; its integral from 0 to rate/2 is rms^2."""
    frequency = np.asarray(frequency_hz, dtype=np.float64)
    total = 1.0 + math.log(rate_hz / 2.0 / corner_hz)
    density: Samples = rms * rms / total / np.maximum(frequency, corner_hz)
    return density


def steady_tone(rate_hz: float, count: int, frequency_hz: float, amplitude: complex) -> Samples:
    """A tone through the whole recording; the phase of `amplitude` is that at sample 0."""
    return ring([RingingMode(frequency_hz, 0.0, amplitude)], rate_hz, count)


def hum(rate_hz: float, count: int, mains_hz: float, amplitudes: Sequence[complex]) -> Samples:
    """Mains hum: amplitudes[0] at the mains frequency, amplitudes[k] at its (k+1)th multiple; those above half the rate are left out."""
    tones = [RingingMode(mains_hz * (k + 1), 0.0, a) for k, a in enumerate(amplitudes) if mains_hz * (k + 1) < rate_hz / 2 and abs(a) > 0]
    return ring(tones, rate_hz, count)


def strikes(
    modes: Sequence[RingingMode], rate_hz: float, count: int, onsets_s: Sequence[float], strengths: Sequence[float] | None = None
) -> Samples:
    """The same object struck at several times: the rings add, as they do in a linear object that still rings from before."""
    weights = [1.0] * len(onsets_s) if strengths is None else list(strengths)
    if len(weights) != len(onsets_s):
        raise ValueError(f"{len(onsets_s)} onsets but {len(weights)} strengths; give one strength for each onset")
    out = np.zeros(count)
    for onset_s, weight in zip(onsets_s, weights, strict=True):
        out += weight * ring(modes, rate_hz, count, onset_s)
    return out


def clip(samples: Samples, limit: float = 1.0) -> Samples:
    """What a converter does above its full scale: everything beyond the limit is cut off."""
    return np.clip(samples, -limit, limit)


def quantise(samples: Samples, bits: int, rng: np.random.Generator | None = None) -> Samples:
    """Rounded to signed integers of this many bits and scaled back to full scale 1; with a Generator, dithered by a triangle of 1 LSB."""
    steps = 2.0 ** (bits - 1)
    scaled = samples * steps
    if rng is not None:
        scaled = scaled + rng.random(samples.size) - rng.random(samples.size)
    return np.clip(np.round(scaled), -steps, steps - 1) / steps
