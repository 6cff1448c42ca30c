"""Known modes in real clutter: a mode of known frequency, Q and level added at the strike of a recording made by others.

Recordings: the Debian package sonic-pi-samples (FLAC, 16 bit, 44.1 kHz), each file below CC0-1.0 by the package's copyright file
(stanza `Files: etc/samples/NAME.flac`, `License: CC0`); files without such a stanza of their own were left out. Half of the draws go to
the six of MAIN, half to the rest. A stereo file gives its louder channel. The sum is scaled by 0.7, to stay below full scale.

**What is there**: the strongest bin of the recording's own power spectrum near the added mode (within 30 of its half-power widths and
within 25 % of its frequency either side), over 3/a from the strike (a: the mode's decay rate), Hann-weighted. The mode's class is the
peak of its own spectrum in the same window over that, in dB. So the recording's own strong lines are kept away by the same rule: within
that neighbourhood, nothing of the recording comes nearer to the mode's peak than its class says.

Drawn: f log-uniform 80 Hz to 9 kHz, Q log-uniform 30 to 800, amplitude uniform in dB 10 to 40 below the recording's peak sample, random
phase; redrawn until the class is that of the case (case i is of class i mod 3), a stays below 300 1/s (contact
times of about 1 ms) and three time constants fit before the file's end.
"""

from __future__ import annotations

import math
from functools import lru_cache
from pathlib import Path

import numpy as np
from scipy import fft

from qmeter.dsp import synth
from tests.bench.case import Array, Case, Truth, decibels, log_uniform, phase

FOLDER = Path("/usr/share/sonic-pi/samples")
MAIN = ("perc_till", "tabla_tun3", "tabla_na", "drum_tom_lo_soft", "drum_cowbell", "guit_harmonics")
REST = (
    "tabla_tun1",
    "tabla_tun2",
    "tabla_na_o",
    "tabla_tas1",
    "tabla_tas2",
    "tabla_tas3",
    "tabla_ghe2",
    "drum_tom_mid_soft",
    "drum_tom_hi_soft",
    "drum_splash_soft",
    "drum_bass_soft",
    "perc_bell",
)

MAIN_STRIKE_AFTER_S = {"perc_till": 0.290, "guit_harmonics": 1.218, "perc_bell": 0.012}
"""Three files hold several events: the main one begins after this time. Of perc_till it is the small bell (1524 Hz), not the clatter
before it, whose knocks follow each other every 20 ms; of perc_bell the strike, not the tick before it."""

CLASSES = {"3-8 dB": (3.0, 8.0), "8-15 dB": (8.0, 15.0), ">15 dB": (15.0, math.inf)}


class NoRecordingsError(Exception):
    """The package is not installed."""


@lru_cache(maxsize=32)
def recording(name: str) -> tuple[Array, float, int]:
    """Samples of the louder channel, the rate, and the index of the main strike."""
    import soundfile

    path = FOLDER / f"{name}.flac"
    if not path.exists():
        raise NoRecordingsError(f"{path} is missing: install the Debian package sonic-pi-samples (apt-get install sonic-pi-samples)")
    frames, rate = soundfile.read(path, dtype="float64", always_2d=True)
    samples = np.ascontiguousarray(frames[:, int(np.argmax(np.abs(frames).max(axis=0)))])
    return samples, float(rate), strike_index(samples, float(rate), MAIN_STRIKE_AFTER_S.get(name))


def strike_index(samples: Array, rate_hz: float, after_s: float | None) -> int:
    """Where the strike begins: the first sample above 10 % of the peak, walked back (3 ms at most) while the quarter-millisecond before
    it still exceeds 1 % of the peak. With `after_s`: the first sample after it that, with the millisecond from it on, exceeds 1.5 times the
    largest of the 5 ms before it, and from there on to where it does."""
    size = np.abs(samples)
    if after_s is not None:
        at = int(after_s * rate_hz)
        back = int(0.005 * rate_hz)
        soon = int(0.001 * rate_hz)
        while not np.any(risen := size[at : at + soon] > 1.5 * size[at - back : at].max()):
            at += 1
        return at + int(np.argmax(risen))
    peak = float(size.max())
    at = int(np.argmax(size > 0.1 * peak))
    step = int(0.00025 * rate_hz)
    earliest = max(at - int(0.003 * rate_hz), 0)
    while at > earliest and size[max(at - step, 0) : at].max() > 0.01 * peak:
        at -= 1
    return at


def what_is_there(samples: Array, rate_hz: float, frequency_hz: float, decay_per_s: float) -> tuple[float, float]:
    """Powers in one window from the strike: the recording's own strongest bin near this frequency, the peak of a mode of amplitude 1."""
    length = int(3.0 / decay_per_s * rate_hz)
    window = np.hanning(length)
    padded = fft.next_fast_len(3 * length, real=True)  # bins three times finer than the window's, so that no peak falls between two
    spectrum = np.abs(fft.rfft(samples[:length] * window, padded)) ** 2
    near_hz = min(30 * decay_per_s / math.pi, 0.25 * frequency_hz)
    first, last = ((frequency_hz + side * near_hz) * padded / rate_hz for side in (-1, 1))
    t = np.arange(length) / rate_hz
    peak = (0.5 * float(np.sum(window * np.exp(-decay_per_s * t)))) ** 2
    return float(spectrum[int(first) : int(last) + 2].max()), peak


NEAR_WIDTHS = 3.0
STARTS_DECAYS = (0.0, 0.3, 0.7, 1.2)


def as_noise(samples: Array, rate_hz: float, frequency_hz: float, decay_per_s: float, amplitude: float) -> float:
    """u95 of Q over Q that a lone mode would have if what is there were noise of this level: 1.96 * 2 / rho, from the best of four starts.

    rho^2 = |c|^2 / (2 a S) (Cramer-Rao, long ring, large Q), S the mean one-sided density of the recording alone within three half-power
    widths, over 3/a, Hann-weighted. A reader that resolves the recording's own modes can do better, one that does not cannot.
    """
    best = math.inf
    length = int(3.0 / decay_per_s * rate_hz)
    window = np.hanning(length)
    for late in STARTS_DECAYS:
        part = samples[int(late / decay_per_s * rate_hz) :][:length]
        if len(part) < length:
            continue
        density = np.abs(fft.rfft(part * window)) ** 2 / (np.sum(window**2) * rate_hz / 2)
        at, reach = frequency_hz * length / rate_hz, max(NEAR_WIDTHS * decay_per_s / math.pi * length / rate_hz, 4.0)
        level = float(density[max(int(at - reach), 1) : int(at + reach) + 1].mean())
        rho2 = (amplitude * math.exp(-late)) ** 2 / (2 * decay_per_s * level)
        best = min(best, 1.96 * 2 / math.sqrt(rho2))
    return best


def clutter(rng: np.random.Generator, seed: int, index: int) -> Case:
    """One added mode; see the head of this module."""
    name_of_class = list(CLASSES)[index % len(CLASSES)]
    low, high = CLASSES[name_of_class]
    for _ in range(20000):
        name = str(rng.choice(MAIN if rng.random() < 0.5 else REST))
        samples, rate, onset = recording(name)
        f, q = log_uniform(rng, 80.0, 9000.0), log_uniform(rng, 30.0, 800.0)
        amplitude = float(np.abs(samples).max()) * decibels(-rng.uniform(10.0, 40.0))
        mode = synth.RingingMode.from_q(f, q, amplitude * phase(rng))
        a = mode.decay_rate_per_s
        if a > 300.0 or 3.0 / a > (samples.size - onset) / rate:
            continue
        there, unit_peak = what_is_there(samples[onset:], rate, f, a)
        above_db = 10 * math.log10(amplitude**2 * unit_peak / there)
        if low <= above_db < high:
            break
    else:
        raise RuntimeError(f"no mode of class {name_of_class} in 20000 draws")
    mixed = 0.7 * (samples + synth.ring([mode], rate, samples.size, onset / rate))
    notes: dict[str, float | str] = {
        "file": name,
        "above_db": round(above_db, 1),
        "as_noise_u95": as_noise(samples[onset:], rate, f, a, amplitude),
        "below_peak_db": round(20 * math.log10(np.abs(samples).max() / amplitude), 1),
    }
    truth = Truth(f, a, 0.7 * mode.amplitude, group=name_of_class)
    return Case("clutter", seed, index, mixed, rate, (truth,), onset, None, judges_inventions=False, notes=notes)
