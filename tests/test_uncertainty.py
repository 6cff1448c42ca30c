"""Uncertainty after the GUM (JCGM 100:2008): its own examples, the t table, and what is shown.

Data of the examples are recalled from the GUM; the results that it prints are reproduced by them. The inputs of H.2 are those of the
documentation that a national metrology institute gives of the same example.
"""

from __future__ import annotations

import math
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qmeter import uncertainty as un
from qmeter.errors import OutOfRangeError
from qmeter.uncertainty import Figure, Parts
from tests.printed import assert_prints_as

# ---- Student's t ----

TABLE_G2_95 = {
    1: "12.7062", 2: "4.3027", 3: "3.1824", 4: "2.7764", 5: "2.5706", 6: "2.4469", 7: "2.3646", 8: "2.3060", 9: "2.2622", 10: "2.2281",
    15: "2.1314", 19: "2.0930", 20: "2.0860", 30: "2.0423", 50: "2.0086", 100: "1.9840",
}  # fmt: skip


@pytest.mark.parametrize(("nu", "t"), TABLE_G2_95.items())
def test_t_table(nu: int, t: str) -> None:
    """t at 95 % is that of any table (GUM table G.2 has the same with two decimals)."""
    assert_prints_as(un.student_t(nu), t)


def test_t_of_the_normal_distribution_and_other_levels() -> None:
    """Infinite degrees of freedom give 1.959964 (normal table); 99 % at 16 gives 2.92 (GUM H.1.6, printed); nu may be fractional."""
    assert_prints_as(un.student_t(math.inf), "1.959964")
    assert_prints_as(un.student_t(math.inf, 0.99), "2.575829")
    assert_prints_as(un.student_t(16, 0.99), "2.92")
    assert un.student_t(3) < un.student_t(2.5) < un.student_t(2)
    assert_allclose(un.student_t(1e9), un.student_t(math.inf), rtol=1e-8, atol=0)


@pytest.mark.parametrize("nu", [0.0, 0.99, -1.0, math.nan])
def test_t_below_one_degree_of_freedom_is_refused(nu: float) -> None:
    """One reading has no scatter: the error says how many degrees of freedom there were and the way out."""
    with pytest.raises(OutOfRangeError, match="at least 1 is needed, so take one more reading"):
        un.student_t(nu)


@pytest.mark.parametrize("level", [0.0, 1.0, 95.0, math.nan])
def test_level_in_per_cent_is_refused(level: float) -> None:
    """A level of 95 instead of 0.95 is an error, not a large factor."""
    with pytest.raises(OutOfRangeError, match="between 0 and 1"):
        un.student_t(5, level)


# ---- type A and type B ----

TWENTY_TEMPERATURES = [
    96.90, 98.18, 98.25, 98.61, 99.03, 99.49, 99.56, 99.74, 99.89, 100.07,
    100.33, 100.42, 100.68, 100.95, 101.11, 101.20, 101.57, 101.84, 102.36, 102.72,
]  # fmt: skip


def test_gum_4_4_3() -> None:
    """Twenty temperatures: mean 100.145, s 1.489, u 0.333 degrees Celsius (GUM 4.4.3, printed)."""
    mean, u, nu = un.type_a(TWENTY_TEMPERATURES)
    assert_prints_as(mean, "100.145")
    assert_prints_as(u * math.sqrt(20), "1.489")
    assert_prints_as(u, "0.333")
    assert nu == 19


def test_five_values_of_q() -> None:
    """Q of five taps, worked by hand: sum of squared deviations 10.148, so s = sqrt(2.537), u = s/sqrt(5), u95 = 2.7764 u."""
    mean, u, nu = un.type_a(np.array([98.2, 101.5, 99.7, 102.3, 100.4]))
    assert_prints_as(mean, "100.42")
    assert_allclose(u, math.sqrt(10.148 / 4 / 5), rtol=1e-12, atol=0)
    assert_prints_as(u, "0.712320")
    assert nu == 4
    assert_prints_as(un.combine_parts(mean, {"scatter": u}, {"scatter": nu}).u95 or 0.0, "1.977718")


def test_scatter_of_readings_far_from_zero() -> None:
    """A spread of 1e-6 on 1e9 is not lost to rounding: readings that differ by one unit of 2^-20 have that spread exactly."""
    step = 2.0**-20
    _, u, _ = un.type_a([1e9, 1e9 + step])
    assert_allclose(u, step / 2, rtol=1e-12, atol=0)


@pytest.mark.parametrize("readings", [[], [1.0]])
def test_scatter_of_fewer_than_two_is_refused(readings: list[float]) -> None:
    """One reading says nothing about scatter, and the error says what to do."""
    with pytest.raises(OutOfRangeError, match=f"at least two readings and {len(readings)} was given; take more"):
        un.type_a(readings)


def test_scatter_with_nan_is_refused() -> None:
    """NaN must not travel into a mean."""
    with pytest.raises(OutOfRangeError, match="not a finite number"):
        un.type_a([1.0, math.nan])


def test_rectangular_and_resolution() -> None:
    """Half-width over sqrt 3 = 0.57735 (GUM 4.3.7), step over sqrt 12 = 0.29 (GUM F.2.2.1, printed)."""
    assert_prints_as(un.rectangular(1.0), "0.577350")
    assert_prints_as(un.resolution(1.0), "0.288675")
    assert un.rectangular(0.0) == 0.0
    for bad in (-1.0, math.nan, math.inf):
        with pytest.raises(OutOfRangeError, match="zero or positive, and finite"):
            un.rectangular(bad)


# ---- combination ----


def test_gum_g4() -> None:
    """Relative 0.25, 0.57, 0.82 % with 10, 5 and 15 readings: u_c 1.03 %, nu_eff 19.0 (18.9987, so 18 when truncated), U 2.2 % (GUM G.4.1).

    The GUM rounds 18.9987 to 19 before it takes t = 2.09; truncation, which it prescribes, gives t = 2.10. U prints as 2.2 both ways.
    """
    u, nu = [0.25, 0.57, 0.82], [9.0, 4.0, 14.0]
    combined = math.hypot(*u)
    assert_prints_as(combined, "1.0295")
    assert_prints_as(un.welch_satterthwaite(u, nu), "18.9987")
    assert_prints_as(un.student_t(19) * combined, "2.1547")
    names = ("fit", "model", "scatter")
    figure = un.combine_parts(100.0, dict(zip(names, u, strict=True)), dict(zip(names, nu, strict=True)))
    assert figure.nu == 18
    assert figure.k is not None
    assert_prints_as(figure.k, "2.10")
    assert figure.u95 is not None
    assert_prints_as(figure.u95, "2.2")


def test_gum_h1() -> None:
    """The end gauge: 25, 9.7, 2.9, 16.6 nm with 18, 25.6, 50, 2: u_c 32 nm, nu_eff 16.7, truncated 16, U99 = 93 nm (GUM H.1.6, printed)."""
    u, nu = [25.0, 9.7, 2.9, 16.6], [18.0, 25.6, 50.0, 2.0]
    combined = math.hypot(*u)
    assert_prints_as(combined, "32")
    assert_prints_as(combined, "31.67")
    effective = un.welch_satterthwaite(u, nu)
    assert_prints_as(effective, "16.76")  # the GUM prints 16.7, from rounded intermediate values
    assert un.truncated(effective) == 16
    assert_prints_as(un.student_t(16, 0.99) * 32.0, "93")


def test_one_part_keeps_its_degrees_of_freedom() -> None:
    """A budget of one part has that part's nu, untouched by rounding: no 4 becomes a 3 (nor a 1 a 0)."""
    for nu in range(1, 60):
        for u in (0.1, 0.3, 1e-9, 7e11, 1 / 3):
            figure = un.combine_parts(1.0, {"scatter": u, "fit": 0.0}, {"scatter": nu, "fit": math.inf})
            assert figure.nu == nu
            assert figure.u95 is not None
            assert_allclose(figure.u95, un.student_t(nu) * u, rtol=1e-12, atol=0)


def test_all_parts_infinitely_known() -> None:
    """Type B parts alone give an infinite nu and k = 1.96; the parts stay apart, by name."""
    parts = {"fit": 3.0, "clock": 4.0}
    figure = un.combine_parts(10.0, parts, dict.fromkeys(parts, math.inf))
    assert figure == Figure(10.0, un.NORMAL_95 * 5.0, un.NORMAL_95, math.inf, Parts(fit=3.0, clock=4.0))


def test_no_parts_and_zero_parts() -> None:
    """Nothing uncertain is u95 = 0, not a division by zero."""
    assert un.combine_parts(1.0, {}, {}).u95 == 0.0
    assert un.combine_parts(1.0, {"fit": 0.0}, {"fit": 3.0}).u95 == 0.0


@pytest.mark.parametrize("bad", [math.inf, math.nan])
def test_unknown_part_leaves_no_u95(bad: float) -> None:
    """A part that could not be computed makes u95 None: a number would be a claim."""
    assert un.combine_parts(1.0, {"fit": bad, "clock": 1.0}, {"fit": 3.0, "clock": math.inf}).u95 is None


def test_bad_parts_are_refused() -> None:
    """A negative u, a nu below one and a name outside the budget are errors."""
    with pytest.raises(OutOfRangeError, match=r"uncertainty of -0\.1 was given"):
        un.combine_parts(1.0, {"fit": -0.1}, {"fit": 3.0})
    with pytest.raises(OutOfRangeError, match=r"contribution of 0\.1 has 0 degrees of freedom"):
        un.combine_parts(1.0, {"fit": 0.1}, {"fit": 0.0})
    with pytest.raises(TypeError, match="luck"):
        un.combine_parts(1.0, {"luck": 0.1}, {"luck": 3.0})


@given(st.lists(st.tuples(st.floats(1e-6, 1e6), st.integers(1, 1000)), min_size=1, max_size=5))
def test_effective_degrees_of_freedom_lie_between(contributions: list[tuple[float, int]]) -> None:
    """nu_eff lies between the least nu and the sum of all (GUM G.4.1)."""
    u, nu = zip(*contributions, strict=True)
    effective = un.welch_satterthwaite(u, nu)
    assert min(nu) * (1 - 1e-9) <= effective <= sum(nu) * (1 + 1e-9)


# ---- propagation with correlated inputs: GUM H.2 ----

VOLTS = [5.007, 4.994, 5.005, 4.990, 4.999]
AMPERES = [19.663e-3, 19.639e-3, 19.640e-3, 19.685e-3, 19.678e-3]
RADIANS = [1.0456, 1.0438, 1.0468, 1.0428, 1.0433]


def h2_sensitivities(v: float, i: float, phi: float) -> np.ndarray:
    """Partial derivatives of R = V/I cos phi, X = V/I sin phi, Z = V/I to V, I, phi (GUM H.2.3)."""
    z, c, s = v / i, math.cos(phi), math.sin(phi)
    return np.array([[c / i, -z * c / i, -z * s], [s / i, -z * s / i, z * c], [1 / i, -z / i, 0.0]])


def test_gum_h2() -> None:
    """Resistance, reactance and impedance from readings taken together: values, u and all correlations (GUM tables H.2 to H.4)."""
    readings = np.array([VOLTS, AMPERES, RADIANS]).T
    v, i, phi = readings.mean(axis=0)
    covariance = un.covariance_of_means(readings)
    u_in = np.sqrt(np.diag(covariance))
    for found, printed in zip(u_in * [1, 1e6, 1], ("0.0032", "9.5", "0.00075"), strict=True):
        assert_prints_as(found, printed)
    correlation = covariance / np.outer(u_in, u_in)
    for found, printed in zip((correlation[0, 1], correlation[0, 2], correlation[1, 2]), ("-0.36", "0.86", "-0.65"), strict=True):
        assert_prints_as(found, printed)

    out = un.propagate(h2_sensitivities(v, i, phi), covariance)
    u = np.sqrt(np.diag(out))
    assert_prints_as(v / i * math.cos(phi), "127.73217")
    assert_prints_as(v / i * math.sin(phi), "219.84651")
    assert_prints_as(v / i, "254.25970")
    for found, printed in zip(u, ("0.07107", "0.29558", "0.23634"), strict=True):
        assert_prints_as(found, printed)
    r = out / np.outer(u, u)
    for found, printed in zip((r[0, 1], r[0, 2], r[1, 2]), ("-0.5884", "-0.4853", "0.9925"), strict=True):
        assert_prints_as(found, printed)


def test_gum_h2_without_correlations_is_wrong() -> None:
    """Left out, the correlations would give 0.1945, 0.2009, 0.2041: the propagation really uses them."""
    readings = np.array([VOLTS, AMPERES, RADIANS]).T
    variances = np.diag(np.diag(un.covariance_of_means(readings)))
    u = np.sqrt(np.diag(un.propagate(h2_sensitivities(*readings.mean(axis=0)), variances)))
    for found, printed in zip(u, ("0.1945", "0.2009", "0.2041"), strict=True):
        assert_prints_as(found, printed)


def test_covariance_from_correlation() -> None:
    """Covariance = u_i u_j r_ij, and it leads from the printed inputs of H.2 to its u(R) of 0.071 (GUM table H.3)."""
    u = [0.0032, 9.5e-6, 0.00075]
    covariance = un.covariance_from_correlation(u, np.array([[1, -0.36, 0.86], [-0.36, 1, -0.65], [0.86, -0.65, 1]]))
    assert_allclose(covariance[0, 2], 0.0032 * 0.00075 * 0.86, rtol=1e-12, atol=0)
    out = un.propagate(h2_sensitivities(4.9990, 19.6610e-3, 1.04446), covariance)
    # the inputs have two digits, and the terms cancel to a third: so two digits at best
    assert_allclose(math.sqrt(out[0, 0]), 0.071, rtol=0.03, atol=0)


def test_covariance_of_one_reading_is_refused() -> None:
    """One set of readings has no covariance."""
    with pytest.raises(OutOfRangeError, match="at least two readings and 1 was given"):
        un.covariance_of_means(np.array([[1.0, 2.0]]))


# ---- a straight line: GUM H.3 ----

THERMOMETER = [21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511]
CORRECTION = [-0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160]


def test_gum_h3() -> None:
    """A thermometer: y1 -0.1712 (0.0029), y2 0.00218 (0.00067), r -0.930, s 0.0035, b(30) -0.1494 (0.0041), nu 9 (printed)."""
    line = un.straight_line(THERMOMETER, CORRECTION, origin=20.0)
    assert_prints_as(line.intercept, "-0.171204")
    assert_prints_as(line.u_intercept, "0.002878")
    assert_prints_as(line.slope, "0.00218270")
    assert_prints_as(line.u_slope, "0.00066794")
    assert_prints_as(line.correlation, "-0.93043")
    assert_prints_as(line.residual_sd, "0.0034976")
    value, u = line.at(30.0)
    assert_prints_as(value, "-0.149377")
    assert_prints_as(u, "0.004139")
    assert line.nu == 9


def test_line_does_not_depend_on_its_origin() -> None:
    """The origin is bookkeeping: the line and its uncertainty at 30 degrees stay (GUM H.3.5)."""
    expected = un.straight_line(THERMOMETER, CORRECTION, origin=20.0).at(30.0)
    for origin in (0.0, 24.0085, 100.0):
        assert_allclose(un.straight_line(THERMOMETER, CORRECTION, origin=origin).at(30.0), expected, rtol=1e-9, atol=0)


def test_line_through_too_little_is_refused() -> None:
    """Two points leave no residuals, and equal x no slope."""
    with pytest.raises(OutOfRangeError, match="at least 3 pairs; 2 x and 2 y"):
        un.straight_line([1.0, 2.0], [1.0, 2.0])
    with pytest.raises(OutOfRangeError, match="not all alike"):
        un.straight_line([1.0, 1.0, 1.0], [1.0, 2.0, 3.0])


# ---- what is shown ----


@pytest.mark.parametrize(("u95", "shown"), [(10.47, "11"), (28.05, "28")])
def test_rounding_of_gum_7_2_6(u95: float, shown: str) -> None:
    """10.47 may be rounded up to 11, 28.05 down to 28 (GUM 7.2.6, printed)."""
    assert un.format_value_u95(100.0, u95)[1] == shown


@pytest.mark.parametrize(
    ("value", "u95", "shown"),
    [
        (184.1234, 0.02, ("184.123", "0.020")),
        (184.1234, 0.0204, ("184.123", "0.021")),
        (184.1234, 0.02009, ("184.123", "0.020")),
        (100.0, 9.96, ("100", "10")),
        (3.0, 99.95, ("0", "100")),
        (61.0, 120.0, ("60", "120")),
        (61.0, 5000.0, ("100", "5000")),
        (12345.6, 340.0, ("12350", "340")),
        (0.01, 0.0003, ("0.01000", "0.00030")),
        (-2.347, 0.11, ("-2.35", "0.11")),
        (-0.001, 0.5, ("0.00", "0.50")),
        (1.188e10, 3.3e8, ("1.188e+10", "0.033e+10")),
        (2e-9, 1e-11, ("2.000e-09", "0.010e-09")),
        (184.1234, None, ("184", "?")),
        (0.00512345, None, ("0.00512", "?")),
        (12345.0, None, ("12300", "?")),
        (0.0, None, ("0", "?")),
        (184.1234, math.inf, ("184", "?")),
        (184.1234, math.nan, ("184", "?")),
        (math.nan, 1.0, ("?", "?")),
        (440.0, 0.0, ("440", "0")),
        (439.9945, 0.0, ("439.9945", "0")),
        (0.0, 0.0, ("0", "0")),
    ],
)
def test_digits_follow_the_uncertainty(value: float, u95: float | None, shown: tuple[str, str]) -> None:
    """u95 has two significant digits and the value ends at the same place; without u95 three digits are all that is claimed."""
    assert un.format_value_u95(value, u95) == shown


def test_digits_beyond_any_float() -> None:
    """A u95 far below the resolution of the value is absurd, but no reason to fail."""
    assert un.format_value_u95(1e20, 1e-20)[1] == "0.00000000000000000000000000000000000000010e+20"


@given(value=st.floats(-1e12, 1e12), u95=st.floats(1e-9, 1e12))
def test_shown_figures_hold(value: float, u95: float) -> None:
    """Two digits of u95, never less than 99 % nor more than 110 % of it, and a value within half a unit of the last place."""
    shown_value, shown_u95 = map(Decimal, un.format_value_u95(value, u95))
    assert Decimal("0.99") <= shown_u95 / Decimal(u95) <= Decimal("1.1")
    digits = shown_u95.normalize().as_tuple().digits
    assert len(digits) <= 2
    unit = Decimal(1).scaleb(shown_u95.adjusted() - 1)
    assert abs(shown_value - Decimal(repr(value))) <= unit / 2
    assert shown_value % unit == 0


def test_figure_as_text() -> None:
    """The unit follows, and a terminal without the sign gets ASCII."""
    figure = Figure(184.1234, 0.02)
    assert un.format_figure(figure, "Hz") == "184.123 ± 0.020 Hz"
    assert un.format_figure(figure, plus_minus="+/-") == "184.123 +/- 0.020"
    assert un.format_figure(Figure(61.2, None)) == "61.2 ± ?"
