"""Lists of poles without what is in them twice: the same mode found again, and splinters that a rough fit leaves beside a strong line."""

from __future__ import annotations

import numpy as np

from qmeter.estimate.find import Poles

SAME_WIDTHS = 0.15
"""two poles closer than this many half-power widths, with like decays, are one mode found twice"""
SPLINTER_WIDTHS = 2.0


def swapped(poles: Poles, keep: np.ndarray, swaps: list[tuple[np.ndarray, Poles]]) -> Poles:
    """The poles with whole groups replaced by what their bins ask for."""
    keep = keep.copy()
    fresh = Poles.none()
    for members, new in swaps:
        keep[members] = False
        fresh = fresh.plus(new)
    return poles.take(keep).plus(fresh)


def unshattered(poles: Poles) -> Poles:
    """Without the splinters that a rough fit leaves beside a strong line: `resolve` finds the true ones again, with evidence."""
    energy = np.abs(poles.amplitude) ** 2 / -poles.pole.real
    kept: list[int] = []
    for i in np.argsort(-energy):
        s, strong = poles.pole[i], poles.pole[kept]
        decays = s.real / strong.real
        like = (decays > 0.3) | (energy[i] < 0.01 * energy[kept])
        splinter = (np.abs(s.imag - strong.imag) < SPLINTER_WIDTHS * 2.0 * -strong.real) & like & (decays < 8.0)
        if not np.any(splinter):
            kept.append(int(i))
    return poles.take(np.sort(np.array(kept, dtype=int)))


def merged(poles: Poles) -> Poles:
    """Without the same mode twice: the stronger of two poles within `SAME_WIDTHS` stays."""
    order = np.argsort(-(np.abs(poles.amplitude) ** 2) / -poles.pole.real)
    kept: list[int] = []
    for i in order:
        s = poles.pole[i]
        if not np.isfinite(s) or s.real >= 0:
            continue
        other = poles.pole[kept]
        width = 2.0 * np.minimum(-s.real, -other.real)
        if not np.any((np.abs(s.imag - other.imag) < SAME_WIDTHS * width) & (np.abs(np.log(s.real / other.real)) < 0.5)):
            kept.append(int(i))
    return poles.take(np.sort(np.array(kept, dtype=int)))
