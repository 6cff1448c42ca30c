"""The fit to bins by itself: its covariance against closed forms of the Cramer-Rao bound, its scatter against its covariance.

Closed forms, real data in white noise of rms s per sample, amplitude and phase unknown, record long compared with 1/a:
u(a) = u(w) = 4 a^(3/2) s/(A sqrt(fs)), u(f) = u(a)/2pi, u(Q)/Q = u(a)/a (literature on damped sinusoids; from memory: Yao and Pandit,
IEEE Trans. Signal Processing 1995). Amplitude and pole correlate by 1/sqrt 2. The figures printed in the tests were computed outside
this project, by numeric Fisher matrices of its own. What is our own derivation says so where it stands.
"""

from __future__ import annotations

import math
from functools import cache

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

from qmeter.estimate.poles import BinRows, RowFit, bin_response, fit_rows
from tests.printed import assert_prints_as

Complex = npt.NDArray[np.complex128]
Array = npt.NDArray[np.float64]

RATE_HZ = 48_000.0
NOISE = 0.01
M1_HZ, M1_DECAY = 439.9944999656, 13.82300768
"""f0 = 440 Hz, Q = 100: damped frequency and decay rate"""
SLOW = 2e-4
"""decay per sample at which the sampled forms are the continuous ones within 1e-3, and a quarter of the rate keeps the image away"""
QUARTER = math.pi / 2


def pole(frequency_hz: float, decay_per_s: float, rate_hz: float = RATE_HZ) -> complex:
    """Log-pole per sample."""
    return complex(-decay_per_s, 2 * math.pi * frequency_hz) / rate_hz


def ring(poles: npt.ArrayLike, amplitudes: npt.ArrayLike, length: int) -> Array:
    """Sum of Re(c exp(s n)), written out."""
    n = np.arange(length)
    c, s = np.atleast_1d(amplitudes), np.atleast_1d(poles)
    return np.asarray(sum((ck * np.exp(sk * n)).real for ck, sk in zip(c, s, strict=True)))


def rows_of(samples: Array, first: int, bins: int, noise: float) -> BinRows:
    """The bins first .. first + bins - 1 of one ring (N,) or many (R, N) in white noise of this rms."""
    many = np.atleast_2d(samples)
    r, n = many.shape
    data = np.fft.rfft(many)[:, first : first + bins]
    return BinRows(np.ascontiguousarray(data), np.full(data.shape, 1.0 / (n * noise**2)), np.full(r, first), np.full(r, n))


def told(poles: list[complex], amplitudes: list[complex], time_constants: float = 10.0, band: tuple[int, int] | None = None) -> RowFit:
    """The fit of a noise-free ring, with the covariance that it states for noise of `NOISE`, from all bins (or first, count)."""
    n = int(time_constants / min(-s.real for s in poles)) // 2 * 2
    first, bins = band or (1, n // 2 - 1)
    return fit_rows(rows_of(ring(poles, amplitudes, n), first, bins, NOISE), np.array([poles]))


@cache
def long_u(decay: float) -> float:
    """Closed form of u(a) = u(w) per sample for A = 1 and a long record, in its sampled form: s sqrt(2 (1 - r)^3/r), r = exp(-2a)."""
    r = math.exp(-2 * decay)
    return NOISE * math.sqrt(2 * (1 - r) ** 3 / r)


def u_of(fit: RowFit) -> Array:
    """Standard uncertainties (a_1, w_1, a_2, ...) per sample of the first row."""
    return np.sqrt(np.diag(fit.covariance[0]))


# ---- covariance ----


def test_one_mode_states_the_bound() -> None:
    """440 Hz, Q 100, A/s = 100 at 48 kHz: u(a) 0.0093817 1/s, u(f) 1.4931 mHz, u(Q) 0.067871."""
    # the image at negative frequency adds a part of order 1/2Q that changes sign with a quarter turn of the phase; what the mean of
    # the two still holds is of the order 1/Q^2, which is the tolerance
    s = pole(M1_HZ, M1_DECAY)
    turns = [told([s], [c]).covariance[0] for c in (1.0, 1j)]
    u_a, u_w = np.sqrt(np.diag(0.5 * (turns[0] + turns[1]))) * RATE_HZ
    assert_allclose(u_a, 0.0093817, rtol=1e-4, atol=0)
    assert_allclose(u_w / (2 * math.pi), 1.4931e-3, rtol=1e-4, atol=0)
    u_q = 100.0 * math.hypot(u_a / M1_DECAY, u_w / (2 * math.pi * M1_HZ))
    assert_allclose(u_q, 0.067871, rtol=1e-4, atol=0)


@pytest.mark.parametrize("phase", [0.0, 0.7, 2.0, -1.0])
def test_one_mode_at_any_phase(phase: float) -> None:
    """The phase matters only by the image, by less than 1/Q; damping and frequency are independent to the same order."""
    fit = told([pole(M1_HZ, M1_DECAY)], [complex(np.exp(1j * phase))])
    assert_allclose(u_of(fit), long_u(M1_DECAY / RATE_HZ), rtol=1e-2, atol=0)
    assert abs(fit.covariance[0, 0, 1]) < 1e-2 * fit.covariance[0, 0, 0]


TRUNCATION = [
    (0.25, 11.114),
    (0.5, 4.4657),
    (1.0, 2.0472),
    (1.5, 1.4454),
    (2.0, 1.2099),
    (2.5, 1.1019),
    (3.0, 1.0494),
    (4.0, 1.0111),
    (5.0, 1.0023),
]


@pytest.mark.parametrize(("time_constants", "factor"), TRUNCATION)
def test_short_record(time_constants: float, factor: float) -> None:
    """A record cut after so many time constants: u grows by sqrt([E0/(E0 E2 - E1^2)]/(8 a^3)), E_k = integral of t^k exp(-2at)."""
    fit = told([complex(-SLOW, QUARTER)], [1.0], time_constants)
    assert_allclose(u_of(fit) / long_u(SLOW), factor, rtol=1e-3, atol=0)


def test_later_start() -> None:
    """A fit that starts t0 late multiplies u by exp(a t0): half a time constant, 1.6487."""
    fit = told([complex(-SLOW, QUARTER)], [math.exp(-0.5)])
    assert_allclose(u_of(fit) / long_u(SLOW), math.exp(0.5), rtol=1e-3, atol=0)


@pytest.mark.parametrize("amplitudes", [(1.0, 1.0), (1.0, 0.1j), (-0.3, 1.0)])
@pytest.mark.parametrize(("widths", "factor"), [(0.5, 5.0), (1.0, 2.0), (2.0, 1.25), (3.0, 1.111), (5.0, 1.04), (10.0, 1.01)])
def test_close_pair(widths: float, factor: float, amplitudes: tuple[complex, complex]) -> None:
    """Two modes of equal damping S half-power widths apart: u grows by 1 + 1/S^2 whatever their amplitudes.

    Our own result: what is left of a double pole after projection onto the span of the other double pole (a Blaschke product).
    """
    apart = widths * 2 * SLOW  # half-power width: a/pi Hz, 2a rad per sample
    fit = told([complex(-SLOW, QUARTER), complex(-SLOW, QUARTER + apart)], list(amplitudes))
    grown = u_of(fit).reshape(2, 2) * np.abs(amplitudes)[:, None] / long_u(SLOW)
    assert_allclose(grown, 1 + 1 / widths**2, rtol=2e-3, atol=0)
    assert_allclose(1 + 1 / widths**2, factor, rtol=5e-4, atol=0)


def test_pair_of_unequal_damping() -> None:
    """440 Hz with Q 100 beside 445 Hz with Q 80: both u grow by 1.965946; one frequency with a and 2a: by 9.000.

    Our own result, product of |(s_i + s_k*)/(s_i - s_k)|^2, or of |(1 - z_i z_k*)/(z_i - z_k)|^2 for samples.
    """
    # a rate of 1760 Hz puts 440 Hz as far as can be from its image and from half the rate
    poles = [pole(440.0, 440 * math.pi / 100, 1760.0), pole(445.0, 445 * math.pi / 80, 1760.0)]
    fit = told(poles, [1.0, 1.0])
    alone = [long_u(-s.real) for s in poles]
    z = np.exp(np.array(poles))
    sampled = abs((1 - z[0] * z[1].conj()) / (z[0] - z[1])) ** 2
    assert_allclose(sampled, 1.965946, rtol=1e-3, atol=0)
    assert_allclose(u_of(fit).reshape(2, 2) / np.array(alone)[:, None], 1.965946, rtol=1e-2, atol=0)
    same = told([complex(-SLOW, QUARTER), complex(-2 * SLOW, QUARTER)], [1.0, 0.5j])
    grown = u_of(same).reshape(2, 2) * np.array([1.0, 0.5])[:, None] / np.array([long_u(SLOW), long_u(2 * SLOW)])[:, None]
    assert_allclose(grown, 9.0, rtol=2e-3, atol=0)


def test_three_modes() -> None:
    """Three modes of unequal damping: u of each grows by the product over the other two (our own result)."""
    s = np.array([complex(-SLOW, QUARTER), complex(-1.5 * SLOW, QUARTER + 3 * SLOW), complex(-0.8 * SLOW, QUARTER - 5 * SLOW)])
    fit = told(list(s), [1.0, 1.0, 1.0])
    for i in range(3):
        others = [k for k in range(3) if k != i]
        factor = math.prod(abs((s[i] + s[k].conjugate()) / (s[i] - s[k])) ** 2 for k in others)
        assert_allclose(u_of(fit)[2 * i : 2 * i + 2] / long_u(-s[i].real), factor, rtol=2e-3, atol=0)


@pytest.mark.parametrize("widths", [1.0, 2.0, 4.0, 8.0])
def test_a_narrow_slice_costs_what_it_must(widths: float) -> None:
    """Bins of W half-power widths either side only: u grows by the closed form, 1.021 at W = 8.

    Our own result: with X = 2W, what the band holds of the amplitude's column is G = 2 atan X and of the pole's H = atan X + X/(1 + X^2),
    both correlate by H, so u^2 grows by (pi/4)/(H - H^2/G).
    """
    # a long record makes the sum over bins the integral: 24 time constants, 7.6 bins a width
    n = int(24 / SLOW)
    half = round(widths * 2 * SLOW * n / (2 * math.pi))
    centre = n // 4
    s = complex(-SLOW, 2 * math.pi * centre / n)
    fit = told([s], [1.0], 24.0, (centre - half, 2 * half + 1))
    x = (half + 0.5) * 2 * math.pi / n / SLOW
    g, h = 2 * math.atan(x), math.atan(x) + x / (1 + x * x)
    assert_allclose(u_of(fit) / long_u(SLOW), math.sqrt(math.pi / 4 / (h - h * h / g)), rtol=2e-3, atol=0)


# ---- scatter ----

COUNT = 2000
CASES: dict[str, tuple[list[complex], list[complex], int, int, int]] = {
    "one": ([complex(-0.01, 0.9)], [1.0], 900, 100, 60),
    "image": ([complex(-0.05, 0.3)], [1.0], 256, 1, 60),  # Q 3
    "cut": ([complex(-0.01, 0.9)], [1.0], 80, 2, 20),  # 0.8 time constants
    "pair": ([complex(-0.01, 0.9), complex(-0.012, 0.92)], [1.0, 0.6j], 1000, 110, 70),  # one width
}


@cache
def scattered(case: str) -> tuple[RowFit, Complex, Complex, int]:
    """Fits of 2000 noisy rings at A/s = 100, from starts a tenth of a half-power width off; true poles, true amplitudes, bins."""
    poles, amplitudes, n, first, bins = CASES[case]
    rng = np.random.default_rng(20)
    noisy = ring(poles, amplitudes, n) + NOISE * rng.standard_normal((COUNT, n))
    s, c = np.array(poles), np.array(amplitudes, complex)
    start = s.real * (1 + 0.1 * rng.standard_normal((COUNT, len(s)))) + 1j * (s.imag - 0.2 * s.real * rng.standard_normal((COUNT, len(s))))
    return fit_rows(rows_of(noisy, first, bins, NOISE), start, steps=20), s, c, bins


@pytest.mark.timeout(60)
@pytest.mark.parametrize("case", CASES)
def test_scatter_is_what_the_covariance_says(case: str) -> None:
    """2000 rings in noise: normalised errors of a and w have an rms of 1 and a mean of 0, jointly too; each of the limits is 4 sd."""
    fit, s, _, _ = scattered(case)
    error = np.empty((COUNT, 2 * len(s)))
    error[:, 0::2], error[:, 1::2] = -(fit.pole - s).real, (fit.pole - s).imag
    normal = error / np.sqrt(np.diagonal(fit.covariance, axis1=1, axis2=2))
    assert_allclose(np.sqrt(np.mean(normal**2, axis=0)), 1.0, rtol=4 / math.sqrt(2 * COUNT), atol=0)
    assert np.all(np.abs(np.mean(normal, axis=0)) < 4 / math.sqrt(COUNT))
    joint = np.einsum("ri,rij,rj->r", error, np.linalg.inv(fit.covariance), error)
    assert_allclose(np.mean(joint), 2 * len(s), rtol=4 * math.sqrt(2 / (2 * len(s) * COUNT)), atol=0)


@pytest.mark.timeout(60)
@pytest.mark.parametrize("case", CASES)
def test_chi_square_counts_the_freedom(case: str) -> None:
    """chi2 of noise alone has the mean K - 2M (K complex bins, two complex parameters a mode); the limit is 4 sd."""
    fit, s, _, bins = scattered(case)
    freedom = bins - 2 * len(s)
    # 2 chi2 has 2 (K - 2M) degrees of freedom
    assert_allclose(np.mean(fit.chi2), freedom, rtol=4 / math.sqrt(freedom * COUNT), atol=0)


@pytest.mark.timeout(60)
def test_amplitude_and_pole_correlate() -> None:
    """ln A with a, and phase with frequency, correlate by 1/sqrt 2 in magnitude on a long record; the limit is 4 sd of 2000 draws."""
    fit, s, c, _ = scattered("one")
    lost = np.log(fit.amplitude[:, 0] / c[0])
    moved = fit.pole[:, 0] - s[0]
    limit = 4 * 0.5 / math.sqrt(COUNT)  # sd of a correlation r: (1 - r^2)/sqrt(n)
    assert abs(np.corrcoef(lost.real, -moved.real)[0, 1] - math.sqrt(0.5)) < limit
    assert abs(np.corrcoef(lost.imag, moved.imag)[0, 1] + math.sqrt(0.5)) < limit


# ---- exactness ----


@pytest.mark.parametrize("hann", [False, True])
@pytest.mark.parametrize("length", [97, 256])
@pytest.mark.parametrize("s", [complex(-0.05, 0.3), complex(-1e-5, 0.01), complex(-0.3, 2.9)])
def test_response_is_the_dft(s: complex, length: int, hann: bool) -> None:
    """Equation (1) is the DFT of the ring, cut and image included, plain and Hann-weighted; (2) is its derivative."""
    n = np.arange(length)
    window = 0.5 - 0.5 * np.cos(2 * math.pi * n / length) if hann else np.ones(length)
    first, bins = 3, 40
    d, g, db, gb = bin_response(np.array([[s]]), np.array([first]), np.array([length]), bins, hann)
    for wave, by, slope in ((s, d, g), (s.conjugate(), db, gb)):
        z = np.exp(wave * n)
        dft, derivative = np.fft.fft(window * z)[first : first + bins], np.fft.fft(window * n * z)[first : first + bins]
        assert np.max(np.abs(by[0, 0] - dft)) < 1e-10 * np.max(np.abs(dft))
        assert np.max(np.abs(slope[0, 0] - derivative)) < 1e-10 * np.max(np.abs(derivative))


@pytest.mark.parametrize("time_constants", [0.5, 1.0, 3.0, 10.0])
@pytest.mark.parametrize("q", [0.8, 1.5, 3.0, 12.0, 300.0])
def test_noise_free_is_exact(q: float, time_constants: float) -> None:
    """Without noise the pole comes back to 1e-9 of its size at any Q and any length: nothing is approximated, image and cut included."""
    w = 0.4
    a = w / math.sqrt(4 * q * q - 1)
    n = max(int(time_constants / a), 24)
    samples = ring([complex(-a, w)], [0.5 * np.exp(1.1j)], n)
    top = n // 2 - 1
    low = int(np.clip(w * n / (2 * math.pi) - 60, 1, top - 8))
    bins = min(120, top - low)
    rows = rows_of(samples, low, bins, 1e-12)
    fit = fit_rows(rows, np.array([[complex(-1.1 * a, w + 0.2 * a)]]), steps=40)
    assert_allclose(-fit.pole[0, 0].real, a, rtol=1e-9, atol=0)
    assert_allclose(fit.pole[0, 0].imag, w, rtol=1e-9, atol=0)
    assert_allclose(fit.amplitude[0, 0], 0.5 * np.exp(1.1j), rtol=1e-8, atol=0)


def test_noise_free_pair_is_exact() -> None:
    """Two modes of Q 5 half a width apart, cut after two time constants: both poles come back to 1e-6 of the decay rate."""
    a = 0.02
    poles = np.array([complex(-a, 0.2), complex(-1.3 * a, 0.2 + a)])
    rows = rows_of(ring(poles, [1.0, 0.7j], 100), 1, 40, 1e-12)
    fit = fit_rows(rows, (poles + np.array([complex(-0.05 * a, -0.1 * a), complex(0.1 * a, 0.1 * a)]))[None, :], steps=60)
    assert_allclose(np.abs(fit.pole[0] - poles), 0.0, rtol=0, atol=1e-6 * a)


def test_influence_is_the_derivative() -> None:
    """A small change of the data moves the pole by Re(sum influence* change), as `influence` promises."""
    s = complex(-0.01, 0.9)
    rng = np.random.default_rng(5)
    samples = ring([s], [1.0], 900)
    rows = rows_of(samples, 100, 60, 1e-12)
    before = fit_rows(rows, np.array([[s]]), steps=20)
    change = 1e-4 * (rng.standard_normal(60) + 1j * rng.standard_normal(60))
    after = fit_rows(BinRows(rows.data + change, rows.weight, rows.first_bin, rows.length), np.array([[s]]), steps=20)
    said = (before.influence[0].conj() @ change).real
    moved = after.pole[0, 0] - before.pole[0, 0]
    assert_allclose([-moved.real, moved.imag], said, rtol=1e-4, atol=0)


def test_printed_inflations() -> None:
    """The closed form 1 + 1/S^2 prints as the table does."""
    for widths, printed in (
        (0.1, "101.0"),
        (0.2, "26.00"),
        (0.5, "5.000"),
        (1, "2.000"),
        (2, "1.250"),
        (3, "1.111"),
        (5, "1.040"),
        (10, "1.010"),
    ):
        assert_prints_as(1 + 1 / widths**2, printed)
