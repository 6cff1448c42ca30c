"""What happens in the first milliseconds of a strike: its onset to the sample, the contact, a second contact, clipping.

All of it looks at the residual of a linear predictor. The free ring of linear modes is predictable from its own past,
a force that acts on them is not: the residual is large while the contact lasts and again at a bounce.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

CHANGE_RATIO = 15.0
"""power ratio for which the change point is tuned: larger is later"""
SHORTEST_CONTACT_S, LONGEST_CONTACT_S = 0.0002, 0.0035


def predictor(x: FloatArray, order: int, ridge: float = 1e-9) -> FloatArray:
    """Error filter [1, -a1, ... -ap] of the least-squares linear predictor of x (covariance method, ridge-regularised)."""
    rows = np.lib.stride_tricks.sliding_window_view(x, order + 1)
    gram = rows.T @ rows
    past, goal = gram[:-1, :-1], gram[:-1, -1]
    weight = ridge * float(np.trace(past)) / order + np.finfo(float).tiny
    solution = np.linalg.solve(past + weight * np.eye(order), goal)
    out: FloatArray = np.concatenate([[1.0], -solution[::-1]])
    return out


def refine_onset(x: FloatArray, rate: float, frame: int, hop: int, previous: int | None) -> int:
    """The first sample of a strike that was seen in the frame [frame, frame + 2 hop): a change point of the residual.

    The predictor comes from the 40 ms before; the cumulative log-likelihood ratio of a CHANGE_RATIO-fold power against
    the power before has its minimum at the change (Page 1954, CUSUM).
    """
    lowest = 0 if previous is None else previous + hop // 2
    first = max(frame - hop // 2, lowest)
    last = min(frame + 3 * hop, x.size)
    if last - first < 8:
        return min(first, x.size - 1)
    start = max(first - int(0.04 * rate), lowest)
    order = min(32, (first - start) // 8)
    if order >= 2:
        error_filter = predictor(x[start:first], order)
        residual = np.convolve(x[start:last], error_filter)[order : last - start]
        before = residual[: first - start - order]
        power = float(np.mean(before**2))
        residual = residual[first - start - order :]
    else:
        residual = x[first:last]
        power = _quiet_power(x, hop)
    power = max(power, 1e-16, 1e-10 * float(np.max(residual**2)))
    return first + change_point(residual, power)


def _quiet_power(x: FloatArray, hop: int) -> float:
    """Power of the quietest tenth of the recording's blocks."""
    count = max(x.size // hop, 1)
    blocks = np.mean(x[: count * hop].reshape(count, -1) ** 2, axis=1)
    return float(np.partition(blocks, count // 10)[count // 10])


def change_point(residual: FloatArray, power: float) -> int:
    """Index at which the power of `residual` leaves `power` (minimum of the CUSUM before it has clearly risen)."""
    gain = np.minimum(residual**2 / power, 400.0) * (0.5 * (1.0 - 1.0 / CHANGE_RATIO)) - 0.5 * np.log(CHANGE_RATIO)
    walk = np.concatenate([[0.0], np.cumsum(gain)])
    rise = walk - np.minimum.accumulate(walk)
    clear = np.flatnonzero(rise > min(40.0, 0.9 * float(rise.max())))
    if clear.size == 0:
        return 0
    return int(np.argmin(walk[: clear[0] + 1]))


def second_contact(x: FloatArray, rate: float, onset: int, end: int) -> tuple[int | None, int]:
    """Sample of a second contact within 80 ms of the onset (or None), and the sample where the first one ended."""
    shortest = onset + max(int(SHORTEST_CONTACT_S * rate), 1)
    longest = onset + int(LONGEST_CONTACT_S * rate)
    last = min(end, x.size, onset + int(0.1 * rate))
    order = 32
    if last - longest < 8 * order:
        return None, min(shortest, x.size)
    error_filter = predictor(x[longest:last], order)
    before = max(onset - order, 0)
    residual = np.convolve(x[before:last], error_filter)[order : last - before]
    at = before + order
    width = max(int(0.0003 * rate), 3)
    power = np.convolve(residual**2, np.ones(width) / width, mode="valid")
    later = power[max(longest - at, 0) :]
    typical = float(np.median(later)) + 1e-20
    early = np.flatnonzero(power[: max(longest - at, 0)] > 6.0 * typical)
    contact_end = shortest if early.size == 0 else max(int(early[-1]) + at + width // 2, shortest)
    return None, min(contact_end, x.size)


def is_clipped(x: FloatArray) -> bool:
    """Whether samples pile up at the strike's largest or smallest value, as under a limiter or a full-scale stop.

    Near a natural peak (a parabola) the number of samples within d of it goes as sqrt(d): 2.2 times as many lie in the
    next nine steps as in the first. Under a ceiling nearly all lie in the first.
    """
    largest = float(np.abs(x).max(initial=0.0))
    for side in (x, -x):
        top = float(side.max(initial=0.0))
        step = max(2.0**-15 * 1.05, 1e-5 * top)
        if top < 0.2 * largest or top < 40 * step:
            continue
        near = side > top - 10 * step
        at = side > top - step
        count = int(np.count_nonzero(at))
        if count >= 3 and count > 2 * (int(np.count_nonzero(near)) - count) and bool(np.any(at[1:] & at[:-1])):
            return True
    return False
