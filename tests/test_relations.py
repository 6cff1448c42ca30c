"""Relations among the measures of damping.

Where nothing else is said, the expected number comes from the closed forms of the viscous mode x'' + 2 alpha x' + omega0^2 x = 0,
evaluated once outside this project; the sources of the forms are in qmeter/relations.py. The tests that step or solve the equation
numerically are a second route that shares no formula with the code.
"""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import integrate, optimize

from qmeter import relations as r
from qmeter.errors import OutOfRangeError, UsageError
from tests.printed import assert_prints_as

# one mode of 440 Hz (undamped) and Q = 100: pi f0/Q
ALPHA = 4.4 * math.pi


# ---- known values ----


@pytest.mark.parametrize(
    ("found", "expected"),
    [
        (2.0 * r.decay_rate_from_q_undamped(100.0, 440.0), "27.64601535"),
        (r.decay_rate_from_q_undamped(100.0, 440.0), "13.82300768"),
        (1e3 * r.time_constant_from_decay_rate(ALPHA), "72.343156"),
        (1e3 * r.time_constant_from_decay_rate(2.0 * ALPHA), "36.171578"),
        (r.damping_ratio_from_q(100.0), "0.005000"),
        (r.loss_factor_from_q(100.0), "0.01000"),
        (r.half_power_width_from_decay_rate(ALPHA), "4.4000"),
        (r.damped_from_undamped(440.0, ALPHA), "439.9944999656"),
        (r.log_decrement_from_q(100.0), "0.0314163192"),
        (r.t60_from_decay_rate(ALPHA), "0.4997288174"),
        (r.decibels_per_second_from_decay_rate(ALPHA), "120.065119"),
        (r.cycles_from_q(100.0), "99.99874999"),
        (r.displacement_peak_from_undamped(440.0, 100.0), "439.98899986"),
        (r.q_from_damped(439.9944999656, ALPHA), "100.0000000"),
        (r.q_from_undamped(440.0, ALPHA), "100.0000000"),
        (r.undamped_from_damped(439.9944999656, ALPHA), "440.0000000"),
    ],
)
def test_440_hz_with_q_100(found: float, expected: str) -> None:
    """Every measure of one mode agrees with its closed form, to the digits with which it is written here."""
    assert_prints_as(found, expected)


def test_constants() -> None:
    """T60 alpha = 3 ln 10 = 6.907755, T60 width = 2.198807, 20 lg e = 8.685890 dB, e^-pi = -27.28753 dB (mathematics)."""
    assert_prints_as(r.T60_TIMES_DECAY_RATE, "6.907755")
    assert_prints_as(2.0 * r.T60_TIMES_DECAY_RATE, "13.8155")
    assert_prints_as(r.t60_from_decay_rate(ALPHA) * r.half_power_width_from_decay_rate(ALPHA), "2.198807")
    assert_prints_as(r.DECIBELS_PER_NEPER, "8.685890")
    assert_prints_as(r.DECIBELS_PER_NEPER * math.pi, "27.28753")


@pytest.mark.parametrize(
    ("q", "ratio"), [(2.0, "1.0812"), (5.0, "1.01037"), (10.0, "1.002522"), (20.0, "1.000626"), (50.0, "1.000100"), (100.0, "1.000025")]
)
def test_width_of_displacement(q: float, ratio: str) -> None:
    """The half-power width of displacement exceeds f0/Q by the tabulated ratio."""
    assert_prints_as(r.displacement_half_power_width_hz(440.0, q) * q / 440.0, ratio)


def test_displacement_at_q_of_one_has_no_lower_edge() -> None:
    """At Q = 1 the displacement at 0 Hz is above the half-power level, so the width does not exist and is refused."""
    with pytest.raises(OutOfRangeError, match=r"is 1; it has to be above 1\.30656"):
        r.displacement_half_power_width_hz(440.0, 1.0)


@pytest.mark.parametrize("q", [0.6, 1.0, 3.0, 50.0])
def test_edges_of_dissipated_power(q: float) -> None:
    """The half-power edges lie f0/Q apart, their product is f0^2, and the power there is half the greatest: at any Q."""
    low, high = r.half_power_edges_hz(200.0, q)
    assert_allclose(high - low, 200.0 / q, rtol=1e-12, atol=0)
    assert_allclose(high * low, 200.0**2, rtol=1e-12, atol=0)
    peak = r.dissipated_power_w(200.0, 200.0, q, 0.05, 1.0)
    assert_allclose(r.dissipated_power_w(np.array([low, high]), 200.0, q, 0.05, 1.0), 0.5 * peak, rtol=1e-12, atol=0)


@pytest.mark.parametrize(
    ("eta", "tangent", "decrement"),
    [(0.01, "0.00499988", "0.031415"), (0.1, "0.04987562", "0.313378"), (0.5, "0.2360680", "1.483259")],
)
def test_hysteretic_damping(eta: float, tangent: str, decrement: str) -> None:
    """A complex stiffness of loss factor eta rings with the tabulated alpha/omega_d and log decrement, and back."""
    alpha = r.decay_rate_from_hysteretic_loss_factor(eta, 440.0)
    assert_prints_as(alpha / (2 * math.pi * 440.0), tangent)
    assert_prints_as(alpha / 440.0, decrement)
    assert_allclose(r.hysteretic_loss_factor(440.0, alpha), eta, rtol=1e-13, atol=0)


@pytest.mark.parametrize("eta", [0.01, 0.03, 0.1])
def test_hysteretic_and_viscous_when_lightly_damped(eta: float) -> None:
    """The viscous 1/Q of a hysteretic ring, 2 sin(arctan(eta)/2), is below eta by 3/8 eta^2 of it (series): 0.37 % at eta = 0.1.

    Its log decrement is below pi eta by 1/4 eta^2: less than 0.3 %.
    """
    alpha = r.decay_rate_from_hysteretic_loss_factor(eta, 440.0)
    assert_allclose(1.0 - 1.0 / r.q_from_damped(440.0, alpha) / eta, 0.375 * eta**2, rtol=0.01, atol=0)
    assert_allclose(1.0 - alpha / 440.0 / (math.pi * eta), 0.25 * eta**2, rtol=0.01, atol=0)


def test_hysteretic_root() -> None:
    """A root of m s^2 + k (1 + j eta) = 0, found by numpy.roots, gives back eta."""
    root = max(np.roots([1.0, 0.0, 1000.0**2 * (1 + 0.4j)]), key=lambda s: s.imag)
    assert_allclose(r.hysteretic_loss_factor(float(root.imag) / (2 * math.pi), -float(root.real)), 0.4, rtol=1e-12, atol=0)


def test_power_of_a_driven_mode() -> None:
    """0.05 kg, 200 Hz, Q = 50, 1 N: 0.3978874 W and 0.6332574 mm at resonance, and a width of 4 Hz."""
    peak = r.dissipated_power_w(200.0, 200.0, 50.0, 0.05, 1.0)
    assert_prints_as(peak, "0.3978874")
    alpha = r.decay_rate_from_q_undamped(50.0, 200.0)
    # to the seven digits of the amplitude, which enters squared
    assert_allclose(r.dissipated_power_of_motion_w(200.0, alpha, 0.05, 0.6332574e-3), peak, rtol=2e-7, atol=0)
    low, high = r.half_power_edges_hz(200.0, 50.0)
    assert_allclose(high - low, 4.0, rtol=1e-12, atol=0)


def test_power_against_time_stepping() -> None:
    """The mean of c v^2 over a period of the driven motion, stepped in time until steady, is the dissipated power (off resonance too)."""
    mass, f0, q, force, drive = 0.05, 20.0, 4.0, 2.0, 23.0
    w0, w = 2 * math.pi * f0, 2 * math.pi * drive
    rate = w0 / q

    def motion(t: float, y: np.ndarray) -> list[float]:
        # the third component is the energy that the damper took
        return [y[1], force / mass * math.cos(w * t) - rate * y[1] - w0**2 * y[0], mass * rate * y[1] ** 2]

    start, end = 40 / drive, 50 / drive
    taken = integrate.solve_ivp(motion, (0.0, end), [0.0, 0.0, 0.0], t_eval=[start, end], rtol=1e-9, atol=1e-12).y[2]
    assert_allclose((taken[1] - taken[0]) / (end - start), r.dissipated_power_w(drive, f0, q, mass, force), rtol=1e-6, atol=0)


def test_energy_lost_per_cycle() -> None:
    """At Q = 50 one cycle takes 11.80942 % of the energy; 2 pi/Q would say 12.56637 %."""
    assert_prints_as(r.energy_lost_per_cycle_from_q(50.0), "0.1180942")


def test_series_rlc_circuit() -> None:
    """10 mH, 100 nF, 5 ohm: alpha = R/2L = 250 1/s and f0 = 1/(2 pi sqrt(LC)) give Q, T60 and width of circuit theory."""
    f0, alpha = 1.0 / (2 * math.pi * math.sqrt(10e-3 * 100e-9)), 5.0 / (2 * 10e-3)
    assert_prints_as(f0, "5032.921")
    assert_prints_as(r.q_from_undamped(f0, alpha), "63.24555")
    assert_prints_as(1e3 * r.t60_from_decay_rate(alpha), "27.63102")
    assert_prints_as(r.half_power_width_from_decay_rate(alpha), "79.57747")


@pytest.mark.parametrize(
    ("time_constant_s", "frequency_hz", "q"), [(1.0, 100.0, 300), (1.0, 200.0, 600), (0.1, 200.0, 60), (10.0, 200.0, 6000)]
)
def test_rules_of_thumb(time_constant_s: float, frequency_hz: float, q: int) -> None:
    """Common practice: amplitude time constant of 1 s at 100 Hz is a Q of about 300, and in proportion to both (pi is not quite 3)."""
    found = r.q_from_damped(frequency_hz, r.decay_rate_from_time_constant(time_constant_s))
    assert_allclose(found, q, rtol=0.05, atol=0)


# ---- a second route: the ring itself ----


@pytest.mark.parametrize("q", [0.55, 0.8, 2.0, 7.3])
def test_ring_stepped_in_time(q: float) -> None:
    """Zero crossings and extremes of the equation of motion, stepped numerically, show the damped frequency and decrement, at low Q too."""
    f0 = 3.0
    w0 = 2 * math.pi * f0
    alpha = r.decay_rate_from_q_undamped(q, f0)
    damped = r.damped_from_undamped(f0, alpha)

    def motion(_: float, y: np.ndarray) -> list[float]:
        return [y[1], -w0 / q * y[1] - w0**2 * y[0]]

    solved = integrate.solve_ivp(motion, (0.0, 1.6 / damped), [0.0, 1.0], rtol=1e-11, atol=1e-14, dense_output=True).sol
    assert solved is not None
    zero = optimize.brentq(lambda t: solved(t)[0], 0.9 / damped, 1.1 / damped)
    assert_allclose(zero, 1.0 / damped, rtol=1e-6, atol=0)
    # the speed one damped cycle later is smaller by exp(-decrement)
    assert_allclose(solved(zero)[1], math.exp(-r.log_decrement_from_q(q)), rtol=1e-5, atol=0)


def test_cycles_to_e_minus_pi_counts_cycles() -> None:
    """After the stated number of ringing cycles exp(-alpha t) is e^-pi = 0.04321392, at Q = 0.7 as at Q = 1000."""
    for q in (0.7, 3.0, 1000.0):
        alpha = r.decay_rate_from_q_undamped(q, 440.0)
        seconds = r.cycles_from_q(q) / r.damped_from_undamped(440.0, alpha)
        assert_allclose(math.exp(-alpha * seconds), 0.04321392, rtol=1e-7, atol=0)


# ---- there and back ----

BACK_AND_FORTH: list[tuple[Callable[[float], float], Callable[[float], float]]] = [
    (r.loss_factor_from_q, r.q_from_loss_factor),
    (r.damping_ratio_from_q, r.q_from_damping_ratio),
    (r.log_decrement_from_q, r.q_from_log_decrement),
    (r.cycles_from_q, r.q_from_cycles),
    (r.time_constant_from_decay_rate, r.decay_rate_from_time_constant),
    (r.t60_from_decay_rate, r.decay_rate_from_t60),
    (r.half_power_width_from_decay_rate, r.decay_rate_from_half_power_width),
    (r.decibels_per_second_from_decay_rate, r.decay_rate_from_decibels_per_second),
]
NAMES = [forth.__name__ for forth, _ in BACK_AND_FORTH]


@pytest.mark.parametrize(("forth", "back"), BACK_AND_FORTH, ids=NAMES)
@given(q=st.floats(0.5001, 1e7))
def test_there_and_back(forth: Callable[[float], float], back: Callable[[float], float], q: float) -> None:
    """Each conversion is undone by its inverse, and returns a plain float."""
    there = forth(q)
    assert type(there) is float
    assert_allclose(back(there), q, rtol=1e-12, atol=0)


@given(q=st.floats(0.5001, 1e6), frequency_hz=st.floats(1.0, 1e5))
def test_bridge_there_and_back(q: float, frequency_hz: float) -> None:
    """Q and a frequency give the decay rate, which with either frequency gives Q and the other frequency back."""
    alpha = r.decay_rate_from_q_undamped(q, frequency_hz)
    damped = r.damped_from_undamped(frequency_hz, alpha)
    assert_allclose(r.q_from_undamped(frequency_hz, alpha), q, rtol=1e-12, atol=0)
    assert_allclose(r.q_from_damped(damped, alpha), q, rtol=1e-11, atol=0)
    assert_allclose(r.undamped_from_damped(damped, alpha), frequency_hz, rtol=1e-11, atol=0)
    # near Q = 1/2 the damped frequency nearly vanishes and the rounding of Q itself is magnified by 1/(Q - 1/2)
    assert_allclose(r.decay_rate_from_q_damped(q, damped), alpha, rtol=1e-12 * (1.0 + 1.0 / (q - 0.5)), atol=0)


# ---- arrays ----


@pytest.mark.parametrize("convert", [pair[i] for pair in BACK_AND_FORTH for i in (0, 1)])
def test_arrays_are_converted_one_by_one(convert: Callable[..., np.ndarray]) -> None:
    """An array gives the array of what each of its elements gives, in its shape."""
    values = np.array([[0.6, 0.7], [0.8, 0.95]])
    found = convert(values)
    assert found.shape == (2, 2)
    assert_allclose(found, [[convert(float(v)) for v in row] for row in values], rtol=1e-15, atol=0)


def test_two_arguments_broadcast() -> None:
    """A column of frequencies and a row of decay rates give a table; integers and lists are taken as numbers."""
    frequency_hz, decay = np.array([[100.0], [200.0]]), np.array([1.0, 2.0, 5.0])
    for convert in (r.q_from_damped, r.q_from_undamped, r.undamped_from_damped, r.damped_from_undamped, r.hysteretic_loss_factor):
        table = convert(frequency_hz, decay)
        assert table.shape == (2, 3)
        assert_allclose(table[1, 2], convert(200.0, 5.0), rtol=1e-15, atol=0)
        assert type(convert(200, 5)) is float
    assert r.decay_rate_from_q_damped(np.array([10.0, 20.0]), 100.0).shape == (2,)
    assert r.decay_rate_from_q_undamped(50.0, np.array([100.0, 200.0])).shape == (2,)


# ---- out of range ----


@pytest.mark.parametrize("convert", [pair[i] for pair in BACK_AND_FORTH for i in (0, 1)])
@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf, -1.0, 0.0])
def test_what_no_mode_has_is_refused(convert: Callable[..., object], bad: float) -> None:
    """NaN, infinity, zero and negative numbers raise an error that names the figure, alone as inside an array."""
    with pytest.raises(OutOfRangeError, match=rf"is {bad:g}; it has to be above"):
        convert(bad)
    with pytest.raises(OutOfRangeError, match=rf"is {bad:g}; it has to be above"):
        convert(np.array([0.9, bad]))


@pytest.mark.parametrize(
    "call",
    [
        lambda: r.loss_factor_from_q(0.5),
        lambda: r.cycles_from_q(np.array([3.0, 0.5])),
        lambda: r.log_decrement_from_q(0.5),
        lambda: r.q_from_undamped(1.0, 2 * math.pi),
        lambda: r.damped_from_undamped(1.0, 2 * math.pi),
        lambda: r.decay_rate_from_q_damped(0.5, 100.0),
    ],
)
def test_a_mode_that_does_not_ring_is_refused(call: Callable[[], object]) -> None:
    """Critical damping, Q = 1/2, is refused with the reason, by way of Q or of the decay rate."""
    with pytest.raises(OutOfRangeError, match=r"The Q is 0\.5; it has to be above 0\.5 and finite \(at or below 1/2 nothing rings\)"):
        call()


def test_upper_limits() -> None:
    """A damping ratio of 1 and a loss factor of 2 are critical damping; a hysteretic ring decays slower than it turns."""
    with pytest.raises(OutOfRangeError, match="damping ratio is 1; it has to be above 0 and below 1"):
        r.q_from_damping_ratio(1.0)
    with pytest.raises(OutOfRangeError, match="loss factor is 2; it has to be above 0 and below 2"):
        r.q_from_loss_factor(2.0)
    with pytest.raises(OutOfRangeError, match="ratio of decay rate to damped angular frequency"):
        r.hysteretic_loss_factor(1.0, 2 * math.pi)


def test_error_is_a_usage_error_and_a_value_error() -> None:
    """Callers may catch it as what it is to the command line (exit status 2) or as Python's ValueError."""
    assert issubclass(OutOfRangeError, UsageError)
    assert issubclass(OutOfRangeError, ValueError)
    assert OutOfRangeError("").exit_status == 2
