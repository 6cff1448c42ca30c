"""Conversions among the measures of damping, exact at low Q too.

One viscously damped mode: x'' + 2 alpha x' + omega0^2 x = 0, so x = A exp(-alpha t) cos(omega_d t + phi) with
omega0^2 = omega_d^2 + alpha^2 and Q = omega0/(2 alpha). "Damped" frequency is the one that rings, "undamped" is omega0/(2 pi);
decay rate and time constant are those of the amplitude.

Two families, and a bridge; any conversion takes at most three calls:

    without a frequency  Q <-> loss factor, damping ratio, log decrement, cycles to e^-pi
    in time              decay rate <-> time constant, T60, half-power width, decibels per second
    the bridge           Q, decay rate and the damped or undamped frequency: any two give the others

Every function takes floats or arrays (arrays broadcast) and returns a float for floats. Input that is NaN, infinite, not positive or
of a mode that does not ring (Q <= 1/2) raises `OutOfRangeError` with the figure and the valid range.

Sources: the definitions are those of any textbook on vibration (from memory: L. Cremer, M. Heckl, B. Petersson, "Structure-Borne
Sound"; N. H. Fletcher, T. D. Rossing, "The Physics of Musical Instruments"); each formula follows from the equation above by algebra.
"""

from __future__ import annotations

import math
from typing import TypeVar, overload

import numpy as np
import numpy.typing as npt

from qmeter.errors import OutOfRangeError

Array = npt.NDArray[np.float64]
Real = TypeVar("Real", float, Array)

T60_TIMES_DECAY_RATE = 3.0 * math.log(10.0)
"""A level falls by 60 dB when the amplitude falls by 1000: exp(-alpha T60) = 10^-3."""

DECIBELS_PER_NEPER = 20.0 / math.log(10.0)
TWO_PI = 2.0 * math.pi
LOWEST_Q = 0.5
"""Critical damping; nothing rings at or below it."""


# ---- Q and the other measures without a frequency ----


def loss_factor_from_q(q: Real) -> Real:
    """Loss factor at resonance, eta = 1/Q."""
    return 1.0 / _ringing_q(q)


def q_from_loss_factor(loss_factor: Real) -> Real:
    """Q = 1/eta, for a viscous mode (eta below 2)."""
    return 1.0 / _within("loss factor", loss_factor, 0.0, 2.0)


def damping_ratio_from_q(q: Real) -> Real:
    """Damping ratio, zeta = 1/(2Q)."""
    return 0.5 / _ringing_q(q)


def q_from_damping_ratio(damping_ratio: Real) -> Real:
    """Q = 1/(2 zeta), zeta below 1."""
    return 0.5 / _within("damping ratio", damping_ratio, 0.0, 1.0)


def log_decrement_from_q(q: Real) -> Real:
    """Logarithmic decrement per damped cycle, delta = 2 pi zeta/sqrt(1 - zeta^2) = pi/sqrt(Q^2 - 1/4)."""
    return math.pi / cycles_from_q(q)


def q_from_log_decrement(log_decrement: Real) -> Real:
    """Q = sqrt((pi/delta)^2 + 1/4)."""
    return q_from_cycles(math.pi / _positive("log decrement", log_decrement))


@overload
def cycles_from_q(q: float) -> float: ...
@overload
def cycles_from_q(q: Array) -> Array: ...
def cycles_from_q(q: float | Array) -> float | Array:
    """Ringing cycles in which the amplitude falls by e^-pi: N = f_d pi/alpha = sqrt(Q^2 - 1/4)."""
    ringing = _ringing_q(q)
    # the product keeps its digits near Q = 1/2, where Q^2 - 1/4 would lose them
    return _sqrt((ringing - LOWEST_Q) * (ringing + LOWEST_Q))


@overload
def q_from_cycles(cycles_to_e_minus_pi: float) -> float: ...
@overload
def q_from_cycles(cycles_to_e_minus_pi: Array) -> Array: ...
def q_from_cycles(cycles_to_e_minus_pi: float | Array) -> float | Array:
    """Q = sqrt(N^2 + 1/4)."""
    return _hypot(_positive("number of cycles to e^-pi", cycles_to_e_minus_pi), LOWEST_Q)


def energy_lost_per_cycle_from_q(q: Real) -> Real:
    """Fraction of the energy that one damped cycle of free decay takes, 1 - exp(-2 delta); near 2 pi/Q at high Q only."""
    return -_expm1(-2.0 * log_decrement_from_q(q))


# ---- decay rate and the other measures in time ----


def time_constant_from_decay_rate(decay_rate_per_s: Real) -> Real:
    """Time in which the amplitude falls by a factor e, tau = 1/alpha, in s."""
    return 1.0 / _positive("decay rate (1/s)", decay_rate_per_s)


def decay_rate_from_time_constant(time_constant_s: Real) -> Real:
    """Amplitude decay rate alpha = 1/tau, in 1/s."""
    return 1.0 / _positive("time constant (s)", time_constant_s)


def t60_from_decay_rate(decay_rate_per_s: Real) -> Real:
    """Time in which the level falls by 60 dB, T60 = 3 ln 10/alpha, in s."""
    return T60_TIMES_DECAY_RATE / _positive("decay rate (1/s)", decay_rate_per_s)


def decay_rate_from_t60(t60_s: Real) -> Real:
    """Amplitude decay rate alpha = 3 ln 10/T60, in 1/s."""
    return T60_TIMES_DECAY_RATE / _positive("T60 (s)", t60_s)


def half_power_width_from_decay_rate(decay_rate_per_s: Real) -> Real:
    """Full width at half the maximum dissipated power, alpha/pi = f_0/Q, in Hz; exact for velocity, not for displacement."""
    return _positive("decay rate (1/s)", decay_rate_per_s) / math.pi


def decay_rate_from_half_power_width(half_power_width_hz: Real) -> Real:
    """Amplitude decay rate alpha = pi times the half-power width, in 1/s."""
    return math.pi * _positive("half-power width (Hz)", half_power_width_hz)


def decibels_per_second_from_decay_rate(decay_rate_per_s: Real) -> Real:
    """Fall of the level, 20 lg(e) alpha = 60/T60, in dB/s."""
    return DECIBELS_PER_NEPER * _positive("decay rate (1/s)", decay_rate_per_s)


def decay_rate_from_decibels_per_second(decibels_per_second: Real) -> Real:
    """Amplitude decay rate from the fall of the level in dB/s, in 1/s."""
    return _positive("fall of the level (dB/s)", decibels_per_second) / DECIBELS_PER_NEPER


# ---- the bridge: Q, decay rate, frequency ----


@overload
def q_from_damped(damped_frequency_hz: float, decay_rate_per_s: float) -> float: ...
@overload
def q_from_damped(damped_frequency_hz: Array, decay_rate_per_s: float | Array) -> Array: ...
@overload
def q_from_damped(damped_frequency_hz: float, decay_rate_per_s: Array) -> Array: ...
def q_from_damped(damped_frequency_hz: float | Array, decay_rate_per_s: float | Array) -> float | Array:
    """Q = sqrt(omega_d^2 + alpha^2)/(2 alpha)."""
    frequency = _positive("damped frequency (Hz)", damped_frequency_hz)
    decay_rate = _positive("decay rate (1/s)", decay_rate_per_s)
    return _hypot(TWO_PI * frequency, decay_rate) / (2.0 * decay_rate)


@overload
def q_from_undamped(undamped_frequency_hz: float, decay_rate_per_s: float) -> float: ...
@overload
def q_from_undamped(undamped_frequency_hz: Array, decay_rate_per_s: float | Array) -> Array: ...
@overload
def q_from_undamped(undamped_frequency_hz: float, decay_rate_per_s: Array) -> Array: ...
def q_from_undamped(undamped_frequency_hz: float | Array, decay_rate_per_s: float | Array) -> float | Array:
    """Q = omega_0/(2 alpha)."""
    frequency = _positive("undamped frequency (Hz)", undamped_frequency_hz)
    decay_rate = _positive("decay rate (1/s)", decay_rate_per_s)
    return _ringing_q(math.pi * frequency / decay_rate)


@overload
def decay_rate_from_q_damped(q: float, damped_frequency_hz: float) -> float: ...
@overload
def decay_rate_from_q_damped(q: Array, damped_frequency_hz: float | Array) -> Array: ...
@overload
def decay_rate_from_q_damped(q: float, damped_frequency_hz: Array) -> Array: ...
def decay_rate_from_q_damped(q: float | Array, damped_frequency_hz: float | Array) -> float | Array:
    """Amplitude decay rate alpha = omega_d/(2 sqrt(Q^2 - 1/4)), in 1/s."""
    return math.pi * _positive("damped frequency (Hz)", damped_frequency_hz) / cycles_from_q(q)


@overload
def decay_rate_from_q_undamped(q: float, undamped_frequency_hz: float) -> float: ...
@overload
def decay_rate_from_q_undamped(q: Array, undamped_frequency_hz: float | Array) -> Array: ...
@overload
def decay_rate_from_q_undamped(q: float, undamped_frequency_hz: Array) -> Array: ...
def decay_rate_from_q_undamped(q: float | Array, undamped_frequency_hz: float | Array) -> float | Array:
    """Amplitude decay rate alpha = omega_0/(2Q), in 1/s."""
    return math.pi * _positive("undamped frequency (Hz)", undamped_frequency_hz) / _ringing_q(q)


@overload
def undamped_from_damped(damped_frequency_hz: float, decay_rate_per_s: float) -> float: ...
@overload
def undamped_from_damped(damped_frequency_hz: Array, decay_rate_per_s: float | Array) -> Array: ...
@overload
def undamped_from_damped(damped_frequency_hz: float, decay_rate_per_s: Array) -> Array: ...
def undamped_from_damped(damped_frequency_hz: float | Array, decay_rate_per_s: float | Array) -> float | Array:
    """Undamped frequency sqrt(omega_d^2 + alpha^2)/(2 pi), in Hz."""
    frequency = _positive("damped frequency (Hz)", damped_frequency_hz)
    return _hypot(frequency, _positive("decay rate (1/s)", decay_rate_per_s) / TWO_PI)


@overload
def damped_from_undamped(undamped_frequency_hz: float, decay_rate_per_s: float) -> float: ...
@overload
def damped_from_undamped(undamped_frequency_hz: Array, decay_rate_per_s: float | Array) -> Array: ...
@overload
def damped_from_undamped(undamped_frequency_hz: float, decay_rate_per_s: Array) -> Array: ...
def damped_from_undamped(undamped_frequency_hz: float | Array, decay_rate_per_s: float | Array) -> float | Array:
    """Damped frequency sqrt(omega_0^2 - alpha^2)/(2 pi), in Hz."""
    q = q_from_undamped(undamped_frequency_hz, decay_rate_per_s)
    return cycles_from_q(q) * _positive("decay rate (1/s)", decay_rate_per_s) / math.pi


# ---- the response of a driven mode ----


def displacement_peak_from_undamped(undamped_frequency_hz: float, q: float) -> float:
    """Where the displacement of a mode driven by a constant force peaks, f_0 sqrt(1 - 2 zeta^2), in Hz; it has a peak above Q = 1/sqrt 2.

    Velocity and dissipated power peak at f_0 exactly.
    """
    frequency = _positive("undamped frequency (Hz)", undamped_frequency_hz)
    zeta = 0.5 / _within("Q of a mode whose displacement peaks", q, math.sqrt(0.5), math.inf)
    return frequency * math.sqrt(1.0 - 2.0 * zeta * zeta)


def half_power_edges_hz(undamped_frequency_hz: float, q: float) -> tuple[float, float]:
    """The two frequencies of half the maximum dissipated power, f_0 (sqrt(1 + zeta^2) -+ zeta), in Hz."""
    frequency = _positive("undamped frequency (Hz)", undamped_frequency_hz)
    zeta = damping_ratio_from_q(q)
    middle = math.hypot(1.0, zeta)
    return frequency / (middle + zeta), frequency * (middle + zeta)


def displacement_half_power_width_hz(undamped_frequency_hz: float, q: float) -> float:
    """Full width at half the maximum of the displacement squared, in Hz: wider than f_0/Q (by 0.25 % at Q = 10).

    The edges solve (1 - r^2)^2 + (r/Q)^2 = 2 (1/Q^2)(1 - zeta^2), r = f/f_0. Below Q = 1.307 there is no lower edge.
    """
    frequency = _positive("undamped frequency (Hz)", undamped_frequency_hz)
    lowest = 0.5 / math.sin(math.pi / 8.0)  # the lower edge reaches 0 Hz where sin(2 arcsin zeta) = cos(2 arcsin zeta)
    zeta = 0.5 / _within("Q of a mode whose displacement has two half-power edges", q, lowest, math.inf)
    centre, half = 1.0 - 2.0 * zeta * zeta, 2.0 * zeta * math.sqrt(1.0 - zeta * zeta)
    return frequency * (math.sqrt(centre + half) - math.sqrt(centre - half))


@overload
def dissipated_power_w(
    drive_frequency_hz: float, undamped_frequency_hz: float, q: float, modal_mass_kg: float, force_amplitude_n: float
) -> float: ...
@overload
def dissipated_power_w(
    drive_frequency_hz: Array, undamped_frequency_hz: float, q: float, modal_mass_kg: float, force_amplitude_n: float
) -> Array: ...
def dissipated_power_w(
    drive_frequency_hz: float | Array, undamped_frequency_hz: float, q: float, modal_mass_kg: float, force_amplitude_n: float
) -> float | Array:
    """Mean power, in W, that a mode driven by a sinusoidal force of constant amplitude dissipates.

    P = (F^2/2m) 2 alpha omega^2/((omega_0^2 - omega^2)^2 + 4 alpha^2 omega^2). It peaks at omega_0 exactly, with F^2 Q/(2 m omega_0),
    and its full width at half of that is 2 alpha exactly.
    """
    omega = TWO_PI * _positive("drive frequency (Hz)", drive_frequency_hz)
    omega0 = TWO_PI * _positive("undamped frequency (Hz)", undamped_frequency_hz)
    energy_rate = omega0 / _positive("Q", q)
    mass = _positive("modal mass (kg)", modal_mass_kg)
    force = _positive("force amplitude (N)", force_amplitude_n)
    # divided through by omega^2 so that neither end of the scale overflows
    detuning = (omega0 - omega) * (omega0 + omega) / omega
    return 0.5 * force * force / mass * energy_rate / (detuning * detuning + energy_rate * energy_rate)


def dissipated_power_of_motion_w(
    drive_frequency_hz: float, decay_rate_per_s: float, modal_mass_kg: float, displacement_amplitude_m: float
) -> float:
    """Mean power, in W, that sinusoidal motion of that amplitude dissipates: P = m alpha X^2 omega^2 = c V^2/2 with c = 2 m alpha."""
    speed = TWO_PI * _positive("drive frequency (Hz)", drive_frequency_hz) * _positive("amplitude (m)", displacement_amplitude_m)
    return _positive("modal mass (kg)", modal_mass_kg) * _positive("decay rate (1/s)", decay_rate_per_s) * speed * speed


# ---- hysteretic damping, k (1 + j eta) ----


@overload
def hysteretic_loss_factor(damped_frequency_hz: float, decay_rate_per_s: float) -> float: ...
@overload
def hysteretic_loss_factor(damped_frequency_hz: Array, decay_rate_per_s: float | Array) -> Array: ...
@overload
def hysteretic_loss_factor(damped_frequency_hz: float, decay_rate_per_s: Array) -> Array: ...
def hysteretic_loss_factor(damped_frequency_hz: float | Array, decay_rate_per_s: float | Array) -> float | Array:
    """Loss factor of a complex stiffness k (1 + j eta) from its ring: eta = tan(2 arctan(alpha/omega_d)).

    Of m s^2 + k (1 + j eta) = 0 the root s = -alpha + j omega_d has the angle arctan(eta)/2 to the imaginary axis. It needs
    alpha < omega_d. The viscous 1/Q of the same ring is lower by 3/8 eta^2 of it: 0.37 % at eta = 0.1.
    """
    frequency = _positive("damped frequency (Hz)", damped_frequency_hz)
    tangent = _positive("decay rate (1/s)", decay_rate_per_s) / (TWO_PI * frequency)
    tangent = _within("ratio of decay rate to damped angular frequency", tangent, 0.0, 1.0)
    return 2.0 * tangent / ((1.0 - tangent) * (1.0 + tangent))


@overload
def decay_rate_from_hysteretic_loss_factor(loss_factor: float, damped_frequency_hz: float) -> float: ...
@overload
def decay_rate_from_hysteretic_loss_factor(loss_factor: Array, damped_frequency_hz: float | Array) -> Array: ...
@overload
def decay_rate_from_hysteretic_loss_factor(loss_factor: float, damped_frequency_hz: Array) -> Array: ...
def decay_rate_from_hysteretic_loss_factor(loss_factor: float | Array, damped_frequency_hz: float | Array) -> float | Array:
    """Amplitude decay rate of a complex stiffness k (1 + j eta): alpha = omega_d tan(arctan(eta)/2), in 1/s."""
    eta = _positive("loss factor", loss_factor)
    omega_d = TWO_PI * _positive("damped frequency (Hz)", damped_frequency_hz)
    return omega_d * eta / (1.0 + _hypot(1.0, eta))  # tan(arctan(eta)/2) = eta/(1 + sqrt(1 + eta^2))


# ---- checks, and the few functions that differ for floats and arrays ----


@overload
def _positive(name: str, value: float) -> float: ...
@overload
def _positive(name: str, value: Array) -> Array: ...
def _positive(name: str, value: float | Array) -> float | Array:
    return _within(name, value, 0.0, math.inf)


@overload
def _ringing_q(q: float) -> float: ...
@overload
def _ringing_q(q: Array) -> Array: ...
def _ringing_q(q: float | Array) -> float | Array:
    return _within("Q", q, LOWEST_Q, math.inf)


@overload
def _within(name: str, value: float, above: float, below: float) -> float: ...
@overload
def _within(name: str, value: Array, above: float, below: float) -> Array: ...
def _within(name: str, value: float | Array, above: float, below: float) -> float | Array:
    """`value` as a float or a float64 array, if all of it lies between the two limits, both excluded; NaN never does."""
    if isinstance(value, float) and above < value < below:
        return value
    numbers = np.asarray(value, dtype=np.float64)
    good = (numbers > above) & (numbers < below)
    if not good.all():
        found = float(numbers[~good].flat[0]) if numbers.ndim else float(numbers)
        span = f"above {above:g}" + (" and finite" if math.isinf(below) else f" and below {below:g}")
        why = " (at or below 1/2 nothing rings)" if name == "Q" and above == LOWEST_Q else ""
        raise OutOfRangeError(f"The {name} is {found:g}; it has to be {span}{why}.")
    return numbers if numbers.ndim else float(numbers)


@overload
def _sqrt(x: float) -> float: ...
@overload
def _sqrt(x: Array) -> Array: ...
def _sqrt(x: float | Array) -> float | Array:
    return math.sqrt(x) if isinstance(x, float) else np.sqrt(x)


@overload
def _expm1(x: float) -> float: ...
@overload
def _expm1(x: Array) -> Array: ...
def _expm1(x: float | Array) -> float | Array:
    return math.expm1(x) if isinstance(x, float) else np.expm1(x)


@overload
def _hypot(x: float, y: float) -> float: ...
@overload
def _hypot(x: Array, y: float | Array) -> Array: ...
@overload
def _hypot(x: float, y: Array) -> Array: ...
def _hypot(x: float | Array, y: float | Array) -> float | Array:
    if isinstance(x, float) and isinstance(y, float):
        return math.hypot(x, y)
    return np.hypot(x, y)
