"""Measurements made by hand, for tests of what is shown: no estimator takes part."""

from __future__ import annotations

import math
import random

from qmeter.estimate.modes import DecayTrace, Doubt, Measurement, Mode, SecondRoute, Spread, Strike
from qmeter.uncertainty import Figure


def trace(decay_per_s: float, level_dbfs: float, floor_dbfs: float, *, points: int = 120, curve: float = 0.0, seed: int = 1) -> DecayTrace:
    """A decay of known slope over a noisy floor; `curve` dB of sag in the middle of the fit."""
    chance = random.Random(seed)
    per_second = 20.0 * math.log10(math.e) * decay_per_s
    until = max((level_dbfs - floor_dbfs - 3.0) / per_second, 0.01)
    step = 1.6 * until / points
    levels = []
    for n in range(points):
        t = n * step
        ring = level_dbfs - per_second * t - 4.0 * curve * min(t / until, 1.0) * (1.0 - min(t / until, 1.0))
        noise = 10.0 ** (floor_dbfs / 20.0)
        real = 10.0 ** (ring / 20.0) + noise * chance.gauss(0.0, 0.7)
        levels.append(20.0 * math.log10(math.hypot(real, noise * chance.gauss(0.0, 0.7))))
    start = 0.05 * until
    return DecayTrace(
        0.0, step, tuple(levels), floor_dbfs, start, until, (level_dbfs - per_second * start, level_dbfs - per_second * until)
    )


def mode(
    frequency_hz: float,
    q: float,
    *,
    level_db: float = 0.0,
    u_q: float = 0.01,
    snr_db: float = 50.0,
    strikes: int = 1,
    mounting: float = 0.0,
    half_power: float | None = 1.01,
    doubts: tuple[Doubt, ...] = (),
    unknown: bool = False,
    curve: float = 0.0,
    seed: int = 1,
) -> Mode:
    """A mode of given Q; `u_q` is the relative standard uncertainty of its decay rate, `half_power` that route's Q over Q."""
    decay = math.pi * frequency_hz / math.sqrt(q * q - 0.25)
    u_decay = math.inf if unknown else u_q * decay
    budget = {
        "fit": Spread((0.5 * u_decay / math.pi) ** 2 if not unknown else 1e-4, u_decay**2),
        "model": Spread((0.1 * u_decay / math.pi) ** 2 if not unknown else 1e-4, (0.3 * u_decay) ** 2 if not unknown else 1.0),
        "clock": Spread((1e-4 * frequency_hz) ** 2 / 3.0, (1e-4 * decay) ** 2 / 3.0, 1e-8 * frequency_hz * decay / 3.0),
    }
    if strikes > 1:
        budget["scatter"] = Spread((0.2 * u_decay) ** 2, (1.5 * u_decay) ** 2, 0.0, strikes - 1.0)
    if mounting:
        budget["mounting"] = Spread(0.04, (mounting * decay) ** 2, 0.0, 2.0)
    level_dbfs = -12.0 + level_db
    route = None
    if half_power is not None:
        route = SecondRoute(Figure(half_power * q, 0.03 * q), abs(half_power - 1.0) < 0.04)
    return Mode(
        damped_frequency_hz=frequency_hz,
        amplitude_decay_rate_per_s=decay,
        amplitude=complex(10.0 ** (level_dbfs / 20.0), 0.0),
        budget=budget,
        level_db=level_db,
        level_dbfs=level_dbfs,
        snr_db=snr_db,
        decay_range_db=snr_db - 6.0,
        strikes=strikes,
        half_power=route,
        doubts=doubts,
        trace=trace(decay, level_dbfs, level_dbfs - snr_db, curve=curve, seed=seed),
    )


CURVED = Doubt(
    "curved-decay", "The decay is curved: Q is 58.1 over the first 12 dB and 66.0 over the last; the figure holds from -3 to -33 dB."
)
FEW = Doubt(
    "few-decibels", "Only 11 dB of the decay stand above the noise, and a figure to be trusted wants 20; tap harder or quieten the room."
)
PAIR = Doubt("close-pair", "Two modes ring 2.31 Hz apart, 0.9 half-power widths; each figure leans on the other.")
SINGLE = Doubt("single-strike", "One strike cannot show how the figures scatter; tap five times.")
MOUNTING = Doubt("single-mounting", "One way of holding it: how far the support moves Q was not tested; hang it again and pool.")
CLIPPED = Doubt("clipped", "37 samples sit at full scale in the first 4 ms; turn the input down by 6 dB.")


def plate() -> Measurement:
    """Five strikes on a spruce plate, one clipped; seven modes, among them a close pair, a curved decay and a weak one."""
    modes = (
        mode(184.12, 61.2, strikes=4, seed=1),
        mode(82.417, 43.7, level_db=-3.2, strikes=4, seed=2, doubts=(CURVED,), curve=5.0, half_power=0.9),
        mode(351.06, 71.9, level_db=-6.1, strikes=4, seed=3, doubts=(PAIR,)),
        mode(353.37, 69.0, level_db=-9.4, strikes=4, seed=4, u_q=0.03, doubts=(PAIR,)),
        mode(512.8, 88.0, level_db=-14.0, strikes=4, seed=5, snr_db=41.0),
        mode(1204.6, 102.3, level_db=-22.5, strikes=3, seed=6, snr_db=30.0, half_power=None),
        mode(2310.0, 97.0, level_db=-33.1, strikes=2, seed=7, snr_db=15.0, u_q=0.11, doubts=(FEW,), half_power=None),
    )
    times = (0.3512, 1.6020, 2.8134, 4.0411, 5.2007)
    strikes = tuple(
        Strike(
            onset_s=time,
            usable_s=1.1,
            peak_dbfs=0.0 if index == 2 else -6.1 - index,
            noise_dbfs=-62.0,
            accepted=index != 2,
            doubts=(CLIPPED,) if index == 2 else (),
            modes=tuple(mode(184.12 + 0.01 * n, 61.0 + n, seed=10 * index + n) for n in range(2)),
        )
        for index, time in enumerate(times)
    )
    return Measurement(48000.0, 2, 1, 6.5, strikes, modes, (MOUNTING,), "spruce-plate.wav", "0" * 64, None)


def bar() -> Measurement:
    """One strike on a steel bar: high Q, frequencies of five digits, nothing but the doubts that one strike has."""
    modes = (
        mode(1046.31, 2412.0, u_q=0.002, snr_db=62.0, seed=21),
        mode(2884.9, 1502.0, level_db=-8.0, u_q=0.003, snr_db=55.0, seed=22),
        mode(12655.2, 611.0, level_db=-31.0, u_q=0.02, snr_db=33.0, seed=23, unknown=True, doubts=(FEW,)),
    )
    strike = Strike(0.25, 5.5, -3.0, -70.0, True, (), modes)
    return Measurement(44100.0, 1, 1, 6.0, (strike,), modes, (SINGLE, MOUNTING), "bar.wav", "1" * 64, None)


def silence() -> Measurement:
    """A recording in which nothing rang."""
    return Measurement(
        48000.0, 1, 1, 3.0, (), (), (Doubt("no-ring", "Nothing rises above the noise at -71 dBFS; tap closer."),), "room.wav", "2" * 64
    )
