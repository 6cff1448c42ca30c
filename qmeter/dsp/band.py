"""From the samples of a ring to the bins around a mode, and to the analytic envelope of its band."""

from __future__ import annotations

import numpy as np
import scipy.fft
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

_BLOCK = 512
_GONE = 16.0
"""nepers after which a mode is left out of a sum: exp(-16) = -139 dB, below 24-bit resolution of any mode"""


def ring_sum(pole: ComplexArray, amplitude: ComplexArray, first: int, last: int) -> FloatArray:
    """sum_m Re{ amplitude_m exp(pole_m n) } for n = first..last-1, as two matrix products per stretch.

    exp(pole (i B + j)) = exp(pole i B) exp(pole j): blocks of B samples cost 4 M multiplications a sample. Stretches double in
    length; a mode takes part until it has fallen by `_GONE` nepers.
    """
    out = np.zeros(last - first)
    if not len(pole):
        return out
    life = np.minimum(_GONE / np.maximum(-pole.real, 1e-12), 1e12)
    at, span = first, 8 * _BLOCK
    while at < last:
        stop = min(at + span, last) if last - at > 1.5 * span else last
        alive = life > at
        if alive.any():
            out[at - first : stop - first] = _stretch(pole[alive], amplitude[alive], at, stop)
        else:
            break
        at, span = stop, span * 4
    return out


def _stretch(pole: ComplexArray, amplitude: ComplexArray, first: int, last: int) -> FloatArray:
    blocks = -(-(last - first) // _BLOCK)
    heads = amplitude * np.exp(pole * (first + _BLOCK * np.arange(blocks))[:, None])
    tails = np.exp(pole[:, None] * np.arange(_BLOCK))
    left = np.concatenate([heads.real, -heads.imag], axis=1)
    right = np.concatenate([tails.real, tails.imag], axis=0)
    return np.asarray((left @ right).reshape(-1)[: last - first])


def spectrum_of(samples: FloatArray, length: int) -> ComplexArray:
    """Plain DFT bins 0..N/2 of the first `length` samples."""
    return np.asarray(scipy.fft.rfft(samples[:length]))


def hann_bins(plain: ComplexArray) -> ComplexArray:
    """Bins of the Hann-weighted samples from the plain bins: X[k]/2 - (X[k-1] + X[k+1])/4; the ends are left at zero."""
    out = np.zeros_like(plain)
    out[1:-1] = 0.5 * plain[1:-1] - 0.25 * (plain[:-2] + plain[2:])
    return out


def bins_around(plain: ComplexArray, first_bin: NDArray[np.int64], bins: int) -> ComplexArray:
    """(R, bins) slices of a spectrum; bins below 0 or above N/2 come from the conjugate symmetry of a real signal."""
    k = first_bin[:, None] + np.arange(bins)
    top = len(plain) - 1
    flip = (k < 0) | (k > top)
    index = np.where(k < 0, -k, np.where(k > top, 2 * top - k, k))
    out = plain[index]
    return np.where(flip, out.conj(), out)


def fade(count: int, edge: int) -> FloatArray:
    """Weights (count,) that rise from zero over `edge` bins and fall again: half a cosine at either end, ones between."""
    ramp = 0.5 - 0.5 * np.cos(np.pi * (np.arange(edge) + 0.5) / edge)
    weight = np.ones(count)
    weight[:edge] = ramp
    weight[-edge:] = ramp[::-1]
    return weight
