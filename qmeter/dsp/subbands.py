"""Complex envelopes of many bands from one transform: slices of the spectrum, tapered, moved to zero frequency, transformed back."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft

from qmeter.dsp.band import ComplexArray, FloatArray, fade

EDGE = 0.25
"""share of a band on either side over which it fades"""
FADED = 1.0 - 1.25 * EDGE
"""mean square of the fade, 3/8 over each edge: noise in an envelope's samples is less than in the band's middle by so much"""
CLEAR = 0.14
"""share on either side in which a line is too faint to be told from its neighbour's alias"""


@dataclass(frozen=True, slots=True)
class Envelopes:
    """samples: (R, count), one band a row, at rate_hz; zero frequency of a row stands for first_hz of it."""

    samples: ComplexArray
    first_hz: FloatArray
    rate_hz: float


class Subbands:
    """The spectrum of a stretch of sound, ready to be cut into bands."""

    def __init__(self, samples: FloatArray, rate: float) -> None:
        self._size = scipy.fft.next_fast_len(len(samples), real=True)
        self._bins: ComplexArray = np.asarray(scipy.fft.rfft(samples, self._size))
        self._rate = rate
        self.duration_s = len(samples) / rate

    def envelopes(self, centre_hz: FloatArray, bandwidth_hz: float, count: int) -> Envelopes:
        """The first `count` samples of each band's envelope: the analytic signal of the band, sampled once per 1/bandwidth."""
        width = max(round(bandwidth_hz * self._size / self._rate), 8)
        first = np.round(centre_hz * self._size / self._rate).astype(np.int64) - width // 2
        at = first[:, None] + np.arange(width)
        rows = np.where((at >= 0) & (at < len(self._bins)), self._bins[np.clip(at, 0, len(self._bins) - 1)], 0.0) * fade(
            width, max(int(EDGE * width), 1)
        )
        envelope = np.asarray(scipy.fft.ifft(rows, axis=1, overwrite_x=True)) * (2.0 * width / self._size)
        step = self._rate / self._size
        return Envelopes(envelope[:, :count], np.asarray(first * step, dtype=np.float64), width * step)


def gain(turns: FloatArray, decay: FloatArray) -> ComplexArray:
    """What the fade leaves of lines at these places in their bands (0 to 1), decaying by so many nepers a sample.

    The fade as a function of frequency, continued to the line's complex frequency: exact where the line decays within the window.
    """
    place = turns + 1j * decay / (2.0 * np.pi)
    inward = np.where(turns < 0.5, place, 1.0 - place)
    return np.asarray(np.where(inward.real < EDGE, 0.5 - 0.5 * np.cos(np.pi * inward / EDGE), 1.0))
