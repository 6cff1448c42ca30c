"""Gather the judged cases of a family into the figures of its row, and print them beside the floor and the aim."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np


@dataclass(frozen=True)
class Limit:
    """What a figure must hold: at least `low`, at most `high` (the floor), and the aim beyond which nothing is asked."""

    low: float = -math.inf
    high: float = math.inf
    aim: float | None = None

    def holds(self, value: float) -> bool:
        """A figure that could not be formed (NaN) does not hold."""
        return self.low <= value <= self.high

    def may_be_chance(self, percent: float, of: float) -> bool:
        """Whether a share (in per cent, of so many) lies within its own 95 % sampling error of the limit (Wilson's interval)."""
        if not (of > 0 and math.isfinite(percent)):
            return False
        p, z2 = percent / 100.0, 1.96**2
        centre = (p + z2 / (2 * of)) / (1 + z2 / of)
        half = math.sqrt(z2 * (p * (1 - p) / of + z2 / (4 * of * of))) / (1 + z2 / of)
        return 100 * (centre + half) >= self.low and 100 * (centre - half) <= self.high

    def words(self) -> str:
        """As printed beside the figure."""
        bounds = []
        if self.low > -math.inf:
            bounds.append(f">={self.low:g}")
        if self.high < math.inf:
            bounds.append(f"<={self.high:g}")
        text = " ".join(bounds)
        return f"{text}, aim {self.aim:g}" if self.aim is not None else text


U_MEDIAN, U_LEAST = Limit(high=1.2), Limit(low=0.85)


SAMPLE_OF = {
    "found %": "modes",
    "all found %": "cases",
    "split %": "cases",
    "covers Q %": "modes found",
    "covers f %": "modes found",
    "doubt there %": "cases",
    "bounces marked %": "bounces",
}
"""Shares, and the figure that says of how many: a small run is told from a missed floor by the sampling error of the share."""


def _covers(low: float, high: float) -> dict[str, Limit]:
    return {"covers Q %": Limit(low, high), "covers f %": Limit(low, high)}


STATED = {"u/bound median": U_MEDIAN, "u/bound least": U_LEAST, "u(f)/bound median": U_MEDIAN, "u(f)/bound least": U_LEAST}

LIMITS: dict[str, dict[str, Limit]] = {
    "one": {"found %": Limit(99), "rms/bound": Limit(high=1.25, aim=1.05), **_covers(93, 98), **STATED},
    "plate": {"found %": Limit(99), "invented": Limit(high=0.02), "rms Q %": Limit(high=0.3), **_covers(92, 98)},
    "bar": {
        "found %": Limit(99),
        "invented": Limit(high=0.01),
        "rms/bound": Limit(high=1.3, aim=1.05),
        **_covers(93, 98),
        **STATED,
    },
    "pairs": {"all found %": Limit(95), "rms/bound": Limit(high=1.4, aim=1.05), **_covers(92, 98), **STATED},
    "pairs25": {},
    "lone": {"split %": Limit(high=1.0), **STATED},
    "lowq": {"found %": Limit(99), "rms/bound": Limit(high=1.4, aim=1.15), **_covers(92, 98), **STATED},
    "hum": {"found %": Limit(99), "lines reported": Limit(high=0.0)},
    "outlast": {**_covers(93, 98), "doubt there %": Limit(low=100.0), **STATED},
    "struck": {"found %": Limit(98), **_covers(90, 98), "bounces marked %": Limit(98)},
    "dense": {
        "found %": Limit(92, aim=97),
        "invented": Limit(high=0.1),
        "covers Q %": Limit(91, aim=95),
        "covers f %": Limit(91, aim=95),
    },
    "drift": {"doubt there %": Limit(90, aim=98), "invented": Limit(high=0.1), "covers Q %": Limit(85, aim=93)},
    "clutter 3-8 dB": {"found %": Limit(75, aim=90), **_covers(92, 99), "median u95(Q) %": Limit(high=15, aim=5)},
    "clutter 8-15 dB": {"found %": Limit(92, aim=97), **_covers(92, 99), "median u95(Q) %": Limit(high=2.5, aim=1)},
    "clutter >15 dB": {"found %": Limit(97, aim=99), **_covers(92, 99), "median u95(Q) %": Limit(high=1, aim=0.5)},
    "nothing": {"reported": Limit(high=0.0)},
}


def _share(flags: list[bool]) -> float:
    return 100.0 * sum(flags) / len(flags) if flags else math.nan


def _rms(values: np.ndarray) -> float:
    return float(np.sqrt(np.mean(values**2))) if values.size else math.nan


def _column(rows: list[dict[str, Any]], name: str) -> np.ndarray:
    values = np.array([row[name] for row in rows if row.get(name) is not None], dtype=np.float64)
    return values[np.isfinite(values)]


def _normalised(rows: list[dict[str, Any]]) -> dict[str, float]:
    """Errors and stated uncertainties over the bound, of decay rate and of frequency."""
    a, f = _column(rows, "a_norm"), _column(rows, "f_norm")
    if not a.size:
        return {}
    u, uf = _column(rows, "u_over_bound"), _column(rows, "uf_over_bound")
    figures = {
        "rms/bound": _rms(a),
        "robust/bound": float(1.4826 * np.median(np.abs(a))),
        "rms(f)/bound": _rms(f),
        "robust(f)/bound": float(1.4826 * np.median(np.abs(f))),
    }
    if u.size:
        figures |= {"u/bound median": float(np.median(u)), "u/bound least": float(u.min()), "u below 0.85 %": _share(list(u < 0.85))}
    if uf.size:
        figures |= {"u(f)/bound median": float(np.median(uf)), "u(f)/bound least": float(uf.min())}
    return figures


def _coverage(rows: list[dict[str, Any]]) -> dict[str, float]:
    """Share of stated intervals that hold; one that is not stated (u95 null) is counted beside, not inside."""
    q = [bool(r["covers_q"]) for r in rows if r["covers_q"] is not None]
    f = [bool(r["covers_f"]) for r in rows if r["covers_f"] is not None]
    return {
        "covers Q %": _share(q),
        "covers f %": _share(f),
        "median u95(Q) %": float(100 * np.median(_column(rows, "u95_q"))) if _column(rows, "u95_q").size else math.nan,
        "no u95 %": _share([r["covers_q"] is None for r in rows]),
    }


def summarise(family: str, records: list[dict[str, Any]]) -> dict[str, float]:
    """The figures of one row (for one class of a family: give it only that class's modes, see `by_group`)."""
    rows = [m for r in records for m in r["modes"]]
    found = [m for m in rows if m["found"]]
    figures: dict[str, float] = {"cases": len(records), "modes": len(rows)}
    if rows:
        figures["found %"] = _share([m["found"] for m in rows])
    if family.startswith("pairs"):
        figures["all found %"] = _share([all(m["found"] for m in r["modes"]) for r in records])
    figures["invented"] = sum(len(r["invented"]) for r in records) / max(len(records), 1)
    figures["modes found"] = len(found)
    if found:
        q_error = _column(found, "q_error")
        figures |= _normalised(found) | _coverage(found)
        figures |= {"rms Q %": 100 * _rms(q_error), "median |dQ| %": float(100 * np.median(np.abs(q_error)))}
    figures |= _special(family, records, found)
    figures["crashes"] = sum("crash" in r for r in records)
    figures["ms median"] = float(1e3 * np.median([r["seconds"] for r in records]))
    figures["ms most"] = float(1e3 * max(r["seconds"] for r in records))
    return figures


def _special(family: str, records: list[dict[str, Any]], found: list[dict[str, Any]]) -> dict[str, float]:
    """Columns of one family alone."""
    figures: dict[str, float] = {}
    if family in ("lone", "one", "lowq"):
        figures["split %"] = _share([len(r["invented"]) > 0 for r in records])
    asked = [r for r in records if "doubt_there" in r]
    if asked:
        name = "bounces marked %" if family == "struck" else "doubt there %"
        figures[name] = _share([r["doubt_there"] for r in asked])
        if family == "struck":
            figures["bounces"] = len(asked)
    if family == "struck":
        figures["false double-strike %"] = _share(["double-strike" in r["codes"] for r in records if "doubt_there" not in r])
    if family == "hum":
        figures["lines reported"] = float(sum(r["lines_reported"] for r in records))
        near = _column([m for m in found if m["line_widths"] < 3], "u_over_bound")
        far = _column([m for m in found if m["line_widths"] >= 10], "u_over_bound")
        figures["u/bound, line < 3 widths"] = float(np.median(near)) if near.size else math.nan
        figures["u/bound, line > 10 widths"] = float(np.median(far)) if far.size else math.nan
    beside = [float(r["notes"]["as_noise_u95"]) for r in records if "as_noise_u95" in r.get("notes", {})]
    if beside:
        figures["u95(Q) % if noise"] = 100 * float(np.median(beside))
    if family == "nothing":
        figures["reported"] = sum(len(r["reported"]) for r in records)
        kinds = sorted({str(r["notes"]["kind"]) for r in records})
        for kind in kinds:
            figures[f"reported: {kind}"] = sum(len(r["reported"]) for r in records if r["notes"]["kind"] == kind)
    return figures


def by_group(family: str, records: list[dict[str, Any]]) -> dict[str, list[dict[str, Any]]]:
    """The records split by the class of their modes, named 'family class'; a family without classes stays whole."""
    groups = sorted({m["group"] for r in records for m in r["modes"]})
    if groups in ([], [""]):
        return {family: records}
    split = {}
    for g in groups:
        split[f"{family} {g}"] = [
            {**r, "modes": [m for m in r["modes"] if m["group"] == g]} for r in records if any(m["group"] == g for m in r["modes"])
        ]
    return split


def number(value: float) -> str:
    """Four digits at most."""
    if math.isnan(value):
        return "-"
    if float(value).is_integer() and abs(value) < 1e6:
        return str(int(value))
    return f"{value:.4g}"


def print_row(name: str, per_seed: dict[int, dict[str, float]]) -> int:
    """One family: a line a figure, a column a seed, the limit beside it, '<-- missed' where the floor is. Returns the floors missed."""
    limits = LIMITS.get(name, {})
    seeds = list(per_seed)
    print(f"\n{name}   (seeds {', '.join(map(str, seeds))})")
    keys = list(dict.fromkeys(k for figures in per_seed.values() for k in figures))
    missed = 0
    for key in keys:
        values = [per_seed[s].get(key, math.nan) for s in seeds]
        limit = limits.get(key)
        mark = ""
        if limit is not None and not all(limit.holds(v) for v in values):
            mark, missed = "   <-- missed", missed + 1
            sizes = [per_seed[s].get(SAMPLE_OF.get(key, "modes"), 0) for s in seeds]
            if key.endswith("%") and key in SAMPLE_OF and all(limit.may_be_chance(v, n) for v, n in zip(values, sizes, strict=True)):
                mark = "   <-- missed, but within chance at this count"
        print(f"  {key:<28}" + "".join(f"{number(v):>10}" for v in values) + (f"   {limit.words()}" if limit else "") + mark)
    for key in limits.keys() - set(keys):
        print(f"  {key:<28}{'no figure':>10}   {limits[key].words()}   <-- missed")
        missed += 1
    return missed


def print_worst(records: list[dict[str, Any]], family: str, most: int) -> None:
    """The worst modes: missed ones first, then by error over the bound (or over u95 where there is no bound)."""

    def badness(m: dict[str, Any]) -> float:
        if not m["found"]:
            return math.inf
        if "a_norm" in m:
            return abs(float(m["a_norm"]))
        return abs(float(m["q_error"])) / (float(m["u95_q"]) or math.nan) if m["u95_q"] == m["u95_q"] else 1e9

    listed = sorted(((badness(m), r, m) for r in records for m in r["modes"]), key=lambda item: -item[0])[:most]
    print(f"  worst of {family} (replay: tests.bench.families.case({family!r}, seed, index)):")
    for bad, r, m in listed:
        was = f"error {bad:.2f} of its scale, u95(Q) {100 * m['u95_q']:.2g} %, dQ {100 * m['q_error']:.3g} %" if m["found"] else "missed"
        extra = r.get("crash") or ("invented " + ", ".join(f"{f:.1f}" for f in r["invented"]) if r["invented"] else "")
        print(f"    seed {r['seed']} index {r['index']:4d}  f {m['f']:9.3f} Hz  Q {m['q']:8.1f}  {was}  {r['notes'] or ''} {extra}")
    strays = [r for r in records if r["invented"]][:most]
    for r in strays:
        print(f"    invented: seed {r['seed']} index {r['index']:4d}  " + ", ".join(f"{f:.1f} Hz" for f in r["invented"][:6]))
    for r in [r for r in records if "crash" in r][:most]:
        print(f"    crash: seed {r['seed']} index {r['index']:4d}  {r['crash']}")
