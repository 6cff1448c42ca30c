"""Rings that do not reach the noise: many modes over one another, of which a fit to the noise would be a fit to the neighbours.

They are looked at through many windows (`chart`); what holds still is a mode (`stable`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.estimate.chart import chart_of
from qmeter.estimate.find import Pick, Poles, Ring
from qmeter.estimate.poles import ComplexArray, FloatArray, IntArray
from qmeter.estimate.stable import PROMINENT, prominence, stable_lines


@dataclass(frozen=True, slots=True)
class Crowd:
    """Modes with the two parts of their covariance, each (M, 2, 2) of (alpha, omega) per sample.

    fit: what one good window is worth. model: what the windows disagree by beyond that. seen: (M,) windows that show a mode.
    start, length: samples that the windows begin at, and cover.
    """

    poles: Poles
    fit: FloatArray
    model: FloatArray
    seen: IntArray
    start: int
    length: int

    def take(self, which: Pick) -> Crowd:
        """Some of them."""
        return Crowd(self.poles.take(which), self.fit[which], self.model[which], self.seen[which], self.start, self.length)


def crowd_modes(ring: Ring, contact: int) -> Crowd:
    """All modes of a crowded ring that hold still."""
    start = min(contact, len(ring.samples) // 4)
    lines = stable_lines(*chart_of(ring, start))
    stands_out = prominence(ring.samples[start:], ring.rate, lines.value[:, 1], lines.value[:, 0])
    lines = lines.take(stands_out > PROMINENT)
    pole: ComplexArray = np.asarray((-lines.value[:, 0] + 1j * lines.value[:, 1]) / ring.rate, dtype=np.complex128)
    single = lines.single / ring.rate**2
    beyond = np.maximum(lines.scatter / ring.rate**2 - single[:, None], 0.0)
    fit = single[:, None, None] * np.eye(2)
    model = beyond[:, :, None] * np.eye(2)
    return Crowd(Poles(pole, lines.amplitude * np.exp(-pole * start)), fit, model, lines.seen, start, len(ring.samples) - start)
