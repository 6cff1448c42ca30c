"""Fit damped cosines to the bins of a plain DFT, many groups of modes at once.

A ring x[n] = sum_m Re{ c_m z_m^n }, z = exp(s), s = (-alpha + i omega_d)/rate, cut to N samples, has the closed-form DFT

    X[k] = sum_m ( c_m D(s_m, k) + c_m* D(s_m*, k) ) / 2,      D(s, k) = (1 - z^N) / (1 - z exp(-2 pi i k/N))        (1)
    dD/ds = sum_n n u^n = (u D - N z^N) / (1 - u),             u = z exp(-2 pi i k/N)                                  (2)

(geometric series). The cut, the skirts and the image at negative frequency are exact in it, so nothing is left out of the
start to let a filter settle: the slice of bins is the bandpass, and the same slice is applied to the model.

The fit is separable (Golub & Pereyra, SIAM J. Numer. Anal. 10 (1973) 413): amplitudes are solved for, poles are moved by
Levenberg-Marquardt steps on the Schur complement of the normal equations. Rows of equal shape (modes, bins) are fitted in
one batch; each row has its own length, first bin and start.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class BinRows:
    """R slices of K bins of plain DFTs, to be fitted with M modes each.

    data: (R, K) complex; weight: (R, K), one over the expected |noise|^2 of a bin; first_bin: (R,); length: (R,) samples N.
    With `hann`, data are bins of the Hann-weighted ring (three-term combination of plain bins).
    """

    data: ComplexArray
    weight: FloatArray
    first_bin: IntArray
    length: IntArray
    hann: bool = False

    def take(self, rows: NDArray[np.bool_] | IntArray) -> BinRows:
        """Some of the rows."""
        return BinRows(self.data[rows], self.weight[rows], self.first_bin[rows], self.length[rows], self.hann)


@dataclass(frozen=True, slots=True)
class RowFit:
    """Per row and mode: log-poles (per sample), amplitudes at the slice's first sample, covariance, and how well it fits.

    pole, amplitude: (R, M). covariance: (R, 2M, 2M) of (alpha_1, omega_1, alpha_2, ...) in 1/sample, for the weights given.
    chi2: (R,) sum of weight |residual|^2 (its mean is K - 2M for noise alone). residual: (R, K).
    influence: (R, 2M, K) complex: d(parameter) = Re sum_k influence* d(data).
    """

    pole: ComplexArray
    amplitude: ComplexArray
    covariance: FloatArray
    chi2: FloatArray
    residual: ComplexArray
    influence: ComplexArray


def bin_response(pole: ComplexArray, first_bin: IntArray, length: IntArray, bins: int, hann: bool) -> tuple[ComplexArray, ...]:
    """D and dD/ds of equations (1) and (2), for the pole and for its conjugate: four arrays (R, M, K)."""
    k = first_bin[:, None] + np.arange(-1, bins + 1) if hann else first_bin[:, None] + np.arange(bins)
    turn = np.exp((-2j * np.pi) * (k / length[:, None]))[:, None, :]
    n = length[:, None]
    out: list[ComplexArray] = []
    z = np.exp(pole)
    zn = np.exp(pole * n)
    for zz, zzn in ((z, zn), (z.conj(), zn.conj())):
        u = zz[..., None] * turn
        over = 1.0 / (1.0 - u)
        d = (1.0 - zzn)[..., None] * over
        u *= d
        u -= (n * zzn)[..., None]
        u *= over
        out += [d, u]
    if hann:
        out = [0.5 * x[..., 1:-1] - 0.25 * (x[..., :-2] + x[..., 2:]) for x in out]
    return out[0], out[1], out[2], out[3]


def _columns(rows: BinRows, pole: ComplexArray, root: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Whitened amplitude columns (R, 2M, K), and whitened D', D'* derivative blocks (R, M, K) each."""
    d, g, db, gb = bin_response(pole, rows.first_bin, rows.length, rows.data.shape[1], rows.hann)
    r, m, k = d.shape
    w = 0.5 * root[:, None, :]
    amp = np.empty((r, m, 2, k), complex)
    np.add(d, db, out=amp[:, :, 0])
    np.subtract(d, db, out=amp[:, :, 1])
    amp[:, :, 1] *= 1j
    amp *= w[:, :, None, :]
    g *= w
    gb *= w
    return amp.reshape(r, 2 * m, k), g, gb


def _real(x: ComplexArray) -> FloatArray:
    """(..., K) complex as (..., 2K) real, without a copy."""
    return x.view(np.float64)


def _solve(a: FloatArray, b: FloatArray) -> FloatArray:
    """Solve stacked symmetric systems after scaling by the diagonal; a touch of ridge keeps coincident modes from raising."""
    scale = 1.0 / np.sqrt(np.maximum(np.einsum("rii->ri", a), 1e-300))
    scaled = a * scale[:, :, None] * scale[:, None, :]
    idx = np.arange(a.shape[1])
    scaled[:, idx, idx] += 1e-13
    return np.asarray(scale[:, :, None] * np.linalg.solve(scaled, scale[:, :, None] * b))


class _State:
    """One evaluation of all rows: columns, amplitudes, residual, chi2."""

    __slots__ = ("amp", "c", "chi2", "g", "gb", "res")

    def __init__(self, rows: BinRows, pole: ComplexArray, root: FloatArray, white: ComplexArray) -> None:
        self.amp, self.g, self.gb = _columns(rows, pole, root)
        a = _real(self.amp)
        rhs = a @ _real(white)[:, :, None]
        x = _solve(a @ a.transpose(0, 2, 1), rhs)
        self.res = white - (x.transpose(0, 2, 1) @ a)[:, 0].view(complex)
        self.chi2 = np.einsum("rk,rk->r", _real(self.res), _real(self.res))
        self.c = x[:, 0::2, 0] + 1j * x[:, 1::2, 0]

    def jacobian(self, pole: ComplexArray) -> ComplexArray:
        """Columns with respect to (ln alpha, omega) of each mode, (R, 2M, K)."""
        r, m, k = self.g.shape
        cg = self.c[..., None] * self.g
        cgb = self.c.conj()[..., None] * self.gb
        jac = np.empty((r, m, 2, k), complex)
        np.add(cg, cgb, out=jac[:, :, 0])
        jac[:, :, 0] *= pole.real[..., None]
        np.subtract(cg, cgb, out=jac[:, :, 1])
        jac[:, :, 1] *= 1j
        return jac.reshape(r, 2 * m, k)

    def put(self, rows: NDArray[np.bool_], other: _State) -> None:
        for name in self.__slots__:
            getattr(self, name)[rows] = getattr(other, name)[rows]

    def take(self, rows: NDArray[np.bool_]) -> None:
        for name in self.__slots__:
            setattr(self, name, getattr(self, name)[rows])


def fit_rows(rows: BinRows, start: ComplexArray, *, steps: int = 8, decay_bounds: tuple[FloatArray, FloatArray] | None = None) -> RowFit:
    """Fit M modes to each of R rows of K bins from the log-poles `start` (R, M).

    Decay rates stay within `decay_bounds` (each (R, M), per sample; default: start/6 to start*6), frequencies within three
    half-power widths or three bins of their start.
    """
    root = np.sqrt(rows.weight)
    white = rows.data * root
    low, high = decay_bounds if decay_bounds is not None else (-start.real / 6, -start.real * 6)
    log_low, log_high = np.log(low), np.log(high)
    reach = np.maximum(6 * -start.real, 6 * np.pi / rows.length[:, None])
    mid = start.imag
    pole = start.copy()
    state = _State(rows, pole, root, white)
    final = _State.__new__(_State)
    for name in _State.__slots__:
        setattr(final, name, np.array(getattr(state, name)))
    out_pole = pole.copy()
    live = np.arange(len(pole))
    mu = np.full(len(pole), 1e-3)
    work = rows
    for _ in range(steps):
        step = _lm_step(state, pole, mu)
        lam = np.clip(np.log(-pole.real) + np.clip(step[:, 0::2], -1.0, 1.0), log_low[live], log_high[live])
        omega = pole.imag + np.clip(step[:, 1::2], -reach[live] / 2, reach[live] / 2)
        omega = np.clip(omega, np.maximum(mid[live] - reach[live], 0.5 * mid[live]), np.minimum(mid[live] + reach[live], 2.0 * mid[live]))
        trial = -np.exp(lam) + 1j * omega
        new = _State(work, trial, root[live], white[live])
        better = new.chi2 < state.chi2
        gain = np.where(better, state.chi2 - new.chi2, np.inf)
        state.put(better, new)
        pole[better] = trial[better]
        mu = np.where(better, mu * 0.1, mu * 10.0)
        done = (gain < 1e-3 + 1e-7 * state.chi2) | (mu > 1e6)
        if done.any():
            ids = live[done]
            out_pole[ids] = pole[done]
            for name in _State.__slots__:
                getattr(final, name)[ids] = getattr(state, name)[done]
            keep = ~done
            live, pole, mu = live[keep], pole[keep], mu[keep]
            state.take(keep)
            work = work.take(keep)
            if not len(live):
                break
    if len(live):
        out_pole[live] = pole
        for name in _State.__slots__:
            getattr(final, name)[live] = getattr(state, name)
    return _finish(final, out_pole, root)


def _lm_step(state: _State, pole: ComplexArray, mu: FloatArray) -> FloatArray:
    """Levenberg-Marquardt step of the poles with the amplitudes projected out: (R, 2M) of (ln alpha, omega)."""
    jac, amp = _real(state.jacobian(pole)), _real(state.amp)
    cross = amp @ jac.transpose(0, 2, 1)
    schur = jac @ jac.transpose(0, 2, 1) - cross.transpose(0, 2, 1) @ _solve(amp @ amp.transpose(0, 2, 1), cross)
    idx = np.arange(schur.shape[1])
    schur[:, idx, idx] *= 1.0 + mu[:, None]
    return _solve(schur, jac @ _real(state.res)[:, :, None])[:, :, 0]


def _finish(state: _State, pole: ComplexArray, root: FloatArray) -> RowFit:
    """Covariance and influence of (alpha, omega), amplitudes projected out.

    chi2 counts weight |residual|^2 with E|noise|^2 = 1/weight, so the real and the imaginary part have variance 1/2 each, and the
    covariance is half the inverse of the real normal matrix.
    """
    jac, amp = _real(state.jacobian(pole)), _real(state.amp)
    r, p, _k2 = jac.shape
    cross = amp @ jac.transpose(0, 2, 1)
    free = jac - cross.transpose(0, 2, 1) @ _solve(amp @ amp.transpose(0, 2, 1), amp)
    schur = free @ free.transpose(0, 2, 1)
    inverse = _solve(schur, np.broadcast_to(np.eye(p), schur.shape))
    scale = np.ones((r, p))
    scale[:, 0::2] = -pole.real
    covariance = 0.5 * inverse * scale[:, :, None] * scale[:, None, :]
    influence = np.ascontiguousarray(scale[:, :, None] * (inverse @ free)).view(np.complex128) * root[:, None, :]
    residual = state.res / root
    return RowFit(pole, state.c, covariance, state.chi2, residual, influence)
