"""Hold one measurement against the truth of its case: plain numbers, one dictionary a case, for the table to gather."""

from __future__ import annotations

import dataclasses
import math
import time
from typing import Any

import numpy as np

from tests.bench.bounds import joint_bound
from tests.bench.case import Case, Truth


def match(truths: tuple[Truth, ...], estimates: list[Any]) -> dict[int, int]:
    """truth index -> estimate index, each used once: counted modes first, then the nearest (in units of the truth's reach)."""
    links = sorted(
        (not t.counts, abs(e.damped_frequency_hz - t.damped_frequency_hz) / t.reach_hz, i, j)
        for i, t in enumerate(truths)
        for j, e in enumerate(estimates)
        if abs(e.damped_frequency_hz - t.damped_frequency_hz) <= t.reach_hz
    )
    found: dict[int, int] = {}
    for _, _, i, j in links:
        if i not in found and j not in found.values():
            found[i] = j
    return found


def invented(case: Case, estimates: list[Any], found: dict[int, int]) -> list[float]:
    """Frequencies of reports that no planted mode accounts for."""
    if not case.judges_inventions:
        return []
    used = set(found.values())
    strays = []
    for j, e in enumerate(estimates):
        f = e.damped_frequency_hz
        if case.invented_is_strays:
            if not any(abs(f - t.damped_frequency_hz) <= 0.5 * t.width_hz for t in case.modes):
                strays.append(f)
        elif j not in used:
            strays.append(f)
    return strays


def reported_modes(case: Case, result: Any) -> list[Any]:
    """The pooled modes; where a real recording was taken for several strikes, those of the strike in which the mode was put.

    A mode rings on into the strikes after it: what that strike does not show of it, a later one may.
    """
    if case.judges_inventions or len(result.strikes) < 2:
        return list(result.modes)
    onset_s = case.onset / case.rate_hz
    nearest = min(range(len(result.strikes)), key=lambda i: abs(result.strikes[i].onset_s - onset_s))
    for strike in result.strikes[nearest:]:
        near = [m for m in strike.modes if any(abs(m.damped_frequency_hz - t.damped_frequency_hz) <= t.reach_hz for t in case.modes)]
        if near:
            return list(strike.modes)
    return list(result.strikes[nearest].modes) or list(result.modes)


def doubt_codes(measurement: Any, modes: list[Any]) -> set[str]:
    """Every doubt code on the measurement, its strikes and these modes."""
    codes = {d.code for d in measurement.doubts}
    codes |= {d.code for s in measurement.strikes for d in s.doubts}
    return codes | {d.code for m in modes for d in m.doubts}


def case_bound(case: Case) -> tuple[np.ndarray, np.ndarray] | None:
    """Joint bound of the case's modes, or None where it has none."""
    if case.density is None or not case.modes:
        return None
    f = np.array([m.damped_frequency_hz for m in case.modes])
    a = np.array([m.decay_rate_per_s for m in case.modes])
    c = np.array([m.amplitude for m in case.modes])
    return joint_bound(f, a, c, case.rate_hz, case.ring_samples, case.density)


def figure_u(figure: Any) -> float:
    """Standard uncertainty behind a stated figure: u95 / k, or from its parts where k is not given."""
    if figure.u95 is None:
        return math.nan
    k = getattr(figure, "k", None)
    return float(figure.u95 / k) if k else float(figure.u95 / 1.959964)


def covered(figure: Any, true_value: float) -> bool | None:
    """Whether the stated interval holds the truth; None where no interval is stated."""
    return None if figure.u95 is None else bool(abs(figure.value - true_value) <= figure.u95)


def judge_mode(case: Case, i: int, e: Any, bound: tuple[np.ndarray, np.ndarray] | None) -> dict[str, Any]:
    """One counted mode that was found."""
    t = case.modes[i]
    q = e.q
    true_f, true_q = t.damped_frequency_hz, t.q
    if case.true_pole is not None and e.trace is not None:  # what is stated holds for the stretch that was fitted
        true_f, true_a = case.true_pole(e.trace.fit_from_s, e.trace.fit_to_s)
        true_q = Truth(true_f, true_a, 1.0).q
    row: dict[str, Any] = {
        "q_error": q.value / true_q - 1.0,
        "f_error": e.damped_frequency_hz / true_f - 1.0,
        "covers_q": covered(q, true_q),
        "covers_f": covered(e.frequency_hz, true_f),
        "u95_q": math.nan if q.u95 is None else q.u95 / q.value,
        "parts_q": dataclasses.asdict(q.parts) if q.parts is not None else {},
        "doubts": sorted({d.code for d in e.doubts}),
    }
    if bound is not None:
        u_a = figure_u(e.decay_rate_per_s)
        u_f = figure_u(e.frequency_hz)
        row |= {
            "a_norm": (e.amplitude_decay_rate_per_s - t.decay_rate_per_s) / bound[1][i],
            "f_norm": (e.damped_frequency_hz - t.damped_frequency_hz) / bound[0][i],
            "u_over_bound": u_a / bound[1][i],
            "uf_over_bound": u_f / bound[0][i],
        }
    return row


def judge(case: Case, measure: Any) -> dict[str, Any]:
    """Measure the case and say what came of it. A crash is recorded, not raised: it counts as everything missed."""
    from qmeter.errors import NothingRangError

    record: dict[str, Any] = {"index": case.index, "seed": case.seed, "modes": [], "notes": dict(case.notes)}
    started = time.perf_counter()
    estimates: list[Any] = []
    codes: set[str] = set()
    try:
        result = measure(case.samples, case.rate_hz)
        estimates = reported_modes(case, result)
        codes = doubt_codes(result, estimates)
        record["strikes"] = len(result.strikes)
    except NothingRangError:
        pass
    except Exception as error:  # noqa: BLE001 - the bench reports crashes of any kind
        record["crash"] = f"{type(error).__name__}: {error}"
    record["seconds"] = time.perf_counter() - started
    found = match(case.modes, estimates)
    bound = case_bound(case)
    for i, t in enumerate(case.modes):
        if not t.counts:
            continue
        row: dict[str, Any] = {"f": t.damped_frequency_hz, "q": t.q, "group": t.group, "found": i in found}
        if bound is not None:
            row["bound_q"] = bound[1][i] / t.decay_rate_per_s
        if case.known_lines_hz:
            row["line_widths"] = min(abs(t.damped_frequency_hz - x) for x in case.known_lines_hz) / t.width_hz
        if i in found:
            row |= judge_mode(case, i, estimates[found[i]], bound)
        record["modes"].append(row)
    record["invented"] = invented(case, estimates, found)
    record["reported"] = [(float(e.damped_frequency_hz), float(e.q.value)) for e in estimates]
    if case.known_lines_hz:
        used = set(found.values())
        free = [e.damped_frequency_hz for j, e in enumerate(estimates) if j not in used]
        record["lines_reported"] = sum(any(abs(f - x) < 0.5 for x in case.known_lines_hz) for f in free)
    if case.expect_doubt:
        record["doubt_there"] = case.expect_doubt in codes
    record["codes"] = sorted(codes)
    return record
