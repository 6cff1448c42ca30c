"""Modes driven by a contact force, computed by time stepping. Imports nothing from qmeter: a second opinion on what a struck object does.

A mode obeys x'' + 2 a x' + (w^2 + a^2) x = gain * force(t), w its damped frequency. Its velocity is Re(s) with the one-pole state

    s' = (-a + i w) s + gain * (1 + i a / w) * force(t),      v = Re(s)

(check: the impulse response of v is exp(-a t) (cos w t - (a/w) sin w t)). While the force acts, s is stepped at an oversampled rate with
the force taken as straight between its samples (first-order hold, exact for that); afterwards it is stepped from sample to sample.
Frequency and Q are true by construction.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

OVERSAMPLING = 16
FORGOTTEN = 30.0
"""Time constants after which a mode is no longer stepped: it lies 260 dB down."""


@dataclass(frozen=True)
class Blow:
    """One half-sine push: when it begins (s after the onset), how long it lasts, and its peak force."""

    start_s: float
    contact_s: float
    peak: float


def force_at(blows: list[Blow], t: Array) -> Array:
    """Contact force at times t (s after the onset)."""
    total = np.zeros_like(t)
    for blow in blows:
        x = (t - blow.start_s) / blow.contact_s
        total += np.where((x >= 0) & (x <= 1), blow.peak * np.sin(math.pi * np.clip(x, 0.0, 1.0)), 0.0)
    return total


def hold_weights(pole: complex, step_s: float) -> tuple[complex, complex]:
    """Weights of the force at the start and the end of a step, first-order hold: integral of exp(pole (h - t)) times the straight line."""
    ph = pole * step_s
    if abs(ph) < 0.05:  # series: the closed form cancels
        start = step_s * sum(ph**k * (k + 1) / math.factorial(k + 2) for k in range(9))
        end = step_s * sum(ph**k / math.factorial(k + 2) for k in range(9))
        return start, end
    grown = np.exp(ph)
    start = step_s * (grown * (ph - 1) + 1) / ph**2
    end = step_s * (grown - 1 - ph) / ph**2
    return complex(start), complex(end)


def struck(
    frequency_hz: Array, decay_per_s: Array, gain: Array, blows: list[Blow], rate_hz: float, count: int
) -> tuple[Array, int, Complex]:
    """`count` samples of the velocity from the onset on, the first sample after the last contact, and the complex amplitudes there.

    Each mode rings on from that sample n0 as Re(amplitude exp((-a + i w) (n - n0) / rate)).
    """
    free_from = math.ceil(max(b.start_s + b.contact_s for b in blows) * rate_hz) + 1
    fine = np.arange(free_from * OVERSAMPLING + 1) / (rate_hz * OVERSAMPLING)
    force = force_at(blows, fine)
    step_s = 1.0 / (rate_hz * OVERSAMPLING)
    out = np.zeros(count)
    amplitudes = np.zeros(len(frequency_hz), dtype=np.complex128)
    for m, (f, a, g) in enumerate(zip(frequency_hz, decay_per_s, gain, strict=True)):
        omega = 2 * math.pi * f
        pole = complex(-a, omega)
        drive = complex(g, g * a / omega)
        start, end = hold_weights(pole, step_s)
        push = np.zeros(force.size, dtype=np.complex128)
        push[1:] = drive * (start * force[:-1] + end * force[1:])
        state = lfilter([1.0], [1.0, -np.exp(pole * step_s)], push)
        out[: free_from + 1] += state[::OVERSAMPLING].real[: count if count < free_from + 1 else None]
        amplitudes[m] = state[-1]
        length = min(count - free_from, math.ceil(FORGOTTEN / a * rate_hz))
        impulse = np.zeros(length, dtype=np.complex128)
        impulse[0] = state[-1]
        out[free_from + 1 : free_from + length] += lfilter([1.0], [1.0, -np.exp(pole / rate_hz)], impulse).real[1:]
    return out, free_from, amplitudes
