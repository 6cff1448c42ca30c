"""What a measurement yields: immutable results, stored once as a pole with its covariance; all else is derived.

The names are those of the result document (docs/result.schema.json).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

from qmeter import relations
from qmeter.uncertainty import Figure, combine_parts

PARTS = ("fit", "model", "scatter", "mounting", "clock")
"""The parts of the uncertainty budget, kept apart to the end."""


@dataclass(frozen=True, slots=True)
class Doubt:
    """A reason not to trust a number: a code from docs/doubts.md, and a sentence with the figures in it and what to do."""

    code: str
    says: str


@dataclass(frozen=True, slots=True)
class Spread:
    """One part of the budget: the covariance of (damped frequency in Hz, decay rate in 1/s), and its degrees of freedom."""

    frequency_variance: float
    """Hz^2"""
    decay_variance: float
    """1/s^2"""
    covariance: float = 0.0
    """Hz/s"""
    degrees_of_freedom: float = math.inf

    def along(self, per_hz: float, per_decay: float) -> float:
        """Standard uncertainty of a quantity with these two partial derivatives (GUM 5.2.2, eq. 13)."""
        variance = per_hz**2 * self.frequency_variance + per_decay**2 * self.decay_variance + 2.0 * per_hz * per_decay * self.covariance
        return math.sqrt(max(variance, 0.0))


@dataclass(frozen=True, slots=True)
class DecayTrace:
    """The Hilbert envelope of one mode's band after one strike, decimated: what the decay strip draws."""

    start_s: float
    """time of the first point after the onset"""
    step_s: float
    level_dbfs: tuple[float, ...]
    floor_dbfs: float
    """level of the noise in the same band"""
    fit_from_s: float
    fit_to_s: float
    fit_dbfs: tuple[float, float]
    """level of the fitted line at fit_from_s and at fit_to_s"""


@dataclass(frozen=True, slots=True)
class SecondRoute:
    """Q by another route (half-power width, or the backward-integrated decay), and whether it agrees with the fit."""

    q: Figure
    agrees: bool


@dataclass(frozen=True, slots=True)
class Mode:
    """One resonance. Frequency is the damped, ringing frequency; decay rate that of the amplitude."""

    damped_frequency_hz: float
    amplitude_decay_rate_per_s: float
    amplitude: complex
    """at the onset of the strike, full scale = 1 (pooled: the strongest strike's)"""
    budget: dict[str, Spread] = field(hash=False)
    """the parts present, by their names in PARTS"""
    level_db: float
    """amplitude at the onset, relative to the strongest mode"""
    level_dbfs: float
    snr_db: float
    """amplitude (rms) at the onset over the noise within the half-power width"""
    decay_range_db: float
    """range of the decay that stands above the noise and was used"""
    strikes: int = 1
    half_power: SecondRoute | None = None
    backward_integral: SecondRoute | None = None
    doubts: tuple[Doubt, ...] = ()
    trace: DecayTrace | None = None

    def _figure(self, of: Callable[[float, float], float]) -> Figure:
        """A derived quantity with its budget: partial derivatives by central differences, exact to 1e-9 for these smooth maps."""
        f, a = self.damped_frequency_hz, self.amplitude_decay_rate_per_s
        step_f, step_a = 1e-5 * f, 1e-5 * a
        per_hz = (of(f + step_f, a) - of(f - step_f, a)) / (2 * step_f)
        per_decay = (of(f, a + step_a) - of(f, a - step_a)) / (2 * step_a)
        return combine_parts(
            of(f, a),
            {name: spread.along(per_hz, per_decay) for name, spread in self.budget.items()},
            {name: spread.degrees_of_freedom for name, spread in self.budget.items()},
        )

    @property
    def frequency_hz(self) -> Figure:
        """Damped frequency, Hz."""
        return self._figure(lambda f, a: f)

    @property
    def decay_rate_per_s(self) -> Figure:
        """Amplitude decay rate, 1/s."""
        return self._figure(lambda f, a: a)

    @property
    def q(self) -> Figure:
        """Quality factor omega0 / (2 alpha)."""
        return self._figure(relations.q_from_damped)

    @property
    def t60_s(self) -> Figure:
        """Time for the level to fall by 60 dB, s."""
        return self._figure(lambda f, a: relations.T60_TIMES_DECAY_RATE / a)

    @property
    def time_constant_s(self) -> Figure:
        """Time for the amplitude to fall by a factor e, s."""
        return self._figure(lambda f, a: 1.0 / a)

    @property
    def half_power_width_hz(self) -> Figure:
        """Width at half the maximum dissipated power, Hz."""
        return self._figure(lambda f, a: a / math.pi)

    @property
    def loss_factor(self) -> Figure:
        """Loss factor at resonance, 1/Q."""
        return self._figure(lambda f, a: 1.0 / relations.q_from_damped(f, a))

    @property
    def damping_ratio(self) -> Figure:
        """Damping ratio, 1/(2Q)."""
        return self._figure(lambda f, a: 0.5 / relations.q_from_damped(f, a))

    @property
    def log_decrement(self) -> Figure:
        """Logarithmic decrement per damped cycle, alpha / f_d."""
        return self._figure(lambda f, a: a / f)

    @property
    def cycles_to_e_minus_pi(self) -> Figure:
        """Ringing cycles in which the amplitude falls by e^-pi: f_d pi / alpha."""
        return self._figure(lambda f, a: math.pi * f / a)


@dataclass(frozen=True, slots=True)
class Strike:
    """One excitation and what it yielded: the reading."""

    onset_s: float
    usable_s: float
    peak_dbfs: float
    noise_dbfs: float
    accepted: bool
    doubts: tuple[Doubt, ...]
    modes: tuple[Mode, ...]


@dataclass(frozen=True, slots=True)
class Measurement:
    """What the strikes of one recording yield together; `modes` are pooled over the accepted strikes, strongest first."""

    sample_rate_hz: float
    channels: int
    channel: int
    duration_s: float
    strikes: tuple[Strike, ...]
    modes: tuple[Mode, ...]
    doubts: tuple[Doubt, ...]
    file: str | None = None
    sha256: str | None = None
    mounting: str | None = None


@dataclass(frozen=True, slots=True)
class Settings:
    """What the user may ask of `measure`."""

    channel: int | None = None
    """1-based; None: the channel with the best decay"""
    near_hz: float | None = None
    most: int | None = None
    range_hz: tuple[float, float] | None = None
    clock_ppm: float = 100.0
    """half-width of the rectangular distribution of the sample clock's error; 0 leaves that part out"""
