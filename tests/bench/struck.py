"""The families driven by a contact force: struck, and dense."""

from __future__ import annotations

import math

import numpy as np

from qmeter.dsp import synth
from tests.bench.case import Case, Truth, decibels, log_uniform
from tests.bench.families import draw_rate, spaced
from tests.bench.struck_truth import Blow
from tests.bench.struck_truth import struck as driven


def in_band_db(amplitude: complex, width_hz: float, density: float) -> float:
    """Level (rms at the end of contact) over the noise within the half-power width."""
    return 10 * math.log10(max(abs(amplitude) ** 2 / 2 / (density * width_hz), 1e-30))


def decays(places: list[tuple[float, float]]) -> np.ndarray:
    """Decay rate of each (damped frequency, Q)."""
    return np.array([synth.RingingMode.from_q(f, q, 1.0).decay_rate_per_s for f, q in places])


def struck(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Three to six modes (60 Hz to 6 kHz, four widths apart, Q 20 to 1000, gains over 20 dB) driven by a half-sine of 0.3 to 2 ms.

    One case in four bounces: a second push of 30 to 90 % of the force, 5 to 30 ms later. White noise 40 to 60 dB below the largest mode.
    A mode counts when it stands 30 dB above the noise in its own half-power width at the end of contact.
    """
    rate = draw_rate(rng)
    contact = log_uniform(rng, 3e-4, 2e-3)
    bounce = rng.random() < 0.25
    while True:
        places = spaced(rng, int(rng.integers(3, 7)), 60.0, 6000.0, lambda: log_uniform(rng, 20, 1000), 4.0)
        decay = decays(places)
        if decay.max() * contact < 0.3:
            break
    gains = np.array([decibels(x) for x in rng.uniform(-20, 0, len(places))]) * rng.choice([-1.0, 1.0], len(places))
    blows = [Blow(0.0, contact, 1.0)]
    if bounce:
        blows.append(Blow(rng.uniform(0.005, 0.030), contact * rng.uniform(0.8, 1.2), rng.uniform(0.3, 0.9)))
    frequency = np.array([f for f, _ in places])
    onset = int(rng.uniform(0.3, 1.0) * rate)
    length = int(rng.uniform(1.0, 1.2) * max(min(9.0 / decay.min(), 10.0), 3.5 / decay.min(), 0.5) * rate)
    ring, free_from, amplitudes = driven(frequency, decay, gains, blows, rate, length)
    scale = log_uniform(rng, 0.05, 0.5) / np.abs(ring).max()
    amplitudes = amplitudes * scale
    noise_rms = np.abs(amplitudes).max() / math.sqrt(2) / decibels(rng.uniform(40, 60))
    samples = synth.white_noise(rng, onset + length, noise_rms)
    samples[onset:] += scale * ring
    density = synth.white_density(rate, noise_rms)
    modes = tuple(Truth(f, a, c, in_band_db(c, a / math.pi, density) >= 30.0) for f, a, c in zip(frequency, decay, amplitudes, strict=True))
    notes: dict[str, float | str] = {"contact_ms": 1e3 * contact}
    if bounce:
        notes["bounce_ms"] = 1e3 * blows[1].start_s
    doubt = "double-strike" if bounce else ""
    # amplitudes are those at the end of contact, so the bound's ring starts there: onset and bound_from are told apart only by the samples
    return Case("struck", seed, index, samples, rate, modes, onset + free_from, density, expect_doubt=doubt, notes=notes)


def dense(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Forty modes, 80 Hz to 4 kHz, half a width apart or more, Q 25 to 120, gains over 40 dB; 200 weak ones 30 dB below the strongest gain.

    Driven by a half-sine of 0.2 to 0.5 ms (which shapes the levels); pink noise 50 to 60 dB below the strongest mode; 16 bit.
    Counted are the twelve strongest at the end of contact; the bound is not stated (240 modes in a noise that is not the limit).
    """
    rate = draw_rate(rng)
    main = spaced(rng, 40, 80.0, 4000.0, lambda: log_uniform(rng, 25, 120), 0.5)
    weak = [(log_uniform(rng, 80, 4000), log_uniform(rng, 25, 120)) for _ in range(200)]
    places = main + weak
    decay = decays(places)
    frequency = np.array([f for f, _ in places])
    level = rng.uniform(-40, 0, 40)
    level_db = np.concatenate([level - level.max(), np.full(200, -30.0)])
    gains = 10 ** (level_db / 20) * rng.choice([-1.0, 1.0], level_db.size)
    contact = log_uniform(rng, 2e-4, 5e-4)
    onset = int(rng.uniform(0.3, 1.0) * rate)
    length = int(max(9.0 / decay.min(), 1.0) * rate)
    ring, free_from, amplitudes = driven(frequency, decay, gains, [Blow(0.0, contact, 1.0)], rate, length)
    scale = log_uniform(rng, 0.1, 0.9) / np.abs(ring).max()
    amplitudes = amplitudes * scale
    noise_rms = np.abs(amplitudes[:40]).max() / math.sqrt(2) / decibels(rng.uniform(50, 60))
    samples = synth.pink_noise(rng, rate, onset + length, noise_rms)
    samples[onset:] += scale * ring
    samples = synth.quantise(synth.clip(samples), 16)
    strongest = set(np.argsort(-np.abs(amplitudes[:40]))[:12].tolist())
    modes = tuple(Truth(f, a, c, i in strongest) for i, (f, a, c) in enumerate(zip(frequency, decay, amplitudes, strict=True)))
    return Case("dense", seed, index, samples, rate, modes, onset + free_from, None, invented_is_strays=True)
