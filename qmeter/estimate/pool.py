"""The same mode across strikes and mountings: matched, weighed and pooled, the parts of its uncertainty kept apart.

The model: what strike i of mounting j reads is y = mu + c_j + b_ij + e_ij + m, with c the effect of the mounting, b that of the strike,
e the noise of the fit (its variance stated by the fit), m what the fitted model leaves out, common to all strikes. So in the mean the
fit's part falls with the number of strikes and the model's does not.

Between-strike and between-mounting variance: the moment equation of R. C. Paule and J. Mandel, "Consensus values and weighting factors",
J. Res. Natl. Bur. Stand. 87 (1982) 377 (from memory), so that one strike with a tiny stated u does not rule where the scatter shows it
wrong. Where the scatter dwarfs the fits' noise it gives the type A evaluation of GUM 4.2. Where the two are alike, a variance found as a
difference is too small more often than too large, and with three strikes the intervals would hold in 87 % only: there the equation's
right-hand side is lowered from the mean of chi-squared towards its lower third, by which intervals hold in 92 to 98 % for any ratio of
scatter to noise from three strikes on (tests/test_pool.py).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from statistics import median

import numpy as np
import numpy.typing as npt

from qmeter.estimate.match import Group, match
from qmeter.estimate.modes import Doubt, Measurement, Mode, Spread
from qmeter.uncertainty import rectangular

Array = npt.NDArray[np.float64]

_LOWER_POINT = 1.0 / 3.0
"""of chi-squared: where the between-variance is found as a small difference, it is taken from here"""
_SEVERAL = 5
"""the number of strikes the advice speaks of"""
_STRONG_SNR_DB = 25.0
"""a mode of few strikes is kept from here on"""
_STRONG_RELATIVE_U95 = 0.2
"""and when its decay rate is known this well"""
_SHOULD_SHOW_SNR_DB = 15.0
"""a strike in which a mode would have stood lower than this says nothing against it"""


@dataclass(frozen=True, slots=True)
class Pooled:
    """A weighted mean of readings of one quantity: the weight of each, and the variances that were found."""

    value: float
    weights: Array
    """of each reading in `value`; their sum is 1"""
    scatter_variance: float
    """of one strike within a mounting"""
    mounting_variance: float
    """of one mounting"""
    mounting_weights: Array
    """of each mounting, in the order of their first reading"""


# ---- the numbers ----


def between_variance(values: Array, variances: Array, groups: npt.NDArray[np.intp] | None = None) -> float:
    """Variance of the true values behind `values` beyond the stated `variances`, common to all groups; 0 where none shows.

    `values`, `variances`: (n,); `groups`: (n,) index of the group whose mean each value scatters about (None: one group). Solves
    sum w (y - mean)^2 = nu - (nu - c) sqrt(v/(v + result)), w = 1/(variance + result), nu = n - number of groups, c the 1/3 quantile of
    chi-squared at nu, v the harmonic mean of the variances (Paule and Mandel 1982, eq. 9, where c = nu). With nu = 0 the answer is 0.
    """
    by_group: dict[int, list[tuple[float, float]]] = {}
    for value, variance, group in zip(values.tolist(), variances.tolist(), [0] * values.size if groups is None else groups, strict=True):
        by_group.setdefault(int(group), []).append((value, variance))
    degrees = values.size - len(by_group)
    if degrees < 1:
        return 0.0
    from scipy.special import chdtri

    lowered = degrees - float(chdtri(degrees, 1.0 - _LOWER_POINT))
    typical = 1.0 / float(np.mean(1.0 / variances))

    def excess(between: float) -> float:
        # a handful of readings: plain sums are faster than arrays
        total = 0.0
        for members in by_group.values():
            weights = [1.0 / (variance + between) for _, variance in members]
            mean = sum(w * y for w, (y, _) in zip(weights, members, strict=True)) / sum(weights)
            total += sum(w * (y - mean) ** 2 for w, (y, _) in zip(weights, members, strict=True))
        return total - degrees + lowered * math.sqrt(typical / (typical + between))

    spread = float(np.ptp(values)) ** 2
    if spread == 0.0 or excess(0.0) <= 0.0:
        return 0.0
    low, high = 0.0, spread
    while excess(high) > 0.0:
        high *= 2.0
    while high - low > 1e-5 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) > 0.0 else (low, middle)
    return high


def pool_values(values: Array, fit_variances: Array, model_variances: Array, mountings: npt.NDArray[np.intp]) -> Pooled:
    """Random-effects mean of one quantity over strikes within mountings, then over mountings.

    All of shape (n,); `mountings` numbers each reading's mounting. The model's variance lowers the weight of a strike that says it fits
    badly; it is no part of the scatter, which shows in the values.
    """
    fit = np.maximum(fit_variances, _tiny(values))
    scatter = between_variance(values, fit, mountings)
    labels = list(dict.fromkeys(mountings.tolist()))
    inner = 1.0 / (fit + model_variances + scatter)
    members = [mountings == label for label in labels]
    within = np.zeros((len(labels), values.size))
    for row, member in zip(within, members, strict=True):
        row[member] = inner[member] / np.sum(inner[member])
    means = within @ values
    variances = within**2 @ (fit + scatter)
    mounting = between_variance(means, variances)
    outer = 1.0 / (variances + within @ model_variances + mounting)
    outer /= np.sum(outer)
    weights = outer @ within
    return Pooled(float(weights @ values), weights, scatter, mounting, outer)


def _tiny(values: Array) -> float:
    """A variance far below any that a recording could bear out: keeps a stated zero from dividing."""
    return max((1e-12 * float(np.max(np.abs(values)))) ** 2, 1e-300)


def _pool_group(modes: Sequence[Mode], mountings: npt.NDArray[np.intp], clock_ppm: float) -> tuple[float, float, dict[str, Spread]]:
    """Frequency, decay rate and budget of one mode read one or several times."""
    if len(modes) == 1:
        (mode,) = modes
        frequency_hz, decay_rate_per_s = mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s
        own = {name: part for name, part in mode.budget.items() if name in ("fit", "model")}
        return frequency_hz, decay_rate_per_s, own | clock_part(frequency_hz, decay_rate_per_s, clock_ppm)
    frequency, decay = (np.array([getattr(m, name) for m in modes]) for name in ("damped_frequency_hz", "amplitude_decay_rate_per_s"))
    fit, model = (_covariances(modes, name) for name in ("fit", "model"))
    f = pool_values(frequency, fit[:, 0], model[:, 0], mountings)
    a = pool_values(decay, fit[:, 1], model[:, 1], mountings)
    budget = {
        "fit": Spread(
            float(f.weights**2 @ fit[:, 0]),
            float(a.weights**2 @ fit[:, 1]),
            float((f.weights * a.weights) @ fit[:, 2]),
            _degrees(modes, "fit"),
        )
    }
    if any("model" in mode.budget for mode in modes):
        budget["model"] = _common(f.weights, a.weights, model, _degrees(modes, "model"))
    count, held = len(modes), f.mounting_weights.size
    if count > held:
        offsets = _within(frequency, mountings), _within(decay, mountings)
        excess = float(offsets[0] @ offsets[1]) / (count - held) - float(np.mean(fit[:, 2]))
        budget["scatter"] = _random(f.scatter_variance, a.scatter_variance, excess, f.weights, a.weights, count - held)
    if held > 1:
        means = [np.array([np.mean(y[mountings == label]) for label in dict.fromkeys(mountings.tolist())]) for y in (frequency, decay)]
        excess = float(np.cov(means[0], means[1])[0, 1])
        budget["mounting"] = _random(f.mounting_variance, a.mounting_variance, excess, f.mounting_weights, a.mounting_weights, held - 1)
    return f.value, a.value, budget | clock_part(f.value, a.value, clock_ppm)


def clock_part(frequency_hz: float, decay_rate_per_s: float, clock_ppm: float) -> dict[str, Spread]:
    """The sample clock's part: rectangular of half-width `clock_ppm`, one relative error for f and decay rate, so Q is immune; or none."""
    if clock_ppm == 0.0:
        return {}
    relative = rectangular(1e-6 * clock_ppm) ** 2
    return {"clock": Spread(relative * frequency_hz**2, relative * decay_rate_per_s**2, relative * frequency_hz * decay_rate_per_s)}


def _covariances(modes: Sequence[Mode], name: str) -> Array:
    """(n, 3): variance of f, variance of the decay rate, covariance; 0 where a mode has no such part."""
    parts = (mode.budget.get(name, Spread(0.0, 0.0)) for mode in modes)
    return np.array([(part.frequency_variance, part.decay_variance, part.covariance) for part in parts])


def _degrees(modes: Sequence[Mode], name: str) -> float:
    """Degrees of freedom of a part stated by every strike; strikes add theirs where they are independent, here the least is taken."""
    return min(mode.budget[name].degrees_of_freedom for mode in modes if name in mode.budget)


def _within(values: Array, mountings: npt.NDArray[np.intp]) -> Array:
    """Each value less the mean of its mounting."""
    means = {label: float(np.mean(values[mountings == label])) for label in set(mountings.tolist())}
    centres: Array = np.array([means[label] for label in mountings.tolist()])
    return values - centres


def _common(weights_f: Array, weights_a: Array, model: Array, degrees: float) -> Spread:
    """An error common to all strikes: its standard uncertainties add in proportion to the weights, and do not fall with their number."""
    u_f, u_a = float(weights_f @ np.sqrt(model[:, 0])), float(weights_a @ np.sqrt(model[:, 1]))
    size = np.sqrt(model[:, 0] * model[:, 1])
    correlation = np.divide(model[:, 2], size, out=np.zeros_like(size), where=size > 0.0)
    return Spread(u_f**2, u_a**2, float(weights_a @ correlation) * u_f * u_a, degrees)


def _random(variance_f: float, variance_a: float, covariance: float, weights_f: Array, weights_a: Array, degrees: int) -> Spread:
    """A random effect in the weighted mean; the covariance found is held within what the two variances allow."""
    bound = 0.99 * math.sqrt(variance_f * variance_a)
    held = min(max(covariance, -bound), bound)
    return Spread(
        variance_f * float(weights_f @ weights_f),
        variance_a * float(weights_a @ weights_a),
        held * float(weights_f @ weights_a),
        float(degrees),
    )


# ---- from strikes to modes ----


def pool_readings(readings: Sequence[tuple[Mode, ...]], *, clock_ppm: float) -> tuple[Mode, ...]:
    """The modes of one recording, from the modes of each accepted strike of it: one mounting; strongest first.

    A mode that most strikes ought to have shown but few did is kept, and doubted, when it was strong and well determined there; else
    it is left out. `strikes` says how many carried it.
    """
    return _pool(readings, [0] * len(readings), clock_ppm)


def pool_measurements(
    measurements: Sequence[Measurement], mountings: Sequence[str] | None, *, clock_ppm: float
) -> tuple[tuple[Mode, ...], tuple[Doubt, ...]]:
    """The modes of one object from several recordings, and what is to be doubted about the whole.

    `mountings`: the way of holding each recording belongs to, by name, as many as recordings; None: all one. Accepted strikes are
    pooled; a recording with none that was accepted gives those that it has. Raises UsageError for an unequal number of names.
    """
    from qmeter.errors import UsageError

    if mountings is not None and len(mountings) != len(measurements):
        raise UsageError(f"{len(mountings)} mountings were named for {len(measurements)} recordings; name one for each, in their order.")
    numbers = {name: number for number, name in enumerate(dict.fromkeys(mountings or ()))}
    readings: list[tuple[Mode, ...]] = []
    held: list[int] = []
    for place, measurement in enumerate(measurements):
        accepted = [strike.modes for strike in measurement.strikes if strike.accepted and strike.modes]
        found = accepted or [strike.modes for strike in measurement.strikes if strike.modes]
        readings += found
        held += [numbers[mountings[place]] if mountings is not None else 0] * len(found)
    modes = _pool(readings, held, clock_ppm)
    return modes, measurement_doubts(len(readings), len(set(held)), modes)


def _pool(readings: Sequence[tuple[Mode, ...]], mountings: Sequence[int], clock_ppm: float) -> tuple[Mode, ...]:
    if not any(readings):
        return ()
    groups = match(readings, mountings)
    gains = _gains_db(groups, len(readings))
    modes = [mode for group in groups if (mode := _pool_one(group, mountings, gains, clock_ppm)) is not None]
    top = max(mode.level_dbfs for mode in modes) if modes else 0.0
    modes.sort(key=lambda mode: -mode.level_dbfs)
    return tuple(replace(mode, level_db=mode.level_dbfs - top) for mode in modes)


def _pool_one(group: Group, mountings: Sequence[int], gains_db: Array, clock_ppm: float) -> Mode | None:
    """One mode from the strikes that carried it; None where it is too weak a find in too few of them."""
    by_strike = group.modes
    strikes, members = list(by_strike), list(by_strike.values())
    strongest = max(members, key=lambda mode: abs(mode.amplitude))
    snr_db = max(by_strike[strike].snr_db - gains_db[strike] for strike in strikes)
    ought = {strike for strike in range(gains_db.size) if snr_db + gains_db[strike] >= _SHOULD_SHOW_SNR_DB} | set(strikes)
    doubts = merged_doubts(members)
    if 2 * len(strikes) <= len(ought):
        if not _is_strong(strongest):
            return None
        doubts += (_seldom(len(strikes), len(ought)),)
    if group.splits:
        doubts += (_split(group.splits, gains_db.size),)
    held = np.array([mountings[strike] for strike in strikes], dtype=np.intp)
    frequency, decay, budget = _pool_group(members, held, clock_ppm)
    return replace(
        strongest,
        damped_frequency_hz=frequency,
        amplitude_decay_rate_per_s=decay,
        budget=budget,
        strikes=len(strikes),
        doubts=tuple({doubt.code: doubt for doubt in doubts}.values()),
    )


def _is_strong(mode: Mode) -> bool:
    u95 = mode.decay_rate_per_s.u95
    return mode.snr_db >= _STRONG_SNR_DB and u95 is not None and u95 <= _STRONG_RELATIVE_U95 * mode.amplitude_decay_rate_per_s


def _gains_db(groups: Sequence[Group], strikes: int) -> Array:
    """How far each strike stands above the noise, relative to the others, from the modes they share: (strikes,) in dB."""
    gains = np.zeros(strikes)
    shared = [group.modes for group in groups if len(group.reads) > 1]
    for _ in range(3 if shared else 0):
        levels = [sum(mode.snr_db - gains[strike] for strike, mode in modes.items()) / len(modes) for modes in shared]
        for strike in range(strikes):
            away = [modes[strike].snr_db - level for modes, level in zip(shared, levels, strict=True) if strike in modes]
            gains[strike] = median(away) if away else gains[strike]
    return gains


def merged_doubts(modes: Sequence[Mode]) -> tuple[Doubt, ...]:
    """Doubts that more than half of the strikes raise of one mode, each in the words of the strike with the largest u95."""
    worst_first = sorted(modes, key=lambda mode: -_relative_u(mode))
    said: dict[str, list[Doubt]] = {}
    for mode in worst_first:
        for code in dict.fromkeys(doubt.code for doubt in mode.doubts):
            said.setdefault(code, []).append(next(doubt for doubt in mode.doubts if doubt.code == code))
    return tuple(doubts[0] for doubts in said.values() if 2 * len(doubts) > len(modes))


def _relative_u(mode: Mode) -> float:
    u95 = mode.decay_rate_per_s.u95
    return math.inf if u95 is None else u95 / mode.amplitude_decay_rate_per_s


# ---- sentences ----


def _seldom(carried: int, ought: int) -> Doubt:
    return Doubt(
        "few-strikes",
        f"Seen in {carried} of {ought} strikes that were loud enough to show it: the others may have met its nodal line, or it is "
        "not of the object. Strike elsewhere, or hold it differently, and see whether it stays.",
    )


def _split(splits: int, strikes: int) -> Doubt:
    return Doubt(
        "close-pair",
        f"{splits} of {strikes} strikes read this mode as a close pair and the others as one; the single reading is given. A strike nearer "
        "to where only one of the two moves would tell.",
    )


def measurement_doubts(strikes: int, mountings: int, modes: Sequence[Mode]) -> tuple[Doubt, ...]:
    """What the numbers of strikes and of mountings leave open, with what more of them would bring; () where nothing was measured."""
    if not modes or strikes < 1:
        return ()
    doubts: list[Doubt] = []
    if strikes == 1:
        says = "One strike only: how far the next would differ is not known, and u95 leaves it out."
        doubts.append(Doubt("single-strike", f"{says} {_more(modes[0])}"))
    elif strikes == 2:
        says = "Two strikes only: the scatter from two readings is hardly known (Student's t is 12.7)."
        doubts.append(Doubt("few-strikes", f"{says} {_more(modes[0])}"))
    if mountings <= 1:
        says = "One way of holding only: what the support adds to the losses was not tested, and u95 leaves it out."
        more = "Hang or support the object anew, two or three times, with three strikes each, and pool with --mounting."
        doubts.append(Doubt("single-mounting", f"{says} {more}"))
    elif mountings == 2:
        says = "Two mountings only: the spread from two is hardly known (Student's t is 12.7)."
        doubts.append(Doubt("few-mountings", f"{says} {_another_mounting(modes[0])}"))
    return tuple(doubts)


def _more(mode: Mode) -> str:
    """What five strikes would bring for the strongest mode, as far as what was read foretells it."""
    advice = "Take at least three, better five"
    now, then = mode.q.u95, foretell(mode, ("fit", "scatter"), mode.strikes, _SEVERAL)
    if now is None or then is None:
        return f"{advice}."
    provided = "they scatter no more than the fit says" if mode.strikes == 1 else "the rest scatter alike"
    return f"{advice}: {_from_to(mode, now, then)} if {provided}."


def _another_mounting(mode: Mode) -> str:
    now, then = mode.q.u95, foretell(mode, ("fit", "scatter", "mounting"), 2, 3)
    return (
        "Take a third." if now is None or then is None else f"Take a third: {_from_to(mode, now, then)} if it differs no more than these."
    )


def _from_to(mode: Mode, now: float, then: float) -> str:
    q = mode.q.value
    return f"u95 of Q at {mode.damped_frequency_hz:.4g} Hz, now {100 * now / q:.2g} %, would be about {100 * then / q:.2g} %"


def foretell(mode: Mode, parts: Sequence[str], have: int, want: int) -> float | None:
    """u95 of Q if these parts of the budget fall as 1/sqrt(n) from `have` to `want` strikes (or mountings), and the others stay."""
    ratio = have / want

    def fallen(name: str, part: Spread) -> Spread:
        if name not in parts:
            return part
        degrees = part.degrees_of_freedom if name == "fit" else part.degrees_of_freedom * (want - 1) / max(have - 1, 1)
        return Spread(ratio * part.frequency_variance, ratio * part.decay_variance, ratio * part.covariance, degrees)

    return replace(mode, budget={name: fallen(name, part) for name, part in mode.budget.items()}).q.u95
