"""One bench case: the samples, and the truth they hold."""

from __future__ import annotations

import math
import zlib
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Truth:
    """A mode that was put in. `amplitude` is complex, at the onset, full scale 1."""

    damped_frequency_hz: float
    decay_rate_per_s: float
    amplitude: complex
    counts: bool = True
    """False: it may be missed (too weak for the family's rule), but finding it is no invention"""
    tolerance_hz: float = math.nan
    """found means within this; NaN: half a half-power width"""
    group: str = ""
    """class of the mode within the family (clutter: how far it stands above what is there)"""

    @property
    def width_hz(self) -> float:
        """Half-power width."""
        return self.decay_rate_per_s / math.pi

    @property
    def reach_hz(self) -> float:
        """How near an estimate must lie to have found this mode."""
        return 0.5 * self.width_hz if math.isnan(self.tolerance_hz) else self.tolerance_hz

    @property
    def q(self) -> float:
        """Q = omega0 / (2 decay)."""
        return math.hypot(2 * math.pi * self.damped_frequency_hz, self.decay_rate_per_s) / (2 * self.decay_rate_per_s)


@dataclass(frozen=True)
class Case:
    """Samples of one recording with the truth behind them."""

    family: str
    seed: int
    index: int
    samples: Array
    rate_hz: float
    modes: tuple[Truth, ...]
    onset: int
    """index of the first sample of the free ring (struck: the first after contact); amplitudes are those there"""
    density: Callable[[Array], Array] | float | None
    """one-sided noise density per hertz (a number if white); None where no bound can be stated"""
    known_lines_hz: tuple[float, ...] = ()
    """steady tones (hum) that must not be reported as modes"""
    expect_doubt: str = ""
    """doubt code that must be there (on the measurement, on its strike or on a counted mode)"""
    invented_is_strays: bool = False
    """True: invented counts only reports with no planted mode (counted or not) within half its width"""
    judges_inventions: bool = True
    """False: the recording holds modes of its own, which are not ours to judge"""
    true_pole: Callable[[float, float], tuple[float, float]] | None = None
    """drift: frequency and decay rate of the (only) mode over the stretch from t1 to t2 seconds after the onset"""
    notes: dict[str, float | str] = field(default_factory=dict)

    @property
    def ring_samples(self) -> int:
        """Samples from the onset to the end: what the bound may use."""
        return self.samples.size - self.onset


def generator(family: str, seed: int, index: int) -> np.random.Generator:
    """The random stream of one case: SeedSequence(seed).spawn by family and index, so case i is the same whatever the count."""
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=(zlib.crc32(family.encode()), index)))


def log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    """One draw, uniform in the logarithm."""
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))


def phase(rng: np.random.Generator) -> complex:
    """A random unit phasor."""
    return complex(np.exp(2j * math.pi * rng.random()))


def decibels(db: float) -> float:
    """Amplitude ratio of a level in dB."""
    return float(10.0 ** (db / 20.0))
