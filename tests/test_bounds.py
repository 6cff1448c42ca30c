"""The yardstick of the bench: its numeric Fisher matrix against the closed forms of the Cramer-Rao bound.

Closed forms, long record, real data in white noise of variance s^2 at the rate fs, one mode of amplitude A and decay rate a:
u(a) = u(w) = fs (s/A) sqrt(2 (1 - r)^3/r), r = exp(-2a/fs), which is 4 a^(3/2) s/(A sqrt fs) for a much below fs.
Two modes s_i = -a_i + j w_i: each u grows by |(s_1 + s_2*)/(s_1 - s_2)|^2, so by 1 + 1/S^2 for equal damping, S half-power widths
apart. The single-mode form is that of the literature on damped sinusoids (from memory: Yao and Pandit, IEEE Trans. Signal Processing
1995); the product was not found in print and was derived and verified outside this project, where the numbers were computed too.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose

from tests.bench.bounds import joint_bound, single_bound_truncation
from tests.printed import assert_prints_as

RATE_HZ = 48_000.0
DENSITY = 2.0 * 0.01**2 / RATE_HZ
"""One-sided density of white noise of 0.01 rms."""


def long_bound(frequency_hz: list[float], decay_per_s: list[float], amplitude: list[complex]) -> tuple[np.ndarray, np.ndarray]:
    """Bound of a record of ten time constants of the slowest mode."""
    frames = int(10 * RATE_HZ / min(decay_per_s))
    return joint_bound(frequency_hz, decay_per_s, amplitude, RATE_HZ, frames, DENSITY)


@pytest.mark.parametrize("phase", [0.0, 1.0, 2.5])
def test_one_mode(phase: float) -> None:
    """440 Hz, Q 100, A/s = 100: u(a) 0.0093817 1/s, u(f) 1.4931 mHz, u(Q) 0.067871 at any phase (real data: within 2e-3)."""
    a = 4.4 * math.pi
    u_f, u_a = long_bound([440.0], [a], [np.exp(1j * phase)])
    closed = 4.0 * a**1.5 * 0.01 / math.sqrt(RATE_HZ)
    assert_prints_as(2.0 * a / closed, "2946.38")  # the matched filter's signal-to-noise ratio, sqrt(A^2 fs/(4 a s^2))
    r = math.exp(-2.0 * a / RATE_HZ)
    sampled = RATE_HZ * 0.01 * math.sqrt(2.0 * (1.0 - r) ** 3 / r)
    assert_prints_as(sampled, "0.0093817")
    assert_prints_as(1e3 * sampled / (2 * math.pi), "1.4931")
    # Q = w/2a to this accuracy; the frequency's part shows in the last digit
    assert_prints_as(100.0 * math.hypot(sampled / a, sampled / (2 * math.pi * 440.0)), "0.067871")
    # the closed form neglects terms of order a/w = 1/2Q
    assert_allclose(u_a, closed, rtol=1e-2, atol=0)
    assert_allclose(2 * math.pi * u_f, closed, rtol=1e-2, atol=0)
    assert_allclose(u_a * 2 * math.pi * u_f, closed**2, rtol=2e-3, atol=0)


def test_bound_does_not_depend_on_the_sample_rate() -> None:
    """At one noise density the rate does not matter: 12 kHz and 192 kHz agree."""
    a = 4.4 * math.pi
    bounds = [joint_bound([440.0], [a], [1.0], rate, int(10 * rate / a), DENSITY)[1][0] for rate in (12_000.0, 192_000.0)]
    assert_allclose(bounds[0], bounds[1], rtol=2e-3, atol=0)


TRUNCATION = [
    (0.25, "11.114"), (0.5, "4.4657"), (1.0, "2.0472"), (1.5, "1.4454"), (2.0, "1.2099"), (2.5, "1.1019"), (3.0, "1.0494"), (4.0, "1.0111"),
    (5.0, "1.0023"),
]  # fmt: skip


@pytest.mark.parametrize(("time_constants", "factor"), TRUNCATION)
def test_short_record(time_constants: float, factor: str) -> None:
    """A record cut after so many time constants raises u by the tabulated factor, in the closed form and in the Fisher matrix."""
    assert_prints_as(single_bound_truncation(time_constants), factor)
    frequency_hz, a = 3000.0, 20.0
    closed = 4.0 * a**1.5 * 0.01 / math.sqrt(RATE_HZ)
    _, u_a = joint_bound([frequency_hz], [a], [1.0], RATE_HZ, int(time_constants * RATE_HZ / a), DENSITY)
    assert_allclose(u_a / closed, float(factor), rtol=5e-3, atol=0)


PAIRS = [(0.5, "5.000"), (1.0, "2.000"), (2.0, "1.250"), (3.0, "1.111"), (5.0, "1.040"), (10.0, "1.010")]


@pytest.mark.parametrize(("widths", "factor"), PAIRS)
def test_close_pair_of_equal_damping(widths: float, factor: str) -> None:
    """Two equally damped modes S half-power widths apart: u grows by 1 + 1/S^2, whatever their amplitudes and phases."""
    frequency_hz, a = 5000.0, 20.0
    pair = [frequency_hz, frequency_hz + widths * a / math.pi]
    assert_prints_as(1.0 + 1.0 / widths**2, factor)
    choices: list[list[complex]] = [[1.0, 1.0], [1.0, 0.2j]]
    for amplitudes in choices:
        u_f, u_a = long_bound(pair, [a, a], amplitudes)
        closed = 4.0 * a**1.5 * 0.01 / math.sqrt(RATE_HZ) / np.abs(amplitudes) * (1.0 + 1.0 / widths**2)
        assert_allclose(u_a, closed, rtol=5e-3, atol=0)
        assert_allclose(2 * math.pi * u_f, closed, rtol=5e-3, atol=0)


def test_close_pair_of_unequal_damping() -> None:
    """440 Hz with Q 100 beside 445 Hz with Q 80: 1.965946 for both; one frequency, decay rates a and 2a: 9."""
    first, second = -4.4 * math.pi + 2j * math.pi * 440, -445 * math.pi / 80 + 2j * math.pi * 445
    assert_allclose(abs((first + second.conjugate()) / (first - second)) ** 2, 1.965946, rtol=1e-4, atol=0)
    decay = [-first.real, -second.real]
    _, u_a = long_bound([440.0, 445.0], decay, [1.0, 1.0])
    alone = np.array([4.0 * a**1.5 * 0.01 / math.sqrt(RATE_HZ) for a in decay])
    assert_allclose(u_a / alone, 1.965946, rtol=1e-2, atol=0)
    _, u_a = long_bound([5000.0, 5000.0], [20.0, 40.0], [1.0, 1.0])
    assert_allclose(u_a / [4.0 * a**1.5 * 0.01 / math.sqrt(RATE_HZ) for a in (20.0, 40.0)], 9.0, rtol=5e-3, atol=0)
