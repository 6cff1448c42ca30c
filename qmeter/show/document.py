"""The result document of `--json`: one object, described by docs/result.schema.json. No NaN ever gets into it."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

from qmeter.estimate.modes import Doubt, Measurement, Mode, Strike
from qmeter.uncertainty import Figure

SCHEMA = "qmeter.result/1"

FIGURES = (
    "frequency_hz",
    "q",
    "t60_s",
    "decay_rate_per_s",
    "time_constant_s",
    "half_power_width_hz",
    "loss_factor",
    "damping_ratio",
    "log_decrement",
    "cycles_to_e_minus_pi",
)
"""Figures of a mode, by their names in the document and on `Mode`, in the order shown."""


@dataclass(frozen=True, slots=True)
class Failure:
    """A file that gave no measurement, and why."""

    file: str
    code: str
    says: str


@dataclass(frozen=True, slots=True)
class Pooled:
    """Several files as strikes of one object: `mountings` names each file's way of holding, in their order; None where it was not said."""

    files: tuple[str, ...]
    mountings: tuple[str | None, ...]
    modes: tuple[Mode, ...]
    doubts: tuple[Doubt, ...]


def document(
    version: str, measurements: Sequence[Measurement], failures: Sequence[Failure] = (), pooled: Pooled | None = None
) -> dict[str, Any]:
    """The whole document; "pooled" is in it only where pooling was asked for and something could be pooled."""
    result: dict[str, Any] = {
        "schema": SCHEMA,
        "qmeter_version": version,
        "recordings": [_recording(measurement) for measurement in measurements],
        "failures": [asdict(failure) for failure in failures],
    }
    if pooled is not None:
        result["pooled"] = {
            "files": list(pooled.files),
            "mountings": list(pooled.mountings),
            "modes": [_mode(mode, pooled=True) for mode in pooled.modes],
            "doubts": _doubts(pooled.doubts),
        }
    return result


def as_json(result: dict[str, Any]) -> str:
    """The document as text; ValueError rather than a NaN."""
    return json.dumps(result, allow_nan=False, indent=2)


def finite(value: float | None) -> float | None:
    """The value, or None where there is none to give: the level of digital silence is minus infinity."""
    return float(value) if value is not None and math.isfinite(value) else None


# float(), int() and bool() below turn NumPy's scalars, which estimators may leave in a result, into what JSON knows


def _recording(measurement: Measurement) -> dict[str, Any]:
    return {
        "file": measurement.file,
        "sha256": measurement.sha256,
        "sample_rate_hz": float(measurement.sample_rate_hz),
        "channels": int(measurement.channels),
        "channel": int(measurement.channel),
        "duration_s": float(measurement.duration_s),
        "strikes": [_strike(strike) for strike in measurement.strikes],
        "modes": [_mode(mode, pooled=True) for mode in measurement.modes],
        "doubts": _doubts(measurement.doubts),
    }


def _strike(strike: Strike) -> dict[str, Any]:
    return {
        "onset_s": float(strike.onset_s),
        "usable_s": float(strike.usable_s),
        "peak_dbfs": finite(strike.peak_dbfs),
        "noise_dbfs": finite(strike.noise_dbfs),
        "accepted": bool(strike.accepted),
        "doubts": _doubts(strike.doubts),
        "modes": [_mode(mode, pooled=False) for mode in strike.modes],
    }


def _mode(mode: Mode, *, pooled: bool) -> dict[str, Any]:
    route = mode.half_power
    result: dict[str, Any] = {name: _figure(getattr(mode, name), pooled=pooled) for name in FIGURES}
    result |= {
        "level_db": float(mode.level_db),
        "level_dbfs": float(mode.level_dbfs),
        "snr_db": finite(mode.snr_db),
        "decay_range_db": float(mode.decay_range_db),
        "strikes": int(mode.strikes),
        "half_power": None if route is None else {"q": _figure(route.q, pooled=False), "agrees": bool(route.agrees)},
        "doubts": _doubts(mode.doubts),
    }
    return result


def _figure(figure: Figure, *, pooled: bool) -> dict[str, Any]:
    result: dict[str, Any] = {"value": float(figure.value), "u95": finite(figure.u95)}
    if pooled:
        parts = None if figure.parts is None else {name: float(part) for name, part in asdict(figure.parts).items()}
        result |= {"k": finite(figure.k), "nu": finite(figure.nu), "parts": parts}
    return result


def _doubts(doubts: Sequence[Doubt]) -> list[dict[str, str]]:
    return [asdict(doubt) for doubt in doubts]
