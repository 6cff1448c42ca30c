"""The whole chain on one page: from samples to a measurement."""

from __future__ import annotations

from qmeter.dsp.noise import FloatArray
from qmeter.dsp.strikes import find_strikes
from qmeter.estimate.modes import Measurement, Settings
from qmeter.estimate.reading import read_strike


def measure_samples(samples: FloatArray, rate: float, settings: Settings | None = None) -> Measurement:
    """Measure one channel: `samples` (frames,) with full scale 1, `rate` in Hz."""
    asked = settings or Settings()
    strikes = tuple(read_strike(samples, rate, span, asked) for span in find_strikes(samples, rate))
    best = max(strikes, key=lambda s: len(s.modes), default=None)
    return Measurement(
        sample_rate_hz=rate,
        channels=1,
        channel=1,
        duration_s=len(samples) / rate,
        strikes=strikes,
        modes=best.modes if best else (),
        doubts=(),
    )
