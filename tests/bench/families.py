"""The synthetic families of the bench, one function a family: (rng, seed, index) -> Case.

Common to all: 60 Hz to 9 kHz, four in five at 48 kHz and the rest at 44.1 kHz, 0.3 to 1 s of quiet before the strike, strongest mode
between 0.05 and 0.5 of full scale, random phases. The noise figure is the strongest mode's A/sqrt(2) over the full-band noise rms.
The ring lasts nine amplitude time constants of its slowest mode, at most 10 s but always 3.5 of them (except where it must outlast).
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator

import numpy as np

from qmeter.dsp import synth
from tests.bench.case import Case, Truth, decibels, generator, log_uniform, phase

LOW_HZ, HIGH_HZ = 60.0, 9000.0

Maker = Callable[[np.random.Generator, int, int], Case]


def draw_rate(rng: np.random.Generator) -> float:
    """48 kHz mostly."""
    return 48000.0 if rng.random() < 0.8 else 44100.0


def truth(frequency_hz: float, q: float, amplitude: complex) -> Truth:
    """A counted mode of this damped frequency and Q."""
    mode = synth.RingingMode.from_q(frequency_hz, q, amplitude)
    return Truth(mode.damped_frequency_hz, mode.decay_rate_per_s, amplitude)


def ring_seconds(rng: np.random.Generator, modes: list[Truth]) -> float:
    """Long enough for the slowest mode."""
    slowest = min(m.decay_rate_per_s for m in modes)
    length = max(min(9.0 / slowest, 10.0), 3.5 / slowest, 0.3)
    return length * rng.uniform(1.0, 1.2)


def assemble(
    family: str,
    rng: np.random.Generator,
    seed: int,
    index: int,
    modes: list[Truth],
    snr_db: float,
    *,
    pink: bool = False,
    knock_share: float = 0.0,
    seconds: float | None = None,
    **more: object,
) -> Case:
    """Quiet, strike, ring and noise; the amplitudes are scaled so that the sum stays below full scale."""
    rate = draw_rate(rng)
    peak = log_uniform(rng, 0.05, 0.5)
    scale = min(peak / max(abs(m.amplitude) for m in modes), 0.9 / sum(abs(m.amplitude) for m in modes))
    modes = [Truth(m.damped_frequency_hz, m.decay_rate_per_s, m.amplitude * scale, m.counts, m.tolerance_hz, m.group) for m in modes]
    strongest = max(abs(m.amplitude) for m in modes)
    onset = int(rng.uniform(0.3, 1.0) * rate)
    length = ring_seconds(rng, modes) if seconds is None else seconds
    count = onset + int(length * rate)
    noise_rms = strongest / math.sqrt(2) / decibels(snr_db)
    samples = synth.ring(ringing(modes), rate, count, onset / rate)
    if pink:
        samples += synth.pink_noise(rng, rate, count, noise_rms)
        density: object = PinkDensity(rate, noise_rms)
    else:
        samples += synth.white_noise(rng, count, noise_rms)
        density = synth.white_density(rate, noise_rms)
    if knock_share:
        samples += synth.knock(rng, rate, count, onset / rate, knock_share * strongest, rng.uniform(0.001, 0.003))
    return Case(family, seed, index, samples, rate, tuple(modes), onset, density, **more)  # type: ignore[arg-type]


class PinkDensity:
    """One-sided density of the pink noise, per hertz, as a function of frequency."""

    def __init__(self, rate_hz: float, rms: float) -> None:
        self.rate_hz, self.rms = rate_hz, rms

    def __call__(self, frequency_hz: np.ndarray) -> np.ndarray:
        return synth.pink_density(frequency_hz, self.rate_hz, self.rms)


def ringing(modes: list[Truth] | tuple[Truth, ...]) -> list[synth.RingingMode]:
    """As the synthesis takes them."""
    return [synth.RingingMode(m.damped_frequency_hz, m.decay_rate_per_s, m.amplitude) for m in modes]


def spaced(
    rng: np.random.Generator, count: int, low_hz: float, high_hz: float, draw_q: Callable[[], float], widths: float
) -> list[tuple[float, float]]:
    """(frequency, Q) drawn log-uniformly, redrawn until neighbours lie at least this many mean half-power widths apart."""
    chosen: list[tuple[float, float]] = []
    while len(chosen) < count:
        f, q = log_uniform(rng, low_hz, high_hz), draw_q()
        if all(abs(f - g) > widths * 0.5 * (f / q + g / p) for g, p in chosen):
            chosen.append((f, q))
    return sorted(chosen)


def levels(rng: np.random.Generator, count: int, range_db: float) -> list[float]:
    """Amplitudes over a range of decibels, the strongest 1."""
    db = rng.uniform(-range_db, 0.0, count)
    return [decibels(x) for x in db - db.max()]


def one(rng: np.random.Generator, seed: int, index: int) -> Case:
    """One mode: Q 12 to 3000, white noise, 25 to 60 dB."""
    mode = truth(log_uniform(rng, LOW_HZ, HIGH_HZ), log_uniform(rng, 12, 3000), phase(rng))
    return assemble("one", rng, seed, index, [mode], rng.uniform(25, 60))


def lowq(rng: np.random.Generator, seed: int, index: int) -> Case:
    """One mode: Q 3 to 12, white noise, 25 to 60 dB."""
    mode = truth(log_uniform(rng, LOW_HZ, HIGH_HZ), log_uniform(rng, 3, 12), phase(rng))
    return assemble("lowq", rng, seed, index, [mode], rng.uniform(25, 60))


def plate(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Eight modes between f1 and 16 f1, four widths apart or more, Q 35 to 140, levels over 20 dB; pink noise, 45 to 60 dB; 5 % knock.

    The knock starts at the onset with an rms of 5 % of the strongest amplitude and a time constant of 1 to 3 ms.
    """
    first = log_uniform(rng, LOW_HZ, HIGH_HZ / 16)
    places = spaced(rng, 8, first, 16 * first, lambda: log_uniform(rng, 35, 140), 4.0)
    modes = [truth(f, q, a * phase(rng)) for (f, q), a in zip(places, levels(rng, 8, 20.0), strict=True)]
    return assemble("plate", rng, seed, index, modes, rng.uniform(45, 60), pink=True, knock_share=0.05)


BAR_RATIOS = (1.0, 2.7565, 5.4039, 8.9330)
"""Bending modes of a free-free slender bar: squares of the roots of cos x cosh x = 1 over the first, (k_n L)^2 / (k_1 L)^2."""


def bar(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Four bending modes of a free bar, each off its place by up to 1 %, Q 300 to 2500, levels over 20 dB; white noise, 35 to 60 dB."""
    first = log_uniform(rng, LOW_HZ, HIGH_HZ / 9.1)
    modes = [
        truth(first * r * rng.uniform(0.99, 1.01), log_uniform(rng, 300, 2500), a * phase(rng))
        for r, a in zip(BAR_RATIOS, levels(rng, 4, 20.0), strict=True)
    ]
    return assemble("bar", rng, seed, index, modes, rng.uniform(35, 60))


def _pair(family: str, rng: np.random.Generator, seed: int, index: int, low_widths: float, high_widths: float) -> Case:
    """Two modes: spacing in mean widths log-uniform, Q 20 to 2000 and up to 15 % apart, amplitude ratio 1 to 10 either way."""
    f, q = log_uniform(rng, LOW_HZ, HIGH_HZ), log_uniform(rng, 20, 2000)
    unlike = log_uniform(rng, 1 / 1.15, 1.15)
    q1, q2 = q * math.sqrt(unlike), q / math.sqrt(unlike)
    spacing = log_uniform(rng, low_widths, high_widths) * 0.5 * (f / q1 + f / q2)
    ratio = log_uniform(rng, 1.0, 10.0)
    amplitudes = (1.0, 1.0 / ratio) if rng.random() < 0.5 else (1.0 / ratio, 1.0)
    pair = [truth(f - spacing / 2, q1, amplitudes[0] * phase(rng)), truth(f + spacing / 2, q2, amplitudes[1] * phase(rng))]
    modes = [Truth(m.damped_frequency_hz, m.decay_rate_per_s, m.amplitude, True, min(0.5 * m.width_hz, 0.25 * spacing)) for m in pair]
    notes: dict[str, float | str] = {"spacing_widths": spacing / (0.5 * (f / q1 + f / q2)), "ratio": ratio}
    return assemble(family, rng, seed, index, modes, rng.uniform(45, 60), notes=notes)


def pairs(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Close pairs 0.5 to 3 half-power widths apart, white noise, 45 to 60 dB; found within min(width / 2, spacing / 4)."""
    return _pair("pairs", rng, seed, index, 0.5, 3.0)


def pairs25(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Closer pairs, 0.25 to 0.5 half-power widths apart; otherwise as `pairs`."""
    return _pair("pairs25", rng, seed, index, 0.25, 0.5)


def lone(rng: np.random.Generator, seed: int, index: int) -> Case:
    """The single modes beside the pairs (Q 20 to 2000, 45 to 60 dB): how often is one mode split?"""
    mode = truth(log_uniform(rng, LOW_HZ, HIGH_HZ), log_uniform(rng, 20, 2000), phase(rng))
    return assemble("lone", rng, seed, index, [mode], rng.uniform(45, 60))


def hum(rng: np.random.Generator, seed: int, index: int) -> Case:
    """Three modes (60 Hz to 4 kHz, five widths apart, Q 30 to 1000, levels over 20 dB; white, 40 to 60 dB) over hum.

    The mains is 50 or 60 Hz within 0.05 %; its fundamental lies 20 to 45 dB below the strongest mode, twelve harmonics fall as 1/k
    with a random factor of up to 10 dB down. The bound is that without the hum: a mode beside a line rightly has a larger u.
    """
    places = spaced(rng, 3, LOW_HZ, 4000.0, lambda: log_uniform(rng, 30, 1000), 5.0)
    modes = [truth(f, q, a * phase(rng)) for (f, q), a in zip(places, levels(rng, 3, 20.0), strict=True)]
    mains = (50.0 if rng.random() < 0.5 else 60.0) * (1 + rng.uniform(-5e-4, 5e-4))
    case = assemble("hum", rng, seed, index, modes, rng.uniform(40, 60))
    strongest = max(abs(m.amplitude) for m in case.modes)
    fundamental = strongest * decibels(-rng.uniform(20, 45))
    tones = [fundamental / k * decibels(-rng.uniform(0, 10)) * phase(rng) for k in range(1, 13)]
    samples = case.samples + synth.hum(case.rate_hz, case.samples.size, mains, tones)
    lines = tuple(mains * k for k in range(1, 13))
    return Case(
        "hum", seed, index, samples, case.rate_hz, case.modes, case.onset, case.density, known_lines_hz=lines, notes={"mains_hz": mains}
    )


def outlast(rng: np.random.Generator, seed: int, index: int) -> Case:
    """One mode of Q 1000 to 30,000 that falls by only 2.6 to 17 dB (0.3 to 2 time constants) in the 2 to 6 s recorded; 25 to 60 dB."""
    while True:
        seconds = rng.uniform(2.0, 6.0)
        mode = truth(log_uniform(rng, LOW_HZ, HIGH_HZ), log_uniform(rng, 1000, 30000), phase(rng))
        if 0.3 < mode.decay_rate_per_s * seconds < 2.0:
            break
    return assemble("outlast", rng, seed, index, [mode], rng.uniform(25, 60), seconds=seconds, expect_doubt="cut-off")


def _hard() -> dict[str, Maker]:
    """The families of the other modules; imported late because they build on this one."""
    from tests.bench import clutter, hard, struck

    return {
        "struck": struck.struck,
        "dense": struck.dense,
        "drift": hard.drift,
        "clutter": clutter.clutter,
        "nothing": hard.nothing,
    }


SIMPLE: dict[str, Maker] = {
    "one": one,
    "plate": plate,
    "bar": bar,
    "pairs": pairs,
    "pairs25": pairs25,
    "lone": lone,
    "lowq": lowq,
    "hum": hum,
    "outlast": outlast,
}

NAMES = (*SIMPLE, "struck", "dense", "drift", "clutter", "nothing")

COUNTS = {"one": 2000, "lowq": 2000, "lone": 2000, "outlast": 2000, "drift": 2000, "nothing": 500}
"""Cases a row; 500 for those not named, which hold several modes a case (or cost much)."""


def maker(family: str) -> Maker:
    """The function that draws one case of this family."""
    return SIMPLE[family] if family in SIMPLE else _hard()[family]


def case(family: str, seed: int, index: int) -> Case:
    """Case number `index` of a family: the same whatever the count."""
    return maker(family)(generator(family, seed, index), seed, index)


def cases(family: str, seed: int, count: int) -> Iterator[Case]:
    """The first `count` cases of a family."""
    return (case(family, seed, index) for index in range(count))
