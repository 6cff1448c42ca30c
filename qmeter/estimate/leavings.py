"""What the modes of a crowd leave of the sound around a loud one: a drum's glide, say, of which they are only the end."""

from __future__ import annotations

import numpy as np
import scipy.fft

from qmeter.dsp.band import FloatArray

AROUND = 0.25
"""of the frequency, either side: a drum's glide spans as much"""
LOUD_DB = 10.0
"""modes this far below the loudest, at most, are asked"""
MUCH = 0.5
"""share of the energy; around real loud modes that do not glide 0.003 to 0.02 was left, around gliding drums more than there was"""
_FEWEST = 64


def share_left(samples: FloatArray, rest: FloatArray, rate: float, start: int, frequency_hz: float, decay_rate_per_s: float) -> float:
    """Share of the energy around a mode, in its first time constant after `start`, that stays in `rest` when all modes are taken away.

    samples, rest: the ring and what the modes leave of it, of one length. 0 where there is too little to tell.
    """
    length = min(max(int(rate / decay_rate_per_s), _FEWEST), len(samples) - start)
    if length < _FEWEST:
        return 0.0
    first, last = ((1.0 + side * AROUND) * frequency_hz * length / rate for side in (-1, 1))
    band = slice(max(int(first), 1), max(int(last) + 2, int(first) + 3))
    whole, left = (float(np.sum(np.abs(scipy.fft.rfft(x[start : start + length])[band]) ** 2)) for x in (samples, rest))
    return left / whole if whole > 0.0 else 0.0
