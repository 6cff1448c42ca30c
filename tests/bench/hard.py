"""Families without a fixed mode: one that drifts as it decays, and recordings in which nothing rings."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from qmeter.dsp import synth
from tests.bench.case import Array, Case, Truth, decibels, log_uniform, phase
from tests.bench.families import draw_rate


@dataclass(frozen=True)
class Drift:
    """A mode whose decay rate and frequency follow its own amplitude: a = a0 (1 + k e), f = f0 (1 + h e), e = (A / A_onset)^power.

    Then e' = -power a0 (1 + k e) e, so e = E / ((1 + k) - k E) with E = exp(-power a0 t), and the integral of e from 0 to t is
    ln((1 + k) - k E) / (k power a0): both by separation of variables.
    """

    f0_hz: float
    a0_per_s: float
    k: float
    h: float
    power: float

    def relative(self, t: Array) -> Array:
        """e at t seconds after the onset."""
        decayed = np.exp(-self.power * self.a0_per_s * t)
        return np.asarray(decayed / ((1 + self.k) - self.k * decayed))

    def cycles(self, t: Array) -> Array:
        """Cycles since the onset."""
        decayed = np.exp(-self.power * self.a0_per_s * t)
        integral = np.log((1 + self.k) - self.k * decayed) / (self.k * self.power * self.a0_per_s)
        return np.asarray(self.f0_hz * (t + self.h * integral))

    def amplitude(self, t: Array) -> Array:
        """Amplitude over that at the onset."""
        return np.asarray(self.relative(t) ** (1.0 / self.power))

    def pole(self, from_s: float, to_s: float) -> tuple[float, float]:
        """Mean frequency and decay rate over a stretch: cycles and nepers between its ends, by its length."""
        t = np.array([max(from_s, 0.0), to_s])
        span = float(t[1] - t[0])
        amplitude, cycles = self.amplitude(t), self.cycles(t)
        return float(cycles[1] - cycles[0]) / span, math.log(amplitude[0] / amplitude[1]) / span


def drift(rng: np.random.Generator, seed: int, index: int) -> Case:
    """One mode (80 Hz to 5 kHz, Q 50 to 1000): over its first 30 dB, frequency falls by 0.01 to 1 % and Q changes by 5 to 20 % either way.

    Frequency and loss follow the amplitude or (half the cases) its square; white noise, 40 to 60 dB. Found means within half a width of
    the frequencies passed in those 30 dB; the true Q is that over the stretch that the estimate says it fitted.
    """
    rate = draw_rate(rng)
    f0, q0 = log_uniform(rng, 80, 5000), log_uniform(rng, 50, 1000)
    power = 1.0 if rng.random() < 0.5 else 2.0
    fall = log_uniform(rng, 1e-4, 1e-2)
    change = rng.uniform(0.05, 0.20) * float(rng.choice([-1.0, 1.0]))
    end = 10 ** (-1.5 * power)  # e after 30 dB
    h = fall / (1 - (1 + fall) * end)
    loss_ratio = (1 + change) * (1 + fall)  # a at the onset over a at -30 dB, for Q to change by `change`
    k = (loss_ratio - 1) / (1 - loss_ratio * end)
    law = Drift(f0, math.pi * f0 / q0, k, h, power)
    onset = int(rng.uniform(0.3, 1.0) * rate)
    length = int(max(min(9.0 / law.a0_per_s, 10.0), 3.5 / law.a0_per_s, 0.5) * rng.uniform(1.0, 1.2) * rate)
    amplitude = log_uniform(rng, 0.05, 0.5)
    t = np.arange(length) / rate
    noise_rms = amplitude / math.sqrt(2) / decibels(rng.uniform(40, 60))
    samples = synth.white_noise(rng, onset + length, noise_rms)
    start_phase = phase(rng)
    samples[onset:] += amplitude * law.amplitude(t) * (start_phase * np.exp(2j * np.pi * law.cycles(t))).real
    middle = f0 * (1 + h * (1 + end) / 2)
    decay = math.log(10) * 1.5 / float(t[np.argmax(law.amplitude(t) < 10**-1.5)])
    reach = 0.5 * f0 * h * (1 - end) + 0.5 * decay / math.pi
    mode = Truth(middle, decay, amplitude * start_phase, tolerance_hz=reach)
    notes: dict[str, float | str] = {"fall %": 100 * fall, "change of Q %": 100 * change, "power": power}
    return Case("drift", seed, index, samples, rate, (mode,), onset, None, expect_doubt="curved-decay", true_pole=law.pole, notes=notes)


def resonate(source: Array, rate_hz: float, centre_hz: float, width_hz: float) -> Array:
    """A formant: two-pole resonator."""
    radius = math.exp(-math.pi * width_hz / rate_hz)
    return np.asarray(lfilter([1.0 - radius], [1.0, -2 * radius * math.cos(2 * math.pi * centre_hz / rate_hz), radius**2], source))


def swell(count: int, rate_hz: float, rise_s: float, fall_s: float) -> Array:
    """Envelope with raised-cosine ends."""
    t = np.arange(count) / rate_hz
    rise = 0.5 - 0.5 * np.cos(math.pi * np.clip(t / rise_s, 0, 1))
    fall = 0.5 - 0.5 * np.cos(math.pi * np.clip((count / rate_hz - t) / fall_s, 0, 1))
    return np.asarray(rise * fall)


def syllable(rng: np.random.Generator, rate_hz: float) -> Array:
    """A fricative or a plosive, perhaps, then a voiced stretch: glottal pulses of a gliding pitch through four moving formants."""
    count = int(rng.uniform(0.12, 0.35) * rate_hz)
    t = np.arange(count) / rate_hz
    pitch = rng.uniform(90, 230) * (
        1 + rng.uniform(-0.25, 0.25) * t / t[-1] + 0.01 * np.cumsum(rng.standard_normal(count)) / math.sqrt(count)
    )
    cycles = np.cumsum(pitch) / rate_hz
    pulses = np.diff(np.floor(cycles), prepend=0.0) * rng.uniform(0.9, 1.1, count)
    source = np.asarray(lfilter([1.0], [1.0, -0.95], pulses)) + 0.01 * rng.standard_normal(count)
    glide = np.linspace(0.0, 1.0, count)
    voiced = np.zeros(count)
    for low, high, width in ((280, 800, 80), (900, 2200, 100), (2300, 3000, 130), (3200, 4000, 200)):
        one, two = rng.uniform(low, high, 2)
        gain = (800.0 / (800.0 + low)) ** 1.5
        voiced += gain * ((1 - glide) * resonate(source, rate_hz, one, width) + glide * resonate(source, rate_hz, two, width))
    voiced *= swell(count, rate_hz, rng.uniform(0.02, 0.06), rng.uniform(0.04, 0.12)) / np.abs(voiced).max()
    kind = rng.random()
    if kind < 0.4:  # fricative
        noise = resonate(rng.standard_normal(int(rng.uniform(0.05, 0.15) * rate_hz)), rate_hz, rng.uniform(3000, 7000), 2500)
        lead = 0.2 * noise / np.abs(noise).max() * swell(noise.size, rate_hz, 0.02, 0.03)
    elif kind < 0.7:  # plosive
        noise = rng.standard_normal(int(rng.uniform(0.005, 0.015) * rate_hz))
        lead = 0.15 * noise / np.abs(noise).max() * np.linspace(1, 0, noise.size)
    else:
        lead = np.zeros(0)
    return np.concatenate([lead, voiced])


def speech_like(rng: np.random.Generator, rate_hz: float, count: int) -> Array:
    """Syllables of various loudness with pauses between."""
    out = np.zeros(count)
    at = int(rng.uniform(0.1, 0.5) * rate_hz)
    while True:
        piece = syllable(rng, rate_hz) * decibels(rng.uniform(-15, 0))
        if at + piece.size > count:
            return out
        out[at : at + piece.size] += piece
        at += piece.size + int(rng.uniform(0.02, 0.4) * rate_hz)


KINDS = ("white noise", "pink noise", "speech-like", "silence", "DC", "steady tone")


def nothing(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Nothing rings: noise, speech-like bursts in noise, silence, DC, a steady tone in noise, in turn; 2 to 5 s."""
    rate = draw_rate(rng)
    count = int(rng.uniform(2.0, 5.0) * rate)
    kind = KINDS[index % len(KINDS)]
    level = log_uniform(rng, 0.01, 0.3)
    if kind == "white noise":
        samples = synth.white_noise(rng, count, level)
    elif kind == "pink noise":
        samples = synth.pink_noise(rng, rate, count, level)
    elif kind == "speech-like":
        samples = level * speech_like(rng, rate, count) + synth.pink_noise(rng, rate, count, level * decibels(-rng.uniform(40, 60)))
    elif kind == "silence":
        samples = synth.silence(count)
    elif kind == "DC":
        samples = np.full(count, level)
        if rng.random() < 0.5:
            samples += synth.white_noise(rng, count, level * decibels(-60))
    else:
        tone = synth.steady_tone(rate, count, log_uniform(rng, 60, 9000), level * phase(rng))
        samples = tone + synth.white_noise(rng, count, level * decibels(-rng.uniform(20, 60)))
    return Case("nothing", seed, index, samples, rate, (), 0, None, notes={"kind": kind})
