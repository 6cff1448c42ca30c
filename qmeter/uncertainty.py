"""Uncertainty after JCGM 100:2008 (the "GUM"): combine, propagate, expand, and show no more digits than that allows.

Small u is a standard uncertainty, `u95` an expanded one at 95 %, `nu` degrees of freedom (infinite where nothing limits them).
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from decimal import ROUND_CEILING, ROUND_HALF_EVEN, Context, Decimal
from functools import lru_cache
from typing import TYPE_CHECKING

from qmeter.errors import OutOfRangeError

if TYPE_CHECKING:
    import numpy as np
    import numpy.typing as npt

    Array = npt.NDArray[np.float64]

NORMAL_95 = 1.959963984540054
"""Two-sided 95 % point of the normal distribution: Student's t at infinite degrees of freedom."""

UNKNOWN = "?"
"""Shown where no uncertainty could be stated."""

_DIGITS_WITHOUT_U95 = 3
_DIGITS_WITH_U95_OF_ZERO = 10
_SLACK = 1e-9  # keeps truncation from turning 4 - 1e-15 degrees of freedom into 3


@dataclass(frozen=True, slots=True)
class Parts:
    """The uncertainty budget: standard uncertainties in the unit of the figure, kept apart to the end."""

    fit: float = 0.0
    """covariance of the fit against the local noise"""
    model: float = 0.0
    """what the fitted model leaves out"""
    scatter: float = 0.0
    """between strikes"""
    mounting: float = 0.0
    """between ways of holding, striking and sensing"""
    clock: float = 0.0
    """the sample clock"""


@dataclass(frozen=True, slots=True)
class Figure:
    """A measured value with its expanded uncertainty; `u95` is None where none could be stated."""

    value: float
    u95: float | None
    k: float | None = None
    """coverage factor: u95 over the combined standard uncertainty"""
    nu: float | None = None
    """effective degrees of freedom, truncated to a whole number; may be infinite"""
    parts: Parts | None = None


@lru_cache(maxsize=4096)
def student_t(nu: float, level: float = 0.95) -> float:
    """Two-sided Student's t (GUM table G.2): the factor that covers `level` at `nu` degrees of freedom.

    `nu` may be fractional or infinite. Raises OutOfRangeError for nu < 1 or a level outside (0, 1).
    """
    if not nu >= 1.0:
        raise OutOfRangeError(f"Student's t was asked for at {nu:g} degrees of freedom; at least 1 is needed, so take one more reading.")
    if not 0.0 < level < 1.0:
        raise OutOfRangeError(f"A coverage level of {level:g} was asked for; it lies between 0 and 1, both excluded.")
    if math.isinf(nu) and level == 0.95:
        return NORMAL_95
    from scipy import special  # late: the factor is only needed once something was measured

    upper = 0.5 * (1.0 + level)
    return float(special.ndtri(upper) if math.isinf(nu) else special.stdtrit(nu, upper))


def welch_satterthwaite(u: Sequence[float], nu: Sequence[float]) -> float:
    """Effective degrees of freedom of a root sum of squares, not yet truncated (GUM G.4.1, eq. G.2b).

    `u`: contributions in the unit of the result; `nu`: their degrees of freedom, at least 1, infinite allowed. Contributions of
    zero do not count. Raises OutOfRangeError where a contribution has less than one degree of freedom.
    """
    combined = math.hypot(*u)
    if combined == 0.0:
        return math.inf
    spread = 0.0
    for part, degrees in zip(u, nu, strict=True):
        if part == 0.0:
            continue
        if not degrees >= 1.0:
            raise OutOfRangeError(f"A contribution of {part:g} has {degrees:g} degrees of freedom; at least 1 is needed.")
        spread += (part / combined) ** 4 / degrees
    return 1.0 / spread if spread > 0.0 else math.inf


def truncated(nu: float) -> float:
    """Degrees of freedom cut to the next lower whole number (GUM G.4.1), immune to rounding of the last bits; infinite stays infinite."""
    return nu if math.isinf(nu) else float(math.floor(nu * (1.0 + _SLACK)))


def combine_parts(value: float, parts: Mapping[str, float], degrees_of_freedom: Mapping[str, float]) -> Figure:
    """A figure from its budget: root sum of squares, Welch-Satterthwaite, Student's t at 95 % (GUM 5.1.2, G.4.1, G.3.2).

    `parts`: standard uncertainties in the unit of `value`, named as the fields of `Parts`; `degrees_of_freedom` by the same names.
    An infinite or NaN part leaves `u95` None: nothing can be stated then. Raises OutOfRangeError for a negative part, or for one
    with less than one degree of freedom.
    """
    names = tuple(parts)
    u = tuple(float(parts[name]) for name in names)
    combined = math.hypot(*u)
    if not math.isfinite(combined):
        return Figure(float(value), None)
    if u and min(u) < 0.0:
        raise OutOfRangeError(f"A standard uncertainty of {min(u):g} was given; it cannot be negative.")
    nu = truncated(welch_satterthwaite(u, tuple(degrees_of_freedom[name] for name in names)))
    k = student_t(nu)
    return Figure(float(value), k * combined, k, nu, Parts(**dict(zip(names, u, strict=True))))


def type_a(values: Sequence[float] | Array) -> tuple[float, float, float]:
    """Mean of repeated readings, its standard uncertainty s/sqrt(n), and its degrees of freedom n - 1 (GUM 4.2).

    Raises OutOfRangeError for fewer than two readings, or for one that is not finite.
    """
    readings = [float(reading) for reading in values]
    count = len(readings)
    if count < 2:
        raise OutOfRangeError(f"Scatter needs at least two readings and {count} was given; take more, better five.")
    if not all(map(math.isfinite, readings)):
        raise OutOfRangeError("One of the readings is not a finite number; leave it out.")
    mean = math.fsum(readings) / count
    variance = math.fsum((reading - mean) ** 2 for reading in readings) / (count - 1)
    return mean, math.sqrt(variance / count), float(count - 1)


def rectangular(half_width: float) -> float:
    """Standard uncertainty of a quantity anywhere within +- `half_width` (GUM 4.3.7, eq. 7)."""
    if not 0.0 <= half_width < math.inf:
        raise OutOfRangeError(f"A half-width of {half_width:g} was given; it is zero or positive, and finite.")
    return half_width / math.sqrt(3.0)


def resolution(step: float) -> float:
    """Standard uncertainty of an indication with the resolution `step` (GUM F.2.2.1)."""
    return rectangular(0.5 * step)


def covariance_of_means(readings: Array) -> Array:
    """Covariance of the means of quantities read together (GUM 5.2.3, eq. 17).

    `readings`: (number of readings, number of quantities). Returns (quantities, quantities).
    """
    import numpy as np

    count = readings.shape[0]
    if count < 2:
        raise OutOfRangeError(f"A covariance needs at least two readings and {count} was given.")
    covariance: Array = np.atleast_2d(np.cov(readings, rowvar=False)) / count
    return covariance


def covariance_from_correlation(u: Sequence[float] | Array, correlation: Array) -> Array:
    """Covariance matrix from standard uncertainties (n) and correlation coefficients (n, n) (GUM 5.2.2, eq. 14)."""
    import numpy as np

    scale = np.asarray(u, dtype=np.float64)
    return scale[:, None] * np.asarray(correlation, dtype=np.float64) * scale[None, :]


def propagate(sensitivities: Array, covariance: Array) -> Array:
    """Covariance of linearised results from that of correlated inputs (GUM 5.2.2, eq. 13; H.2 eq. H.9 for several results).

    `sensitivities`: partial derivatives, (results, inputs); `covariance`: (inputs, inputs). Returns (results, results).
    """
    result: Array = sensitivities @ covariance @ sensitivities.T
    return result


@dataclass(frozen=True, slots=True)
class StraightLine:
    """y = intercept + slope (x - origin), fitted by least squares, with all that is needed to read it anywhere."""

    origin: float
    intercept: float
    slope: float
    u_intercept: float
    u_slope: float
    correlation: float
    """between intercept and slope"""
    residual_sd: float
    nu: float

    def at(self, x: float) -> tuple[float, float]:
        """Value and standard uncertainty of the line at `x` (GUM H.3.4, eq. H.15)."""
        away = x - self.origin
        covariance = self.correlation * self.u_intercept * self.u_slope
        variance = self.u_intercept**2 + away * away * self.u_slope**2 + 2.0 * away * covariance
        return self.intercept + self.slope * away, math.sqrt(max(variance, 0.0))


def straight_line(x: Sequence[float] | Array, y: Sequence[float] | Array, origin: float = 0.0) -> StraightLine:
    """Unweighted least-squares line with its covariance from the residuals (GUM H.3.3, eq. H.13).

    `x`, `y`: equally long, at least three points, x not all alike. It holds for independent residuals of one size only.
    """
    import numpy as np

    away = np.asarray(x, dtype=np.float64) - origin
    height = np.asarray(y, dtype=np.float64)
    count = away.size
    if count < 3 or height.size != count:
        raise OutOfRangeError(f"A line with an uncertainty needs at least 3 pairs; {count} x and {height.size} y were given.")
    middle = float(away.mean())
    spread = float(np.sum((away - middle) ** 2))
    if not 0.0 < spread < math.inf:
        raise OutOfRangeError("A line needs finite x that are not all alike.")
    slope = float(np.sum((away - middle) * height)) / spread
    intercept = float(height.mean()) - slope * middle
    nu = float(count - 2)
    residual_sd = math.sqrt(float(np.sum((height - intercept - slope * away) ** 2)) / nu)
    mean_square = float(np.mean(away**2))
    return StraightLine(
        origin=origin,
        intercept=intercept,
        slope=slope,
        u_intercept=residual_sd * math.sqrt(mean_square / spread),
        u_slope=residual_sd / math.sqrt(spread),
        correlation=-middle / math.sqrt(mean_square) if mean_square > 0.0 else 0.0,
        residual_sd=residual_sd,
        nu=nu,
    )


def round_u95(u95: float) -> Decimal:
    """`u95` to two significant digits, upwards, unless less than a tenth of the second digit's unit is cut (GUM 7.2.6).

    So 10.47 becomes 11 and 28.05 becomes 28, as there; at most 1 % of u95 is lost. `u95`: positive and finite.
    """
    exact = Decimal(repr(float(u95)))
    unit = Decimal(1).scaleb(exact.adjusted() - 1)
    rounded = (exact - unit / 10).quantize(unit, rounding=ROUND_CEILING)
    # 9.96 became 10.0: three digits, so once more with the larger unit
    return rounded if rounded.adjusted() == exact.adjusted() else rounded.quantize(unit.scaleb(1), rounding=ROUND_CEILING)


def format_value_u95(value: float, u95: float | None) -> tuple[str, str]:
    """Value and u95 as text: u95 with two significant digits (`round_u95`), the value to the same decimal place.

    Without a (finite) u95 the value is given three significant digits, and `UNKNOWN` stands for u95. Numbers beyond 10^7 or below
    10^-6 share a power of ten.
    """
    if not math.isfinite(value):
        return UNKNOWN, UNKNOWN
    exact = Decimal(repr(float(value)))
    if u95 is None or not math.isfinite(u95):
        return _text(_significant(exact, _DIGITS_WITHOUT_U95), exact), UNKNOWN
    if u95 == 0.0:
        return _text(_significant(exact, _DIGITS_WITH_U95_OF_ZERO).normalize(), exact), "0"
    rounded = round_u95(abs(u95))
    place = rounded.as_tuple().exponent
    assert isinstance(place, int)
    # the usual 28 digits would not do for 1e20 with a u95 of 1e-20
    shown = exact.quantize(Decimal(1).scaleb(place), rounding=ROUND_HALF_EVEN, context=Context(prec=700))
    larger = max(abs(shown), rounded)
    return _text(shown, larger), _text(rounded, larger)


def format_figure(figure: Figure, unit: str = "", plus_minus: str = "±") -> str:
    """One figure as text, such as "184.120 ± 0.020 Hz"; pass `plus_minus="+/-"` to a terminal that knows ASCII only."""
    value, u95 = format_value_u95(figure.value, figure.u95)
    return f"{value} {plus_minus} {u95} {unit}".rstrip()


def _significant(exact: Decimal, digits: int) -> Decimal:
    """`exact` rounded to that many significant digits."""
    if exact == 0:
        return Decimal(0)
    return exact.quantize(Decimal(1).scaleb(exact.adjusted() - digits + 1), rounding=ROUND_HALF_EVEN)


def _text(number: Decimal, scale: Decimal) -> str:
    """Plain digits where `scale` is of everyday size, else a mantissa and the power of ten of `scale`."""
    power = scale.adjusted() if scale != 0 else 0
    if -6 <= power < 7:
        plain = f"{number:f}"
        return plain[1:] if plain.startswith("-") and number == 0 else plain
    return f"{number.scaleb(-power):f}e{power:+03d}"
