"""What happens in the first milliseconds of a strike: its onset to the sample, the contact, a second contact, clipping.

All of it looks at the residual of a linear predictor. The free ring of linear modes is predictable from its own past,
a force that acts on them is not: the residual is large while the contact lasts and again at a bounce.
"""

from __future__ import annotations

import math

import numpy as np
import scipy.fft
import scipy.linalg
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

CHANGE_RATIO = 60.0
"""power ratio for which the change point is tuned: larger is later"""
SHORTEST_CONTACT_S, LONGEST_CONTACT_S = 0.0002, 0.0026
TRAINING_S = 0.15
LONG_ORDER, SHORT_ORDER = 320, 96
"""7 ms at 48 kHz: forty modes and the noise between them; and 2 ms"""
UNSTEADY = 2.0
"""a residual that still decays (a knock's tail) also scatters more: the threshold grows with it up to this factor"""
LEAST_SHARE = 10**-2.9
"""power of a second contact's residual over the first's: a tenth of the force, and a longer contact"""
LATEST_SECOND_S = 0.075
SECOND_WINDOWS_S = (0.0003, 0.001, 0.002, 0.005)
FEWEST = 12
"""samples of a window: fewer scatter too much"""
SECOND_SAMPLES, SECOND_RATIOS = (14, 48, 96, 240, 960), (4.3, 2.6, 2.1, 1.8, 1.6)
"""Power ratio beyond which a window of so many samples holds a second contact.

Measured on simulated strikes at 44.1 to 96 kHz: none of 660 clean ones with three to six modes called double, 2 to 10 %
of those with 240 modes; 239 of 240 bounces of 30 to 90 % of the force at 40 to 60 dB marked, some 94 % of those of 10
to 100 % at 25 to 60 dB. At 8 kHz some 70 %: the predictor is then as long as the gap.
"""


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
    gain = np.minimum(residual**2 / power, 20.0) * (0.5 * (1.0 - 1.0 / CHANGE_RATIO)) - 0.5 * np.log(CHANGE_RATIO)
    walk = np.concatenate([[0.0], np.cumsum(gain)])
    rise = walk - np.minimum.accumulate(walk)
    clear = np.flatnonzero(rise > min(40.0, 0.9 * float(rise.max())))
    if clear.size == 0:
        return 0
    return int(np.argmin(walk[: clear[0] + 1]))


def backward_predictor(x: FloatArray, order: int) -> FloatArray:
    """Error filter [1, b1, ... bp] with e[n] = x[n] + b1 x[n+1] + ... + bp x[n+p], least squares over x (covariance method).

    The matrix of lagged products g(i, j) = sum of y[n+i] y[n+j] over n < m moves along its diagonals by one product in
    and one out, so it costs order * (samples + order) rather than order^2 * samples.
    """
    reversed_x = np.ascontiguousarray(x[::-1])
    rows = reversed_x.size - order
    gram = np.zeros((order + 1, order + 1))
    head = reversed_x[:rows]
    gram[0] = np.correlate(reversed_x, head, mode="valid")
    edges = np.outer(reversed_x[rows : rows + order], reversed_x[rows : rows + order])
    edges -= np.outer(reversed_x[:order], reversed_x[:order])
    for i in range(order):
        np.add(gram[i, :-1], edges[i], out=gram[i + 1, 1:])
    past = np.triu(gram[:-1, :-1])
    ridge = 1e-10 * float(np.trace(past)) / order + np.finfo(float).tiny
    past[np.diag_indices(order)] += ridge
    solution = scipy.linalg.solve(past, gram[:-1, -1], assume_a="pos", check_finite=False, overwrite_a=True)
    out: FloatArray = np.concatenate([[1.0], -solution[::-1]])
    return out


def second_contact(x: FloatArray, rate: float, onset: int, end: int) -> tuple[int | None, int]:
    """Sample of a second contact 3 to 75 ms after the onset (or None), and the sample where the first one ended.

    A predictor that runs backward in time, trained on the ring after the first contact, is silent from the end of a
    contact on: what is loud after LONGEST_CONTACT_S is another one, to be confirmed by `_confirmed`.
    """
    shortest = min(onset + max(int(SHORTEST_CONTACT_S * rate), 1), x.size)
    factor = max(int(rate / 44000.0), 1)
    last = min(end, x.size, onset + int(TRAINING_S * rate))
    ring = x[onset : onset + (last - onset) // factor * factor].reshape(-1, factor).mean(axis=1)
    ring_rate = rate / factor
    skip = int(LONGEST_CONTACT_S * ring_rate)
    if ring.size < 0.03 * ring_rate:
        return None, shortest
    residual, floor = _backward_residual(ring, skip, LONG_ORDER, 10)
    contact_end = min(max(onset + _first_contact(residual, ring_rate, skip, floor) * factor, shortest), x.size)
    second = None
    if _latest_force(residual, floor, ring_rate, skip) is not None:
        second = _confirmed(ring, ring_rate, skip)
    return (None if second is None else onset + second * factor), contact_end


def _confirmed(ring: FloatArray, rate: float, skip: int) -> int | None:
    """The second look: index of the second contact, or None.

    First with a predictor twice as long (a dense ring outlasts the short one), then with two trained on what comes
    after a knock, of which either must agree, the second contact being no tick beside the first.
    """
    if _latest_force(*_backward_residual(ring, skip, 2 * LONG_ORDER, 8), rate, skip) is None:
        return None
    for longest, from_s in ((LONG_ORDER, 0.012), (SHORT_ORDER, 0.008)):
        residual, floor = _backward_residual(ring, int(from_s * rate), longest, 10)
        second = _latest_force(residual, floor, rate, skip)
        if second is not None and _share(residual, rate, skip, second) > LEAST_SHARE:
            return second
    return None


def _share(residual: FloatArray, rate: float, skip: int, second: int) -> float:
    """Power of the second contact over that of the first, both above the median."""
    width = max(int(0.0006 * rate), 4)
    sums = np.concatenate([[0.0], np.cumsum(residual**2)])
    power = (sums[width:] - sums[:-width]) / width
    typical = float(np.median(power[skip : int(LATEST_SECOND_S * rate)]))
    around = power[max(second - width, skip) : second + int(0.003 * rate)]
    first = float(power[:skip].max()) - typical
    return (float(around.max(initial=0.0)) - typical) / first if first > 0.0 else 1.0


def _backward_residual(ring: FloatArray, train_from: int, longest: int, samples_each: int) -> tuple[FloatArray, float]:
    """Residual of the backward predictor trained on ring[train_from:], and the power that rounding alone leaves in it.

    Its order is `longest`, or less to leave `samples_each` samples a coefficient.
    """
    order = max(min(longest, (ring.size - train_from) // samples_each), 4)
    error_filter = backward_predictor(ring[train_from:], order)
    length = scipy.fft.next_fast_len(ring.size + order, real=True)
    spectrum = scipy.fft.rfft(ring, length) * np.conj(scipy.fft.rfft(error_filter, length))
    residual: FloatArray = scipy.fft.irfft(spectrum, length)[: ring.size - order]
    return residual, _rounding_power(ring) * float(error_filter @ error_filter)


def _first_contact(residual: FloatArray, rate: float, skip: int, floor: float) -> int:
    """Index where the first contact's force has ended: the residual is down to what it is just after LONGEST_CONTACT_S."""
    width = max(int(0.0002 * rate), 2)
    power = np.convolve(residual[: 5 * skip] ** 2, np.ones(width) / width, mode="valid")
    quiet = float(np.median(power[skip:])) + floor if power.size > skip else floor
    early = np.flatnonzero(power[:skip] > 8.0 * quiet)
    return 0 if early.size == 0 else int(early[-1]) + width // 2


def _latest_force(residual: FloatArray, floor: float, rate: float, skip: int) -> int | None:
    """Index of a rise of the residual's power after `skip`, or None.

    It is held against the 12 ms that follow (a residual may decay slowly), against the least of what came before (a
    knock that dies away does not rise again) and against the median.
    """
    sums = np.concatenate([[0.0], np.cumsum(residual**2)])
    stop = min(int(LATEST_SECOND_S * rate), sums.size - 1)
    short = max(int(0.0006 * rate), FEWEST)
    after = max(int(0.012 * rate), 8)
    start = max(int(0.0003 * rate), 1)
    if sums.size < start + short + after + 2 * skip:
        return None
    before = np.minimum.accumulate((sums[short:] - sums[:-short])[start:] / short)
    best, found = 1.0, None
    for width_s in SECOND_WINDOWS_S:
        width = max(int(width_s * rate), FEWEST)
        alike = width * (48e3 / rate) ** 0.4  # fewer samples, but also fewer windows to be wrong in
        threshold = float(np.interp(np.log(alike), np.log(SECOND_SAMPLES), SECOND_RATIOS))
        n = np.arange(max(skip, start + short), min(stop, sums.size - width - after))
        if n.size < 2 * width:
            continue
        power = (sums[n + width] - sums[n]) / width
        following = (sums[n + width + after] - sums[n + width]) / after
        typical = float(np.median(power)) + floor + np.finfo(float).tiny
        earlier = before[n - short - start]
        unsteady = np.clip(earlier / typical, 1.0, UNSTEADY)
        ratio = power / (np.maximum(np.maximum(earlier, following) + floor, typical) * unsteady * threshold)
        top = int(np.argmax(ratio))
        if ratio[top] > best:
            best, found = float(ratio[top]), int(n[top])
    return found


def _rounding_power(x: FloatArray) -> float:
    """Power of rounding to the samples' smallest step (negligible when they are not coarsely quantised)."""
    steps = np.abs(np.diff(x))
    steps = steps[steps > 1e-9]
    return float(steps.min()) ** 2 / 12.0 if steps.size else 1e-20


def is_clipped(x: FloatArray) -> bool:
    """Whether samples pile up at the strike's largest or smallest value, as under a limiter or a full-scale stop.

    Near a natural peak (a parabola) the number of samples within d of it goes as sqrt(d), so that the first step holds
    a tenth of those within a hundred; under a ceiling it holds most. Coarse samples (below a hundred steps) are not
    judged.
    """
    largest = float(np.abs(x).max(initial=0.0))
    step = max(2.0**-15, math.sqrt(12.0 * _rounding_power(x))) * 1.05
    for side in (x, -x):
        top = float(side.max(initial=0.0))
        if top < 0.2 * largest or top < 100.0 * step:
            continue
        at = side > top - step
        count = int(np.count_nonzero(at))
        near, wide = (int(np.count_nonzero(side > top - n * step)) for n in (10, 100))
        if count >= 4 and count > 2 * (near - count) and count > 0.4 * wide and bool(np.any(at[1:] & at[:-1])):
            return True
    return False
