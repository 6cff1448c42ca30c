"""Damped exponentials in many short complex series at once: matrix pencil, then one step towards least squares.

The pencil (Hua and Sarkar 1990, IEEE Trans. ASSP 38, 814-824, in its subspace form) needs no start values. Its poles are moved by one
Gauss-Newton step, which makes them least-squares ones for all purposes, and brings the covariance of all lines of a series jointly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.band import ComplexArray, FloatArray

_RIDGE = 1e-9
_MOST_STEP = 0.5
"""of its decay rate, by which the step may move a pole; where it would be more, the pencil's pole stays"""


@dataclass(frozen=True, slots=True)
class Lines:
    """Per series (R) and line (P): log-pole per sample, amplitude at the first sample, variance of either part of the log-pole.

    residual: (R,) power per sample that the lines leave. energy: (R, P), sum of the squared magnitude of each line.
    """

    pole: ComplexArray
    amplitude: ComplexArray
    variance: FloatArray
    residual: FloatArray
    energy: FloatArray


def pencil(series: ComplexArray, orders: tuple[int, ...]) -> dict[int, ComplexArray]:
    """Poles z (R, p) of each series (R, L) for each order p: eigenvalues of the shift between the two ends of the signal subspace.

    The subspace comes from the Hankel matrix' own covariance; with V0, V1 its basis without the last and the first row, and u the last
    row, V0^H V0 = I - u^H u, so that the least-squares shift needs no further decomposition.
    """
    third = max(series.shape[1] // 3, max(orders) + 2)
    hankel = np.lib.stride_tricks.sliding_window_view(series, third + 1, axis=1)
    _, vectors = np.linalg.eigh(_adjoint(hankel) @ hankel)
    basis = vectors[:, :, ::-1].conj()
    out: dict[int, ComplexArray] = {}
    for p in orders:
        v = basis[:, :, :p]
        u = v[:, -1, :].conj()
        shift = _adjoint(v[:, :-1]) @ v[:, 1:]
        spare = np.maximum(1.0 - np.sum(np.abs(u) ** 2, axis=1), 1e-12)
        shift = shift + u[:, :, None] * (u[:, None, :].conj() @ shift / spare[:, None, None])
        out[p] = np.asarray(np.linalg.eigvals(shift), dtype=np.complex128)
    return out


def lines_of(series: ComplexArray, z: ComplexArray) -> Lines:
    """The lines of each series (R, L) near the poles z (R, p): moved by one Gauss-Newton step, with amplitudes and variances."""
    length, p = series.shape[1], z.shape[1]
    n = np.arange(length)
    least = 1e-6
    s = np.log(np.where(np.abs(z) < least, least, z))
    s = np.where(s.real > -least, -least + 1j * s.imag, s)
    grown, amplitude, rest = _amplitudes(series, s, n)
    columns, scale, inverse = _normal(grown, amplitude, n)
    step = ((inverse @ (_adjoint(columns) @ rest[:, :, None]))[:, :, 0] * scale)[:, p:]
    s = s + np.where(np.abs(step) > _MOST_STEP * np.maximum(-s.real, 0.2 / length), 0.0, step)
    s = np.where(s.real > -least, -least + 1j * s.imag, s)
    grown, amplitude, rest = _amplitudes(series, s, n)
    residual = np.sum(np.abs(rest) ** 2, axis=1) / max(length - 2 * p, 4)
    own = np.real(np.diagonal(inverse, axis1=1, axis2=2))[:, p:] * scale[:, p:] ** 2
    energy = np.abs(amplitude) ** 2 * np.sum(np.abs(grown) ** 2, axis=1)
    return Lines(s, amplitude, 0.5 * residual[:, None] * own, residual, energy)


def _adjoint(a: ComplexArray) -> ComplexArray:
    return np.asarray(np.swapaxes(a.conj(), 1, 2))


def _amplitudes(series: ComplexArray, s: ComplexArray, n: np.ndarray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Each line at amplitude one (R, L, p), the amplitudes that fit best (R, p), and what they leave (R, L)."""
    grown: ComplexArray = np.exp(s[:, None, :] * n[None, :, None])
    gram = _adjoint(grown) @ grown
    ridge = 1e-10 * np.trace(gram, axis1=1, axis2=2).real
    gram = gram + ridge[:, None, None] * np.eye(s.shape[1])
    amplitude = np.linalg.solve(gram, _adjoint(grown) @ series[:, :, None])
    rest: ComplexArray = series - (grown @ amplitude)[:, :, 0]
    return grown, np.asarray(amplitude[:, :, 0], dtype=np.complex128), rest


def _normal(grown: ComplexArray, amplitude: ComplexArray, n: np.ndarray) -> tuple[ComplexArray, FloatArray, ComplexArray]:
    """Derivatives by amplitudes and log-poles, each of norm one (R, L, 2p), the norms' inverse, and the normal matrix' inverse."""
    columns = np.concatenate([grown, grown * (amplitude[:, None, :] * n[None, :, None])], axis=2)
    scale: FloatArray = 1.0 / np.sqrt(np.sum(np.abs(columns) ** 2, axis=1) + 1e-300)
    columns = columns * scale[:, None, :]
    normal = _adjoint(columns) @ columns + _RIDGE * np.eye(columns.shape[2])
    return columns, scale, np.asarray(np.linalg.inv(normal), dtype=np.complex128)
