"""All modes of a crowded ring at once.

Where modes overlap for octaves, groups fitted in turn chase each other's misfit. Here every mode moves in one Gauss-Newton step:
each has its columns on a window of bins around it, the normal matrix is assembled from the overlaps of the windows, and the step is
judged on the whole residual (all modes summed in time, one transform), so that every step accepted lowers it. Bins are weighted by
the residual's own local level, because what is not modelled in a crowd is other modes, not the noise of the quiet.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.band import ring_sum, spectrum_of
from qmeter.dsp.noise import fast_length
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.poles import ComplexArray, FloatArray, IntArray, bin_response

WINDOW_WIDTHS = 10.0
_SIZES = (32, 64, 128, 256, 512, 1024)
_LEVEL_BLOCK = 48
_MEDIAN_TO_MEAN = 1.0 / np.log(2.0)
_LEASH_DECAY = 3.0
_LEASH_WIDTHS = 1.5


@dataclass(frozen=True, slots=True)
class JointFit:
    """Poles (amplitudes at sample 0 of the ring), and the covariance of (alpha, omega) per sample of each, against the local residual."""

    poles: Poles
    covariance: FloatArray
    cost: float


@dataclass(frozen=True, slots=True)
class _Columns:
    """Whitened derivative columns (4, K) of one mode from bin `first` on: Re c, Im c, ln alpha, omega."""

    first: int
    jac: ComplexArray


def joint_fit(ring: Ring, poles: Poles, start: int, length: int, *, steps: int) -> JointFit:
    """Fit all poles to the DFT of `length` samples from `start`; decay rates stay within a factor of three of where they began."""
    n = fast_length(min(length, len(ring.samples) - start))
    data = ring.samples[start : start + n]
    s = poles.pole.copy()
    c = poles.amplitude * np.exp(s * start)
    seed = s.copy()
    rest = spectrum_of(data - ring_sum(s, c, 0, n), n)
    root = 1.0 / np.sqrt(residual_level(ring, rest, n))
    band = _band_of(ring, n)
    cost = _cost(rest, root, band)
    mu = 1e-3
    hessian = np.zeros((0, 0))
    fresh = True
    for _ in range(steps):
        if fresh:
            hessian, gradient = _normal(_all_columns(s, c, root, n), rest, root)
        step = _solve(hessian, gradient, mu)
        s2, c2 = _moved(s, c, step, seed)
        rest2 = spectrum_of(data - ring_sum(s2, c2, 0, n), n)
        cost2 = _cost(rest2, root, band)
        fresh = cost2 < cost
        if fresh:
            gain = (cost - cost2) / cost
            s, c, rest, cost, mu = s2, c2, rest2, cost2, mu * 0.2
            if gain < 1e-4:
                break
        else:
            mu *= 8.0
            if mu > 1e4:
                break
    root = 1.0 / np.sqrt(residual_level(ring, rest, n))
    columns = _all_columns(s, c, root, n)
    hessian, _ = _normal(columns, rest, root)
    return JointFit(Poles(s, c * np.exp(-s * start)), _covariance(hessian, s, columns, rest * root), cost)


def fitted_amplitudes(ring: Ring, poles: Poles, start: int, length: int) -> Poles:
    """The same poles with the amplitudes that fit this stretch best (linear; two rounds, as far skirts stand outside the windows)."""
    n = fast_length(min(length, len(ring.samples) - start))
    data = ring.samples[start : start + n]
    s, c = poles.pole, poles.amplitude * np.exp(poles.pole * start)
    pick = np.sort(np.concatenate([4 * np.arange(len(s)), 4 * np.arange(len(s)) + 1]))
    for _ in range(2):
        rest = spectrum_of(data - ring_sum(s, c, 0, n), n)
        root = 1.0 / np.sqrt(residual_level(ring, rest, n))
        hessian, gradient = _normal(_all_columns(s, c, root, n), rest, root)
        step = _solve(hessian[np.ix_(pick, pick)], gradient[pick], 1e-6).reshape(-1, 2)
        c = c + step[:, 0] + 1j * step[:, 1]
    return Poles(s, c * np.exp(-s * start))


def residual_level(ring: Ring, rest: ComplexArray, n: int) -> FloatArray:
    """Expected |residual|^2 of each bin: running block medians of the residual itself, never below the noise."""
    power = rest.real**2 + rest.imag**2
    blocks = max(len(power) // _LEVEL_BLOCK, 1)
    used = blocks * _LEVEL_BLOCK if len(power) >= _LEVEL_BLOCK else len(power)
    medians = np.median(power[:used].reshape(blocks, -1), axis=1) * _MEDIAN_TO_MEAN
    centre = (np.arange(blocks) + 0.5) * (used / blocks)
    known = ring.noise.at(np.maximum(centre, 1.0) * ring.rate / n) * (n * ring.rate / 2)
    level = np.maximum(medians, known)
    return np.asarray(np.exp(np.interp(np.arange(len(power)), centre, np.log(level))))


def _band_of(ring: Ring, n: int) -> slice:
    step = ring.rate / n
    return slice(max(int(0.5 * ring.low_hz / step), 1), int(min(1.05 * ring.high_hz, 0.49 * ring.rate) / step))


def _cost(rest: ComplexArray, root: FloatArray, band: slice) -> float:
    """Sum of a concave function of the whitened power: peaks not yet modelled weigh as their logarithm, so they cannot steer the rest."""
    power = (rest[band].real ** 2 + rest[band].imag ** 2) * root[band] ** 2
    return float(np.sum(np.minimum(power, 50.0 + 10.0 * np.log1p(power / 50.0))))


def _normal(columns: list[_Columns], rest: ComplexArray, root: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Normal matrix (4M, 4M) and gradient (4M,) from the windows of all modes."""
    m = len(columns)
    hessian = np.zeros((4 * m, 4 * m))
    gradient = np.zeros(4 * m)
    white = rest * root
    order = np.argsort([col.first for col in columns])
    for place, i in enumerate(order):
        a = columns[i]
        last = a.first + a.jac.shape[1]
        piece = np.ascontiguousarray(white[a.first : last]).view(float)
        ja = a.jac.view(float)
        gradient[4 * i : 4 * i + 4] = ja @ piece
        hessian[4 * i : 4 * i + 4, 4 * i : 4 * i + 4] = ja @ ja.T
        for j in order[place + 1 :]:
            b = columns[j]
            if b.first >= last:
                break
            end = min(last, b.first + b.jac.shape[1])
            left = ja[:, 2 * (b.first - a.first) : 2 * (end - a.first)]
            block = left @ b.jac.view(float)[:, : 2 * (end - b.first)].T
            hessian[4 * i : 4 * i + 4, 4 * j : 4 * j + 4] = block
            hessian[4 * j : 4 * j + 4, 4 * i : 4 * i + 4] = block.T
    return hessian, gradient


def _all_columns(s: ComplexArray, c: ComplexArray, root: FloatArray, n: int) -> list[_Columns]:
    """Columns of every mode, computed in batches of one window size."""
    want = np.maximum(2 * WINDOW_WIDTHS * -s.real * n / np.pi, 24.0)
    sizes = np.array([next((b for b in _SIZES if b >= w), _SIZES[-1]) for w in want])
    sizes = np.minimum(sizes, n // 2 - 1)
    first = np.clip(np.round(s.imag * n / (2 * np.pi) - sizes / 2).astype(int), 1, np.maximum(n // 2 - sizes, 1))
    out: list[_Columns | None] = [None] * len(s)
    for size in np.unique(sizes):
        rows = np.flatnonzero(sizes == size)
        jac = _jacobian(s[rows], c[rows], first[rows], int(size), n)
        jac *= np.stack([root[first[i] : first[i] + size] for i in rows])[:, None, :]
        for r, i in enumerate(rows):
            out[i] = _Columns(int(first[i]), np.ascontiguousarray(jac[r]))
    return [col for col in out if col is not None]


def _jacobian(s: ComplexArray, c: ComplexArray, first: IntArray, size: int, n: int) -> ComplexArray:
    """(R, 4, size): derivatives of the bins of one mode with respect to Re c, Im c, ln alpha, omega (equations 1 and 2 of `poles`)."""
    d, g, db, gb = (x[:, 0] for x in bin_response(s[:, None], first, np.full(len(s), n), size, False))
    cg, cgb = c[:, None] * g, c.conj()[:, None] * gb
    jac = np.empty((len(s), 4, size), complex)
    jac[:, 0] = 0.5 * (d + db)
    jac[:, 1] = 0.5j * (d - db)
    jac[:, 2] = 0.5 * s.real[:, None] * (cg + cgb)
    jac[:, 3] = 0.5j * (cg - cgb)
    return jac


def _solve(hessian: FloatArray, gradient: FloatArray, mu: float) -> FloatArray:
    scale = 1.0 / np.sqrt(np.maximum(np.diagonal(hessian), 1e-300))
    a = hessian * scale[:, None] * scale[None, :]
    a[np.diag_indices_from(a)] += mu + 1e-9
    return np.asarray(scale * np.linalg.solve(a, scale * gradient))


def _moved(s: ComplexArray, c: ComplexArray, step: FloatArray, seed: ComplexArray) -> tuple[ComplexArray, ComplexArray]:
    d = step.reshape(-1, 4)
    lam = np.log(-s.real) + np.clip(d[:, 2], -0.5, 0.5)
    lam = np.clip(lam, np.log(-seed.real / _LEASH_DECAY), np.log(-seed.real * _LEASH_DECAY))
    reach = -s.real
    omega = s.imag + np.clip(d[:, 3], -reach, reach)
    far = _LEASH_WIDTHS * 2 * -seed.real
    omega = np.clip(omega, seed.imag - far, seed.imag + far)
    return -np.exp(lam) + 1j * omega, c + d[:, 0] + 1j * d[:, 1]


def _covariance(hessian: FloatArray, s: ComplexArray, columns: list[_Columns], white: ComplexArray) -> FloatArray:
    """(M, 2, 2) of (alpha, omega) per sample: half the inverse of the real normal matrix, raised by where the residual stands in time.

    Real and imaginary part of a bin have variance 1/2 each. What is left in a crowd is other modes: it is lumpy over the bins and
    loud where the mode itself is. The influence of the bins on each parameter, transformed back, is its weight over time; the power
    of the residual's own envelope in these cells replaces a constant (a sandwich covariance, White 1980, in time).
    """
    scale = 1.0 / np.sqrt(np.maximum(np.diagonal(hessian), 1e-300))
    a = hessian * scale[:, None] * scale[None, :]
    a[np.diag_indices_from(a)] += 1e-10
    inverse = np.linalg.inv(a) * scale[:, None] * scale[None, :]
    out = np.empty((len(s), 2, 2))
    for i, pole in enumerate(s):
        own = inverse[4 * i + 2 : 4 * i + 4, 4 * i : 4 * i + 4]
        jac, first = columns[i].jac, columns[i].first
        weight = np.abs(np.fft.ifft(own @ jac, axis=1)) ** 2
        piece = white[first : first + jac.shape[1]]
        power = np.abs(np.fft.ifft(piece)) ** 2 * len(piece)
        factor = np.sqrt(np.maximum(weight @ np.maximum(power, 1.0) / np.sum(weight, axis=1), 1.0))
        block = inverse[4 * i + 2 : 4 * i + 4, 4 * i + 2 : 4 * i + 4]
        unit = np.array([-pole.real, 1.0]) * factor
        out[i] = 0.5 * block * unit[:, None] * unit[None, :]
    return out
