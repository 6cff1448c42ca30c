"""The whole chain on one page: from samples to a measurement."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from qmeter.dsp.noise import FloatArray, noise_spectrum
from qmeter.dsp.strikes import find_strikes
from qmeter.errors import OutOfRangeError, UsageError
from qmeter.estimate import doubts
from qmeter.estimate.hearing import HIGHEST_OF_RATE, LOWEST_HZ, step_of
from qmeter.estimate.modes import Doubt, Measurement, Mode, Settings, Strike
from qmeter.estimate.pool import measurement_doubts, pool_readings
from qmeter.estimate.reading import Reading, read_strike
from qmeter.recording import Recording

NEAR = 0.03
"""how far from the frequency asked about a mode may ring, relative; or one half-power width"""
_MEASURED_CHANNELS = 2
_TONE_SECONDS = 4.0
_PLAIN_PEAKS = (2.0**-10, 2.0**10)
"""samples whose peak lies outside are scaled, so that their squares are numbers of a usual size"""


def measure(recording: Recording, settings: Settings | None = None) -> Measurement:
    """Every mode of the recording with its uncertainty; `modes` is empty, with a doubt that says why, where nothing rang.

    Errors: UsageError, OutOfRangeError where the settings cannot be meant; RecordingError "no-such-channel".
    """
    asked = settings or Settings()
    _check(asked, recording.rate)
    bits = recording.origin.bits if recording.origin else None
    measured = [
        replace(_measure_channel(recording.channel(number), recording.rate, asked, bits), channel=number)
        for number in _channels(recording, asked)
    ]
    best = max(measured, key=_merit)
    origin = recording.origin
    return replace(
        best,
        channels=recording.channels,
        strikes=tuple(replace(strike, onset_s=strike.onset_s + recording.starts_at_s) for strike in best.strikes),
        doubts=(*(Doubt(*doubt) for doubt in recording.doubts), *best.doubts),
        file=origin.file if origin else None,
        sha256=origin.sha256 if origin else None,
    )


def measure_samples(samples: FloatArray, rate: float, settings: Settings | None = None) -> Measurement:
    """Measure one channel: `samples` (frames,) with full scale 1, finite; `rate` in Hz."""
    asked = settings or Settings()
    _check(asked, rate)
    return _measure_channel(np.asarray(samples, dtype=np.float64), rate, asked, None)


def _measure_channel(samples: FloatArray, rate: float, asked: Settings, bits: int | None) -> Measurement:
    """Strikes, each one's modes, and the modes pooled over those that can be used."""
    gain = _gain(samples)
    if gain != 1.0:
        samples, bits = samples / gain, None
    quantum = step_of(samples, bits)
    readings = [read_strike(samples, rate, span, asked, quantum) for span in find_strikes(samples, rate)]
    strikes = _accepted(readings)
    modes = pool_readings([strike.modes for strike in strikes if strike.accepted], clock_ppm=asked.clock_ppm)
    chosen, why_none = _asked_for(modes, asked)
    said = [] if chosen else [why_none or (doubts.none_trusted(len(strikes)) if strikes else doubts.no_strike(_peak_dbfs(samples)))]
    said += _tones(samples, rate, readings, modes, quantum)
    said += measurement_doubts(sum(strike.accepted for strike in strikes), 1, chosen)
    kept = tuple(replace(strike, modes=_asked_for(strike.modes, asked)[0]) for strike in strikes)
    result = Measurement(rate, 1, 1, len(samples) / rate, kept, chosen, tuple(said))
    return result if gain == 1.0 else _rescaled(result, gain)


def _accepted(readings: Sequence[Reading]) -> tuple[Strike, ...]:
    """The strikes, those that are spoiled set aside when others are good; so are those cut too short for what the longest one shows."""
    good = [reading for reading in readings if reading.strike.modes and not reading.spoiled]
    if good:
        longest = max(good, key=lambda reading: reading.strike.usable_s)
        good = [reading for reading in good if reading is longest or not reading.too_short_for(longest.strike.modes)]
    kept = good or [reading for reading in readings if reading.strike.modes]
    return tuple(replace(reading.strike, accepted=any(reading is other for other in kept)) for reading in readings)


def _asked_for(modes: tuple[Mode, ...], asked: Settings) -> tuple[tuple[Mode, ...], Doubt | None]:
    """The modes that were asked for, strongest first, and why there are none if there are others."""
    kept, why = modes, None
    if asked.range_hz is not None and modes:
        low, high = asked.range_hz
        kept = tuple(mode for mode in kept if low <= mode.damped_frequency_hz <= high)
        why = doubts.none_in_range(low, high, len(modes))
    if asked.near_hz is not None and kept:
        near = asked.near_hz
        nearest = min(kept, key=lambda mode: abs(mode.damped_frequency_hz - near))
        reach = max(NEAR * near, nearest.amplitude_decay_rate_per_s / math.pi)
        kept, why = ((nearest,), None) if abs(nearest.damped_frequency_hz - near) <= reach else ((), doubts.none_near(near, NEAR, nearest))
    return kept[: asked.most], None if kept else why


def _tones(samples: FloatArray, rate: float, readings: Sequence[Reading], modes: Sequence[Mode], quantum: float) -> list[Doubt]:
    """What does not decay, named: from the quiet of the first strike that has one, or without strikes from the last seconds."""
    strongest = max((abs(mode.amplitude) for mode in modes), default=None)
    spectra = [reading.noise for reading in readings if len(reading.noise.tones_hz)]
    if not readings and np.ptp(samples) > 0 and len(samples) > 512:
        spectra = [noise_spectrum(samples[-int(_TONE_SECONDS * rate) :], rate, quantum=quantum)]
    said = doubts.steady_tones(max(spectra, key=lambda noise: -noise.resolution_hz), strongest) if spectra else None
    return [] if said is None else [said]


# ---- channels ----


def _channels(recording: Recording, asked: Settings) -> list[int]:
    """The channels worth measuring: the one asked for, or the two with the largest peak over their own quiet; alike ones once."""
    if asked.channel is not None:
        return [asked.channel]
    if recording.channels == 1:
        return [1]
    kept = [1]
    for number in range(2, recording.channels + 1):
        if not any(np.array_equal(recording.samples[:, number - 1], recording.samples[:, other - 1]) for other in kept):
            kept.append(number)
    if len(kept) <= _MEASURED_CHANNELS:
        return kept
    return sorted(sorted(kept, key=lambda number: -_rise(recording.channel(number), recording.rate))[:_MEASURED_CHANNELS])


def _rise(samples: FloatArray, rate: float) -> float:
    """Power of the loudest 10 ms over that of the quietest fifth."""
    block = max(int(0.01 * rate), 1)
    count = len(samples) // block
    if count < 2:
        return 0.0
    power = np.var(samples[: count * block].reshape(count, block), axis=1)
    quiet = float(np.quantile(power, 0.2))
    return float(power.max()) / quiet if quiet > 0.0 else float(power.max() > 0.0)


def _merit(measurement: Measurement) -> tuple[float, float]:
    """How well a channel decays: decibels over the noise at the onset, over all its modes; where nothing rang, the strikes."""
    return sum(max(mode.snr_db, 0.0) for mode in measurement.modes), len(measurement.strikes)


# ---- scale, settings ----


def _gain(samples: FloatArray) -> float:
    """A power of two by which the samples are to be divided; 1 for those of a usual size."""
    peak = float(np.max(np.abs(samples), initial=0.0))
    if peak == 0.0 or _PLAIN_PEAKS[0] <= peak <= _PLAIN_PEAKS[1]:
        return 1.0
    return 2.0 ** max(math.frexp(peak)[1], -1020)


def _rescaled(measurement: Measurement, gain: float) -> Measurement:
    """The measurement of samples that had been divided by `gain`."""
    shift = 20.0 * math.log10(gain)

    def mode(m: Mode) -> Mode:
        t = m.trace
        if t is not None:
            levels = tuple(level + shift for level in t.level_dbfs)
            t = replace(t, level_dbfs=levels, floor_dbfs=t.floor_dbfs + shift, fit_dbfs=(t.fit_dbfs[0] + shift, t.fit_dbfs[1] + shift))
        return replace(m, amplitude=m.amplitude * gain, level_dbfs=m.level_dbfs + shift, trace=t)

    strikes = tuple(
        replace(s, peak_dbfs=s.peak_dbfs + shift, noise_dbfs=s.noise_dbfs + shift, modes=tuple(mode(m) for m in s.modes))
        for s in measurement.strikes
    )
    return replace(measurement, strikes=strikes, modes=tuple(mode(m) for m in measurement.modes))


def _peak_dbfs(samples: FloatArray) -> float:
    """Peak about the mean; -200 for samples that are all alike."""
    if not np.ptp(samples) > 0.0:
        return -200.0
    return float(20.0 * np.log10(max(float(np.max(np.abs(samples - np.mean(samples)))), 1e-10)))


def _check(asked: Settings, rate: float) -> None:
    """UsageError or OutOfRangeError where the settings cannot be meant for this rate."""
    low, high = LOWEST_HZ, HIGHEST_OF_RATE * rate
    if asked.near_hz is not None and not low <= asked.near_hz <= high:
        raise OutOfRangeError(
            f"Modes can be measured from {low:g} to {high:g} Hz at this sample rate; {asked.near_hz:g} Hz was asked about."
        )
    if asked.range_hz is not None:
        first, last = asked.range_hz
        if not first < last:
            raise UsageError(f"A range runs from a lower to a higher frequency; it was given as {first:g} to {last:g} Hz.")
        if not (last >= low and first <= high):
            raise OutOfRangeError(
                f"Modes can be measured from {low:g} to {high:g} Hz at this sample rate; the range {first:g} to {last:g} Hz lies outside."
            )
    if asked.most is not None and asked.most < 1:
        raise UsageError(f"At most {asked.most} modes were asked for; ask for 1 or more.")
    if asked.channel is not None and asked.channel < 1:
        raise UsageError(f"Channels are counted from 1; channel {asked.channel} was asked for.")
    if not (math.isfinite(asked.clock_ppm) and asked.clock_ppm >= 0.0):
        raise UsageError(f"The clock's error is 0 ppm or more; it was given as {asked.clock_ppm:g}.")
