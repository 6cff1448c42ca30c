"""How many lines a group holds, decided by evidence: one line or a close pair, two or three.

The group's bins are tapered and transformed back to the complex envelope of its band; a matrix pencil (Hua & Sarkar, IEEE Trans.
ASSP 38 (1990) 814) of each order offers poles, which are then fitted to the bins themselves. One more line is believed only if it
lowers chi2 by 4 ln n + 25 times the level of the residual (n bins): four more parameters after Schwarz (Ann. Stat. 6 (1978) 461),
and a margin for noise whose spectrum is known to some ten per cent only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qmeter.dsp.band import fade
from qmeter.estimate.find import Poles
from qmeter.estimate.groups import GroupFit
from qmeter.estimate.poles import BinRows, ComplexArray, FloatArray, RowFit, fit_rows

ORDERS = (1, 2, 3, 4, 5, 6)
_MOST_MEMBERS = 3
"""a larger group is a crowd, not an unresolved pair: its misfit is mostly that of its neighbours"""
REACH = 6.0
"""a companion stands within about three half-power widths; what is further away was found on its own or is a leftover"""
WIDER = 3.0
"""and decays at most this much faster than the line it stands beside"""
_EDGE = 0.25
_SKIP = 3


@dataclass(frozen=True, slots=True)
class Suspect:
    """One row of a batch that does not reach the noise, with the poles it has now."""

    data: ComplexArray
    weight: FloatArray
    first_bin: int
    length: int
    pole: ComplexArray
    chi2: float


def suspects_of(fits: list[GroupFit], least_excess: float) -> list[tuple[GroupFit, int]]:
    """Rows whose chi2 stands above its expectation by more than chance and noise-level doubt allow, or whose poles are ill-determined."""
    out = []
    for g in fits:
        ratio = g.fit.chi2 / g.freedom
        decay = -g.fit.pole.real
        u = np.sqrt(np.maximum(np.diagonal(g.fit.covariance, axis1=1, axis2=2)[:, 0::2], 0.0))
        loose = (u > 0.3 * decay).any(axis=1)
        for r in np.flatnonzero((ratio > least_excess + 3.0 / np.sqrt(g.freedom)) | loose):
            out.append((g, int(r)))
    return out


def envelope_of(data: ComplexArray) -> ComplexArray:
    """Complex envelope (K samples over the slice's length) of tapered bins; its zero frequency is the first bin."""
    k = len(data)
    taper = fade(k, max(int(_EDGE * k / 2), 2))
    return np.asarray(np.fft.ifft(data * taper) * k)


def pencil_poles(envelope: ComplexArray, orders: tuple[int, ...]) -> list[ComplexArray]:
    """Poles z of the envelope per order: eig(pinv(V1) V2) on the leading right singular vectors of the Hankel matrix.

    By its singular values, not by its covariance as in `pencil`: a pair a quarter of a width apart at 60 dB is lost in the square.
    """
    n = len(envelope)
    columns = n // 2
    hankel = np.lib.stride_tricks.sliding_window_view(envelope, columns)
    _, _, vh = np.linalg.svd(hankel, full_matrices=False)
    out: list[ComplexArray] = []
    for p in orders:
        v = vh[:p].T
        z = np.linalg.eigvals(np.linalg.lstsq(v[:-1], v[1:], rcond=None)[0])
        out.append(z.astype(np.complex128))
    return out


def proposals(suspect: Suspect) -> dict[int, ComplexArray]:
    """Start poles per sample, for each order that gives as many decaying poles within the band."""
    k, n = len(suspect.data), suspect.length
    env = envelope_of(suspect.data)
    keep = min(max(round(6.0 / np.min(-suspect.pole.real) * k / n), 16), k - 4, 160)
    part = env[_SKIP : _SKIP + keep]
    out: dict[int, ComplexArray] = {}
    least = 0.1 / n
    for p, z in zip(ORDERS, pencil_poles(part, ORDERS), strict=True):
        raw = np.log(z) * (k / n)
        turn = np.mod(raw.imag, 2 * np.pi * k / n) + 2 * np.pi * suspect.first_bin / n
        s = -np.clip(-raw.real, least, None) + 1j * turn
        good = (np.abs(z) < 1.0 + 2.0 / k) & (-s.real < 4 * np.max(-suspect.pole.real))
        if good.sum() == p:
            out[p] = s[np.argsort(s.imag)]
    return out


def resolve(poles: Poles, fits: list[GroupFit], least_excess: float, loudest: float) -> list[tuple[np.ndarray, Poles]]:
    """Rows whose evidence asks for other poles: (members to replace, the new poles with amplitudes at the ring's start).

    Of rows whose bands overlap only the one with the most to gain is replaced: its neighbours' misfit is partly its own.
    """
    pairs = [(g, r) for g, r in suspects_of(fits, least_excess) if g.batch.members.shape[1] <= _MOST_MEMBERS]
    suspects = [
        Suspect(
            g.batch.rows.data[r],
            g.batch.rows.weight[r],
            int(g.batch.rows.first_bin[r]),
            int(g.batch.rows.length[r]),
            g.fit.pole[r],
            float(g.fit.chi2[r]),
        )
        for g, r in pairs
    ]
    tried = _fit_all(suspects)
    ranked = []
    for (g, r), suspect, fits_of in zip(pairs, suspects, tried, strict=True):
        chosen = _by_evidence(suspect, fits_of)
        if chosen is not None:
            ranked.append((chosen[2], g, r, chosen[0], chosen[1]))
    out: list[tuple[np.ndarray, Poles]] = []
    taken: list[tuple[float, float]] = []
    for _, g, r, fit, row in sorted(ranked, key=lambda item: -item[0]):
        low = float(g.batch.rows.first_bin[r] / g.batch.rows.length[r])
        high = low + g.batch.rows.data.shape[1] / float(g.batch.rows.length[r])
        centre = float(np.mean(g.fit.pole[r].imag)) / (2 * np.pi)
        if not any(a < centre < b or low < 0.5 * (a + b) < high for a, b in taken):
            start = int(g.batch.start[r])
            members = g.batch.members[r]
            with np.errstate(all="ignore"):
                new = Poles(fit.pole[row].copy(), fit.amplitude[row] * np.exp(-fit.pole[row] * start))
                new = new.take(_ours(new, poles, members) & (np.abs(new.amplitude) < 3.0 * loudest))
            if len(new) and _keeps(new, poles.take(members), g.fit.pole[r]):
                out.append((members, new))
                taken.append((low, high))
    return out


def _keeps(new: Poles, old: Poles, fitted: ComplexArray) -> bool:
    """Every strong member of the group has a successor within a width: what is there may be split, not lost."""
    energy = np.abs(old.amplitude) ** 2 / -old.pole.real
    return all(np.min(np.abs(new.pole.imag - s.imag)) <= 2.0 * -s.real for s in fitted[energy > 0.1 * energy.max()])


def _ours(new: Poles, poles: Poles, members: np.ndarray) -> np.ndarray:
    """Lines that belong to the group: nearer to one of its members than to any mode outside (a line there is the neighbour's leftover)."""
    apart = np.abs(new.pole.imag[:, None] - poles.pole.imag[None, :])
    nearest = np.argmin(apart, axis=1)
    width = -poles.pole.real[nearest]
    near = apart[np.arange(len(new)), nearest] < REACH * np.minimum(width, -new.pole.real) + width
    return np.asarray(np.isin(nearest, members) & near & (-new.pole.real < WIDER * width))


def _fit_all(suspects: list[Suspect]) -> list[dict[int, tuple[RowFit, int]]]:
    """Fit every proposal, those of equal order and size in one batch."""
    shapes: dict[tuple[int, int], list[tuple[int, ComplexArray]]] = {}
    for i, suspect in enumerate(suspects):
        for p, start in proposals(suspect).items():
            shapes.setdefault((p, len(suspect.data)), []).append((i, start))
        shapes.setdefault((len(suspect.pole), len(suspect.data)), []).append((i, suspect.pole))
    tried: list[dict[int, tuple[RowFit, int]]] = [{} for _ in suspects]
    for (p, _), items in shapes.items():
        chosen = [suspects[i] for i, _ in items]
        rows = BinRows(
            np.array([s.data for s in chosen]),
            np.array([s.weight for s in chosen]),
            np.array([s.first_bin for s in chosen]),
            np.array([s.length for s in chosen]),
        )
        fit = fit_rows(rows, np.array([start for _, start in items]), steps=15)
        for row, (i, _) in enumerate(items):
            if np.isfinite(fit.chi2[row]) and (p not in tried[i] or fit.chi2[row] < tried[i][p][0].chi2[tried[i][p][1]]):
                tried[i][p] = (fit, row)
    return tried


def _by_evidence(suspect: Suspect, tried: dict[int, tuple[RowFit, int]]) -> tuple[RowFit, int, float] | None:
    """The order that the evidence asks for, or None where it is what there is already."""
    k = len(suspect.data)
    levels = [fit.chi2[row] / max(k - 2 * p, 1) for p, (fit, row) in tried.items()]
    scale = max(1.0, min(levels, default=1.0))
    cost = {p: fit.chi2[row] / scale + p * (4 * np.log(k) + 25.0) for p, (fit, row) in tried.items() if _sound(fit, row, suspect)}
    if not cost:
        return None
    now = suspect.chi2 / scale + len(suspect.pole) * (4 * np.log(k) + 25.0)
    best = min(cost, key=lambda p: cost[p])
    return (*tried[best], (now - cost[best]) / now) if cost[best] < now - 1.0 else None


def _sound(fit: RowFit, row: int, suspect: Suspect) -> bool:
    """Poles that are determined at all, and no pair of giants cancelling each other."""
    a = -fit.pole[row].real
    u = np.sqrt(np.maximum(np.diagonal(fit.covariance[row])[0::2], 0.0))
    total = np.abs(np.sum(fit.amplitude[row]))
    return bool(
        np.all((u < 0.6 * a) | (a * suspect.length < 0.3))
        and np.max(np.abs(fit.amplitude[row])) < 30 * max(total, np.median(np.abs(fit.amplitude[row])))
    )
