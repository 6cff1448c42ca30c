"""What must not matter: gain, polarity, which channel, when the tap falls, the sample rate, the sample clock (for Q).

Hypothesis draws objects of one to three modes and changes what must not matter. The figures are of the reading itself: the sample
clock's part of u95 is left out.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qmeter.estimate.measure import measure_samples
from qmeter.estimate.modes import Measurement, Mode, Settings
from qmeter.recording import Recording

Array = npt.NDArray[np.float64]

RATE_HZ = 16_000.0
SETTINGS = Settings(clock_ppm=0.0)
few = settings(max_examples=12, phases=[Phase.explicit, Phase.generate])  # no shrinking: a failure must not run into the time limit

pytestmark = pytest.mark.timeout(120)


@dataclass(frozen=True)
class Tap:
    """An object, struck once: frequencies, Qs, amplitudes (the first is 1), phases, noise under the peak in dB, quiet before in s, seed."""

    frequency_hz: tuple[float, ...]
    q: tuple[float, ...]
    amplitude: tuple[float, ...]
    phase: tuple[float, ...]
    noise_db: float
    quiet_s: float
    seed: int

    def samples(self) -> Array:
        """Quiet, then the ring for nine time constants of the slowest mode (0.3 s at least), in white noise; it peaks at 0.5."""
        decay = [math.pi * f / q for f, q in zip(self.frequency_hz, self.q, strict=True)]
        t = np.arange(int(max(9 / min(decay), 0.3) * RATE_HZ)) / RATE_HZ
        ring = np.zeros_like(t)
        for f, a, c, phi in zip(self.frequency_hz, decay, self.amplitude, self.phase, strict=True):
            ring += c * np.exp(-a * t) * np.cos(2 * math.pi * f * t + phi)
        clean = np.concatenate([np.zeros(int(self.quiet_s * RATE_HZ)), 0.5 * ring / np.max(np.abs(ring))])
        noise = np.random.default_rng(self.seed).standard_normal(clean.size)
        return np.asarray(clean + 0.5 * 10 ** (-self.noise_db / 20) * noise)


@st.composite
def taps(draw: st.DrawFn) -> Tap:
    """Modes half an octave or more apart, so that the number of lines is never in question."""
    count = draw(st.integers(1, 3))
    octaves = [draw(st.floats(0.0, 0.4)) + 0.9 * k for k in range(count)]
    lowest = draw(st.floats(150.0, 700.0))
    return Tap(
        tuple(lowest * 2**o for o in octaves),
        tuple(draw(st.floats(15.0, 200.0)) for _ in range(count)),
        tuple(1.0 if k == 0 else draw(st.floats(0.2, 1.0)) for k in range(count)),
        tuple(draw(st.floats(-3.0, 3.0)) for _ in range(count)),
        draw(st.floats(45.0, 70.0)),
        draw(st.floats(0.15, 0.5)),
        draw(st.integers(0, 2**32 - 1)),
    )


def measured(samples: Array, rate_hz: float = RATE_HZ) -> Measurement:
    return measure_samples(samples, rate_hz, SETTINGS)


def pairs(tap: Tap, one: Measurement, other: Measurement, ratio: float = 1.0) -> list[tuple[Mode, Mode]]:
    """Each planted mode as either measurement has it; `other` has its frequencies `ratio` times higher."""
    found = []
    for f, q in zip(tap.frequency_hz, tap.q, strict=True):
        both = []
        for measurement, at in ((one, f), (other, f * ratio)):
            near = [m for m in measurement.modes if abs(m.damped_frequency_hz - at) < at / q]
            assert near, f"{at:.1f} Hz, Q {q:.0f} not found: {[(m.damped_frequency_hz, m.q.value) for m in measurement.modes]}"
            both.append(max(near, key=lambda m: m.level_db))
        found.append((both[0], both[1]))
    return found


def same_q(one: Mode, other: Mode) -> None:
    """The two Qs differ by no more than the larger u95."""
    assert one.q.u95 is not None
    assert other.q.u95 is not None
    assert abs(one.q.value - other.q.value) <= max(one.q.u95, other.q.u95), f"{one.q} and {other.q}"


def same_frequency(one: Mode, other: Mode, ratio: float = 1.0) -> None:
    """The two frequencies differ by no more than the larger u95, once the ratio is taken out."""
    first, second = one.frequency_hz, other.frequency_hz
    assert first.u95 is not None
    assert second.u95 is not None
    assert abs(second.value / ratio - first.value) <= max(first.u95, second.u95 / ratio), f"{first} and {second}, ratio {ratio}"


def assert_same(one: Measurement, other: Measurement, rtol: float) -> None:
    """As many strikes and modes, with the same figures and u95."""
    assert [len(s.modes) for s in one.strikes] == [len(s.modes) for s in other.strikes]
    for a, b in zip(one.modes, other.modes, strict=True):
        for what in ("frequency_hz", "q", "t60_s"):
            first, second = getattr(a, what), getattr(b, what)
            assert_allclose(second.value, first.value, rtol=rtol, atol=0)
            assert_allclose(second.u95, first.u95, rtol=1e3 * rtol, atol=0)
        assert_allclose(b.level_db, a.level_db, rtol=0, atol=1e4 * rtol)
        assert [d.code for d in a.doubts] == [d.code for d in b.doubts]


@few
@given(taps(), st.floats(1e-3, 1.9))
def test_gain_changes_the_level_only(tap: Tap, gain: float) -> None:
    """Multiplied by anything: the same strikes, modes, f, Q, T60, u95, relative levels and doubts; the level moves by the gain."""
    samples = tap.samples()
    one, other = measured(samples), measured(gain * samples)
    assert_same(one, other, rtol=1e-7)
    for a, b in zip(one.modes, other.modes, strict=True):
        assert_allclose(b.level_dbfs - a.level_dbfs, 20 * math.log10(gain), rtol=0, atol=1e-3)
        assert_allclose(b.snr_db, a.snr_db, rtol=0, atol=1e-3)


@few
@given(taps())
def test_polarity_changes_nothing(tap: Tap) -> None:
    """Upside down: the same to the last digits; only the phase of the amplitude turns."""
    samples = tap.samples()
    one, other = measured(samples), measured(-samples)
    assert_same(one, other, rtol=1e-9)
    for a, b in zip(one.modes, other.modes, strict=True):
        assert_allclose(b.amplitude, -a.amplitude, rtol=1e-6, atol=0)


@few
@given(taps(), st.integers(0, 2000))
def test_time_shift_changes_no_q(tap: Tap, cut: int) -> None:
    """Begun up to 0.125 s later within the quiet: f and Q within u95, the onset that much earlier."""
    samples = tap.samples()
    one, other = measured(samples), measured(samples[cut:])
    for a, b in pairs(tap, one, other):
        same_q(a, b)
        same_frequency(a, b)
    assert abs(one.strikes[0].onset_s - other.strikes[0].onset_s - cut / RATE_HZ) < 1e-3


@few
@given(taps(), st.sampled_from([(3, 2), (2, 1), (441, 320), (7, 8), (3, 1)]))
def test_resampling_changes_no_q(tap: Tap, ratio: tuple[int, int]) -> None:
    """Resampled (scipy's polyphase filter), all modes within the new band: f and Q within u95."""
    from scipy.signal import resample_poly

    up, down = ratio
    samples = tap.samples()
    one, other = measured(samples), measured(np.asarray(resample_poly(samples, up, down)), RATE_HZ * up / down)
    for a, b in pairs(tap, one, other):
        same_q(a, b)
        same_frequency(a, b)


@few
@given(taps(), st.one_of(st.floats(0.9, 1.1), st.floats(0.9998, 1.0002), st.sampled_from([48.0 / 44.1, 44.1 / 48.0, 2.0])))
def test_a_wrong_clock_moves_frequency_and_t60_but_no_q(tap: Tap, ratio: float) -> None:
    """The same samples said to be of another rate: Q within u95, f and T60 scaled with the rate within theirs."""
    samples = tap.samples()
    one, other = measured(samples), measured(samples, RATE_HZ * ratio)
    for a, b in pairs(tap, one, other, ratio):
        same_q(a, b)
        same_frequency(a, b, ratio)
        first, second = a.t60_s, b.t60_s
        assert first.u95 is not None
        assert second.u95 is not None
        assert abs(second.value * ratio - first.value) <= max(first.u95, second.u95 * ratio)


@few
@given(taps(), st.floats(0.02, 0.5), st.booleans())
def test_channel_swap_changes_no_q(tap: Tap, weaker: float, swapped: bool) -> None:
    """Of two channels the one with the better decay is chosen, wherever it stands; by number the other one is measured too."""
    from qmeter.estimate.measure import measure

    good = tap.samples()
    noise = 0.5 * 10 ** (-tap.noise_db / 20) * np.random.default_rng(tap.seed + 1).standard_normal(good.size)
    poor = weaker * good + noise
    order = [poor, good] if swapped else [good, poor]
    chosen = measure(Recording(np.stack(order, axis=1), RATE_HZ), SETTINGS)
    assert chosen.channels == 2
    assert chosen.channel == (2 if swapped else 1)
    alone = measured(good)
    for a, b in pairs(tap, alone, chosen):
        same_q(a, b)
        same_frequency(a, b)


def _named() -> dict[str, Callable[[Array], Array]]:
    return {"as it is": lambda x: x, "float32": lambda x: x.astype(np.float32).astype(np.float64), "offset": lambda x: x + 0.05}


@pytest.mark.parametrize("change", _named())
@few
@given(tap=taps())
def test_carriage_changes_no_q(change: str, tap: Tap) -> None:
    """Measured twice, kept as float32, or with a constant offset: the same figures, within u95."""
    samples = tap.samples()
    one, other = measured(samples), measured(_named()[change](samples))
    if change == "as it is":
        assert_same(one, other, rtol=1e-12)
    for a, b in pairs(tap, one, other):
        same_q(a, b)
        same_frequency(a, b)


def test_a_converters_filter_costs_little() -> None:
    """Through a linear-phase low-pass, as in every sound card, the ring begins with the filter's own: u95 of Q grows by less than half.

    The filter rings 2.5 ms before the onset at this rate; no mode here falls by more than 0.9 dB in that time, so 11 % would do.
    """
    from scipy.signal import firwin

    taps_of_filter = firwin(81, 0.9)
    grown = []
    for seed in range(6):
        rng = np.random.default_rng(seed)
        frequency_hz = (float(rng.uniform(200, 600)), float(rng.uniform(800, 1600)))
        tap = Tap(frequency_hz, (60.0, 120.0), (1.0, 0.6), (0.3, 1.0), 300.0, 0.3, seed)
        clean = tap.samples()
        noise = 0.5e-3 * rng.standard_normal(clean.size)
        filtered = np.convolve(clean, taps_of_filter, mode="same")
        for a, b in pairs(tap, measured(clean + noise), measured(filtered + noise)):
            same_q(a, b)
            assert a.q.u95 is not None
            assert b.q.u95 is not None
            grown.append(b.q.u95 / a.q.u95)
    assert np.median(grown) < 1.5, np.round(grown, 1)
