"""A line whose loss and frequency follow its own amplitude, and its fit to the bins of a plain DFT.

With e = (|x| / |x at the start|)^p the decay rate is a0 (1 + k e) and the frequency w0 + g e. Then e' = -p a0 (1 + k e) e, and by
separation of variables

    E = exp(-p a0 t),   e = E / (1 + k (1 - E)),   integral of e from 0 to t = L / (p a0),   L = ln(1 + k (1 - E)) / k       (1)
    ln z(t) = (-a0 + i w0) t + (L / p) (-k + i g / a0)                                                                      (2)

z is the line over its value at the start. p = 1 is a loss or frequency linear in the amplitude (friction), p = 2 one linear in
its square (stretching, Duffing). The bins hold no filter's transient: the model goes through the same DFT as the data.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import scipy.fft

from qmeter.dsp.band import fade
from qmeter.estimate.poles import BinRows, ComplexArray, FloatArray, bin_response, fit_rows

_OVERSAMPLING = 4
"""grid points of the model per bin: the end corrections below then leave 1e-6 of the peak"""
_K_LEAST, _K_MOST = -0.9, 8.0
_TRANSIENT = 2
"""envelope samples left out at the start of a first guess: the tapered slice rings for about as long"""
_CLEAR_OF_NOISE = 10.0
"""power over noise below which an envelope sample has no say in a first guess"""


@dataclass(frozen=True, slots=True)
class Law:
    """Equations (1) and (2), in samples: omega (rad), decay (nepers) per sample in the small-amplitude limit, k, g / a0, and p."""

    omega: float
    decay: float
    k: float
    glide: float
    power: int

    @property
    def vector(self) -> FloatArray:
        """(omega, ln decay, k, glide): what is fitted."""
        return np.array([self.omega, np.log(self.decay), self.k, self.glide])

    @staticmethod
    def of(vector: FloatArray, power: int) -> Law:
        return Law(float(vector[0]), float(np.exp(vector[1])), float(vector[2]), float(vector[3]), power)

    def log_line(self, t: FloatArray) -> ComplexArray:
        """ln z at t >= 0 samples after the start."""
        return _log_line(self.vector[:, None], self.power, t)

    def rate(self, t: FloatArray) -> ComplexArray:
        """d ln z / dt: minus the decay rate, plus i times the frequency, per sample."""
        return _rate(self.vector[:, None], self.power, t)


def _log_line(theta: FloatArray, power: int, t: FloatArray) -> ComplexArray:
    omega, log_decay, k, glide = theta
    decay = np.exp(log_decay)
    part = _safe_over(np.log1p(k * -np.expm1(-power * decay * t)), k, -np.expm1(-power * decay * t))
    return np.asarray((-decay + 1j * omega) * t + part / power * (-k + 1j * glide))


def _safe_over(log: FloatArray, k: FloatArray, limit: FloatArray) -> FloatArray:
    """L of equation (1), and its limit 1 - E where k = 0."""
    small = np.abs(k) < 1e-9
    return np.asarray(np.where(small, limit, log / np.where(small, 1.0, k)))


def _rate(theta: FloatArray, power: int, t: FloatArray) -> ComplexArray:
    omega, log_decay, k, glide = theta
    decay = np.exp(log_decay)
    left = np.exp(-power * decay * t)
    e = left / (1.0 + k * (1.0 - left))
    return np.asarray(-decay * (1.0 + k * e) + 1j * (omega + decay * glide * e))


def line_bins(theta: FloatArray, power: int, first_bin: int, bins: int, length: int) -> tuple[ComplexArray, ComplexArray]:
    """DFT bins of z and of its conjugate, for V parameter vectors theta (V, 4): two arrays (V, K).

    The sum over `length` samples is had from a coarser grid of step h by Euler and Maclaurin's formula at both ends (Abramowitz & Stegun
    23.1.30, with both sums set against the same integral). The conjugate lies far from its own line, where only the ends of the
    stretch speak: g(0) / (1 - u) - g(N) / (1 - u), u = exp(g'/g), the sum of an exponential that has the line's rate at that end.
    """
    points = min(scipy.fft.next_fast_len(max(_OVERSAMPLING * bins, 128)), length)
    h = length / points
    t = np.linspace(0.0, float(length), points + 1)
    parameters = np.ascontiguousarray(theta.T)[:, :, None]
    log_z = _log_line(parameters, power, t)
    ends = np.array([0.0, float(length)])
    rates = _rate(parameters, power, ends)
    at_end = np.exp(log_z[:, -1])
    centre = first_bin + bins // 2
    log_z -= (2j * np.pi * centre / length) * t
    coarse = scipy.fft.fft(np.exp(log_z[:, :-1]), axis=1)
    k = np.arange(first_bin, first_bin + bins)
    total = h * coarse[:, (k - centre) % points]
    turn = 2j * np.pi * k / length
    values = np.stack([np.ones(len(theta), complex), at_end], axis=1)
    for value, rate, sign in zip(values.T, rates.T, (1.0, -1.0), strict=True):
        slope = rate[:, None] - turn
        total += sign * value[:, None] * (-(h - 1) / 2 + (h**2 - 1) / 12 * slope - (h**4 - 1) / 720 * slope**3)
    mirror = np.zeros_like(total)
    for value, rate, sign in zip(values.T, rates.T, (1.0, -1.0), strict=True):
        mirror += sign * value.conj()[:, None] / (1.0 - np.exp(rate.conj()[:, None] - turn))
    return total, mirror


@dataclass(frozen=True, slots=True)
class LineFit:
    """A drifting line fitted to one row of bins.

    amplitude: at the start of the row. covariance: (4, 4) of (omega, ln decay, k, glide), for the weights given. chi2: sum of weight
    |residual|^2. residual, model: (K,).
    """

    law: Law
    amplitude: complex
    covariance: FloatArray
    chi2: float
    residual: ComplexArray
    model: ComplexArray


class _Point:
    """One evaluation: amplitude and whitened residual (real, 2K); the Jacobian only when a step is to be made from here."""

    def __init__(self, row: BinRows, theta: FloatArray, power: int, root: FloatArray) -> None:
        self._row, self._power, self._root, self.theta = row, power, root, theta
        own, mirror = self._bins(theta[None])
        columns = _real(0.5 * root * np.stack([own[0] + mirror[0], 1j * (own[0] - mirror[0])]))
        white = _real(root * row.data[0])
        x = np.linalg.solve(columns @ columns.T, columns @ white)
        self.columns, self.amplitude = columns, complex(x[0], x[1])
        self.left = white - x @ columns
        self.model = self._whole(own, mirror)[0]
        self.chi2 = float(self.left @ self.left)

    def _bins(self, theta: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        row = self._row
        return line_bins(theta, self._power, int(row.first_bin[0]), row.data.shape[1], int(row.length[0]))

    def _whole(self, own: ComplexArray, mirror: ComplexArray) -> ComplexArray:
        return np.asarray(0.5 * (self.amplitude * own + self.amplitude.conjugate() * mirror))

    def jacobian(self) -> FloatArray:
        """d(model) / d(theta), whitened, with the amplitude projected out: (2K, 4), by forward differences."""
        steps = 1e-4 * np.array([np.exp(self.theta[1]), 1.0, 1.0, max(1.0, abs(self.theta[3]))])
        moved = self._whole(*self._bins(self.theta + np.diag(steps)))
        slope = _real(self._root * (moved - self.model) / steps[:, None]).T
        basis = np.linalg.qr(self.columns.T)[0]
        return np.asarray(slope - basis @ (basis.T @ slope))


def _real(x: ComplexArray) -> FloatArray:
    return np.concatenate([x.real, x.imag], axis=-1)


def fit_line(row: BinRows, start: Law, *, steps: int = 25, hopeless: float = np.inf) -> LineFit:
    """Levenberg-Marquardt from `start` on one row of plain bins; the amplitude is solved for at each step.

    A fit whose chi2 is above `hopeless` after six steps is left there.
    """
    root = np.sqrt(row.weight[0])
    power = start.power
    point = _Point(row, start.vector, power, root)
    normal, push, scale = _normal(point)
    mu = 1e-3
    for turn in range(steps):
        if turn == 6 and point.chi2 > hopeless:
            break
        damped = normal * scale[:, None] * scale + mu * np.eye(4)
        step = scale * np.linalg.solve(damped, scale * push)
        trial = point.theta + np.clip(step, [-np.inf, -0.7, -1.0, -np.inf], [np.inf, 0.7, 1.0, np.inf])
        trial[2] = np.clip(trial[2], _K_LEAST, _K_MOST)
        new = _Point(row, trial, power, root)
        if not new.chi2 < point.chi2:
            mu *= 10.0
            if mu > 1e4:
                break
            continue
        gain = point.chi2 - new.chi2
        point, mu = new, mu * 0.1
        normal, push, scale = _normal(point)
        if gain < max(1e-2 + 1e-5 * point.chi2, 1e-3 * (point.chi2 - 4.0 * len(root))):
            break
    inverse = scale[:, None] * np.linalg.pinv(normal * scale[:, None] * scale) * scale
    residual = row.data[0] - point.model
    return LineFit(Law.of(point.theta, power), point.amplitude, 0.5 * inverse, point.chi2, residual, point.model)


def _normal(point: _Point) -> tuple[FloatArray, FloatArray, FloatArray]:
    jacobian = point.jacobian()
    normal = jacobian.T @ jacobian
    return normal, jacobian.T @ point.left, 1.0 / np.sqrt(np.maximum(np.diag(normal), 1e-300))


def envelope_of(bins: ComplexArray, *, taper: bool = True) -> ComplexArray:
    """Analytic envelope of a slice of bins against its middle bin: K samples over the row's length (edges tapered over a quarter)."""
    count = len(bins)
    weight = fade(count, max(count // 4, 1)) if taper else np.ones(count)
    return np.asarray(scipy.fft.ifft(np.roll(bins * weight, -(count // 2))) * 1.0)


@dataclass(frozen=True, slots=True)
class Guess:
    """A law read off the envelope, and the envelope's squared misfit over noise per sample: with the bend, and without it."""

    law: Law
    bent: float
    straight: float


def guess(row: BinRows, decay: float, power: int) -> Guess | None:
    """First law from the envelope: ln z on 1, t and 1 - E, weighted by power over noise; None where too little of it is clear.

    For small k, L = 1 - E, so equation (2) is linear once a0 is known; a0 is taken from the last turn's slope.
    """
    length, bins = int(row.length[0]), row.data.shape[1]
    z = envelope_of(row.data[0])
    noise = float(np.sum(1.0 / row.weight[0])) / bins**2
    clear = np.abs(z) ** 2 > _CLEAR_OF_NOISE * noise
    clear[:_TRANSIENT] = False
    clear[-_TRANSIENT:] = False
    usable = int(np.argmin(clear[_TRANSIENT:])) + _TRANSIENT if not clear[_TRANSIENT:].all() else bins - _TRANSIENT
    if usable - _TRANSIENT < 6:
        return None
    t = np.arange(_TRANSIENT, usable) * (length / bins)
    log_z = np.log(np.abs(z[_TRANSIENT:usable])) + 1j * np.unwrap(np.angle(z[_TRANSIENT:usable]))
    weight = np.abs(z[_TRANSIENT:usable])
    x = np.zeros(3, complex)
    misfit = []
    for columns in (2, 3, 3, 3, 3):
        basis = np.stack([np.ones_like(t), t, -np.expm1(-power * decay * t)], axis=1)[:, :columns] * weight[:, None]
        x = np.linalg.lstsq(basis, log_z * weight, rcond=None)[0]
        misfit.append(float(np.mean(np.abs(log_z * weight - basis @ x) ** 2)) / noise)
        decay = float(np.clip(-x[1].real, decay / 1.5, decay * 1.5))
    centre = 2 * np.pi * (int(row.first_bin[0]) + bins // 2) / length
    k = float(np.clip(-power * x[2].real, -0.6, 2.0))
    return Guess(Law(float(centre + x[1].imag), decay, k, float(power * x[2].imag), power), misfit[-1], misfit[0])


def score(row: BinRows, pole: complex) -> float:
    """Gain of log likelihood that a bend would bring to first order, over the straight line `pole` that fits best."""
    poles = np.array([[pole, pole + pole.real, pole + 2 * pole.real]])
    d, g, d_mirror, g_mirror = (x[0] for x in bin_response(poles, row.first_bin, row.length, row.data.shape[1], hann=False))
    root = np.sqrt(row.weight[0])

    def columns(own: ComplexArray, mirror: ComplexArray) -> FloatArray:
        pair = 0.5 * root * np.stack([own + mirror, 1j * (own - mirror)])
        return np.asarray(np.concatenate([pair.real, pair.imag], axis=1).T)

    white = row.data[0] * root
    y = np.concatenate([white.real, white.imag])
    straight = np.linalg.qr(np.concatenate([columns(d[0], d_mirror[0]), columns(g[0], g_mirror[0])], axis=1))[0]
    y = y - straight @ (straight.T @ y)
    gains = []
    for p in (1, 2):
        bend = columns(d[p], d_mirror[p])
        bend = np.linalg.qr(bend - straight @ (straight.T @ bend))[0]
        gains.append(float(np.sum((bend.T @ y) ** 2)))
    return max(gains)


def rivals(row: BinRows, pole: ComplexArray, amplitude: ComplexArray, one: complex) -> tuple[float, float]:
    """chi2 of two and of three straight lines on the same bins, each the best of several starts."""
    a = -one.real
    order = np.argsort(-(np.abs(amplitude) ** 2) / -pole.real)
    ranked = pole[order]
    pairs = [(one, one - a), (one + 0.5j * a, one - 0.5j * a), (one + 2j * a, one - 0.3 * a), (one - 2j * a, one - 0.3 * a)]
    pairs += [(ranked[0], other) for other in ranked[1:3]]
    fit = _best_of(row, np.array(pairs))
    two = fit[0]
    triples = [(*fit[1], one - 2 * a), (*fit[1], fit[1][0] + 2j * a), (*fit[1], fit[1][0] - 2j * a)]
    if len(ranked) >= 3:
        triples.append((ranked[0], ranked[1], ranked[2]))
    return two, min(two, _best_of(row, np.array(triples))[0])


def _best_of(row: BinRows, starts: ComplexArray) -> tuple[float, ComplexArray]:
    rows = row.take(np.zeros(len(starts), dtype=np.int64))
    with np.errstate(all="ignore"):
        fit = fit_rows(rows, starts, steps=15)
    best = int(np.nanargmin(fit.chi2))
    return float(fit.chi2[best]), fit.pole[best]


def chord(theta: FloatArray, power: int, end: float) -> FloatArray:
    """Mean frequency (rad) and decay rate per sample from the start to `end`."""
    log_end = complex(Law.of(theta, power).log_line(np.array([end]))[0])
    return np.array([log_end.imag, -log_end.real]) / end


def chord_covariance(fit: LineFit, end: float) -> FloatArray:
    """Covariance of the two, for the weights of the fit."""
    theta, power = fit.law.vector, fit.law.power
    steps = 1e-4 * np.array([fit.law.decay, 1.0, 1.0, max(1.0, abs(fit.law.glide))])
    slope = np.array([(chord(theta + h, power, end) - chord(theta - h, power, end)) for h in np.diag(steps)]).T / (2 * steps)
    return np.asarray(slope @ fit.covariance @ slope.T)
