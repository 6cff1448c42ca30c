"""Fit, half-power width and backward integral side by side: agreement where they should, doubts with both numbers where not."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from numpy.testing import assert_allclose

from qmeter.dsp import synth
from qmeter.estimate.half_power import ModeRing
from qmeter.estimate.modes import Mode, Spread
from qmeter.estimate.routes import cross_checked, mode_rings

F, Q = 440.0, 100.0
DECAY = math.pi * F / Q
STEP = 1.0 / (16 * F / Q)
SNR = 300.0


def mode_and_ring(rng: np.random.Generator, *, decay: float = DECAY, second: complex = 0.0, loss: float = 0.0) -> tuple[Mode, ModeRing]:
    """A fit at the true pole with the bound as its u, and a ring that may hold a second line 1.5 widths off, or a loss with amplitude."""
    time = STEP * np.arange(130)
    fallen = np.exp(-decay * time)
    line = fallen / (1.0 + loss - loss * fallen) + second * np.exp((-decay + 2j * math.pi * 1.5 * F / Q) * time)
    noise = (rng.normal(size=130) + 1j * rng.normal(size=130)) / (SNR * math.sqrt(2))
    u_a = 2.0 * DECAY**1.5 * math.sqrt(STEP) / SNR
    mode = Mode(F, DECAY, 1.0, {"fit": Spread((u_a / (2 * math.pi)) ** 2, u_a**2)}, 0.0, 0.0, 60.0, 50.0)
    return mode, ModeRing(line + noise, STEP, 0.0, DECAY, 1.0 / SNR**2)


@pytest.mark.timeout(60)
def test_a_clean_line_passes() -> None:
    """200 clean lines: both routes are there, near the true Q, and at most 3 % of the modes carry any doubt."""
    pairs = [mode_and_ring(np.random.default_rng(1 + i)) for i in range(200)]
    # the fit stands at the truth, which is harsher than sharing the noise with the other routes
    modes = cross_checked([mode for mode, _ in pairs], [ring for _, ring in pairs])
    assert all(mode.half_power is not None and mode.backward_integral is not None for mode in modes)
    assert np.mean([bool(mode.doubts) for mode in modes]) <= 0.03
    found = [mode.half_power.q.value for mode in modes if mode.half_power is not None]
    assert_allclose(np.mean(found), Q, rtol=0.002, atol=0)


def test_a_fit_that_is_wrong_is_told_so() -> None:
    """The ring decays 10 % faster than the fit says: one doubt with all three numbers."""
    mode, ring = mode_and_ring(np.random.default_rng(3), decay=1.1 * DECAY)
    (checked,) = cross_checked([mode], [ring])
    assert [doubt.code for doubt in checked.doubts] == ["routes-differ"]
    for figure in ("fit of the decay gives Q = 100.0", "half-power width 9", "backward-integrated decay 9"):
        assert figure in checked.doubts[0].says
    assert checked.half_power is not None
    assert not checked.half_power.agrees
    # what the fit admits to leave out counts: a model part of 10 % makes them agree
    modest = replace(mode, budget=mode.budget | {"model": Spread(0.0, (0.1 * DECAY) ** 2)})
    assert cross_checked([modest], [ring])[0].doubts == ()


def test_a_neighbour_left_in_the_band_is_noticed() -> None:
    """A second line 1.5 widths away at half the amplitude, not subtracted: at least one doubt."""
    mode, ring = mode_and_ring(np.random.default_rng(4), second=0.5)
    assert cross_checked([mode], [ring])[0].doubts


def test_a_loss_that_grows_with_amplitude_is_said_with_both_ranges() -> None:
    """Loss 40 % higher at the strike than in the end: curved-decay, Q early below Q late, ranges in decibels."""
    mode, ring = mode_and_ring(np.random.default_rng(5), loss=0.4)
    says = {doubt.code: doubt.says for doubt in cross_checked([mode], [ring])[0].doubts}
    assert "curved-decay" in says
    assert "from 0 to 2" in says["curved-decay"]


def test_no_ring_no_check() -> None:
    """Modes without a ring come back as they were; a silent ring gives no routes."""
    mode, ring = mode_and_ring(np.random.default_rng(6))
    silent = replace(ring, samples=np.zeros(130, dtype=np.complex128))
    first, second = cross_checked([mode, mode], [None, silent])
    assert first == mode
    assert (second.half_power, second.backward_integral, second.doubts) == (None, None, ())
    assert cross_checked([], []) == ()


@pytest.mark.timeout(60)
def test_from_samples_to_routes() -> None:
    """Six modes of Q 8 to 2000 in one record of 2 s, 60 dB: every route is there, and at the true pole 95 % of its figures hold.

    The rest is what noise is left when the true modes are taken away; the routes see only that and the poles.
    """
    rate, count, rms = 16000.0, 32000, 1e-3
    truth = [(120.0, 8.0), (310.0, 60.0), (640.0, 150.0), (655.0, 90.0), (2200.0, 700.0), (5100.0, 2000.0)]
    held: list[bool] = []
    doubted = 0
    for seed in range(40):
        rng = np.random.default_rng(100 + seed)
        modes = [synth.RingingMode.from_q(f, q, np.exp(2j * math.pi * rng.uniform())) for f, q in truth]
        rest = synth.white_noise(rng, count, rms)
        poles = np.array([complex(-m.decay_rate_per_s, 2 * math.pi * m.damped_frequency_hz) / rate for m in modes], dtype=np.complex128)
        amplitudes = np.array([m.amplitude for m in modes], dtype=np.complex128)
        density = synth.white_density(rate, rms)
        rings = mode_rings(rest, rate, poles, amplitudes, [20] * 6, [density] * 6)
        read = []
        for mode in modes:
            a = mode.decay_rate_per_s
            u_a = 2 * math.sqrt(2 * density) * a**1.5  # the bound u(a) = 2 sqrt(2) a^(3/2) sqrt(S)/A, amplitude 1
            budget = {"fit": Spread((u_a / (2 * math.pi)) ** 2, u_a**2)}
            read.append(Mode(mode.damped_frequency_hz, a, mode.amplitude, budget, 0.0, 0.0, 60.0, 50.0))
        for checked, (_, q) in zip(cross_checked(read, rings), truth, strict=True):
            assert checked.half_power is not None
            assert checked.backward_integral is not None
            doubted += bool(checked.doubts)
            for route in (checked.half_power, checked.backward_integral):
                assert route.q.u95 is not None
                held.append(abs(route.q.value - q) <= route.q.u95)
    assert 0.92 <= np.mean(held) <= 0.98
    assert doubted <= 0.03 * 240


def test_too_little_left_to_read() -> None:
    """A mode that starts within 64 samples of the end has no ring."""
    pole = np.array([complex(-0.001, 0.1)])
    assert mode_rings(np.zeros(100), 48000.0, pole, np.array([1.0 + 0j]), [50], [1e-9]) == [None]
