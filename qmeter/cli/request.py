"""What was asked of `qmeter replay`, and whether it can be meant."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path

from qmeter.errors import UsageError


@dataclass(frozen=True, slots=True)
class Request:
    """The options, as given."""

    files: tuple[str, ...]
    channel: int | None
    from_s: float | None
    to_s: float | None
    near_hz: float | None
    most: int | None
    range_hz: tuple[float, float] | None
    pitch_hz: float | None
    pool: bool
    mountings: tuple[str, ...]
    processes: int
    json: bool
    csv: bool
    plain: bool
    svg: Path | None


def check(request: Request) -> None:
    """UsageError for options that cannot be meant, before any file is opened."""
    if request.files.count("-") > 1:
        raise UsageError("Standard input (-) can be read only once.")
    if request.json + request.csv + request.plain > 1:
        raise UsageError("--json, --csv and --plain exclude one another; choose one.")
    for name, count in (("--channel", request.channel), ("--most", request.most), ("--jobs", request.processes)):
        if count is not None and count < 1:
            raise UsageError(f"{name} {count}: it counts from 1.")
    low, high = request.range_hz or (None, None)
    for name, hertz in (("--near", request.near_hz), ("--pitch", request.pitch_hz), ("--range", low), ("--range", high)):
        if hertz is not None and not 0.0 < hertz < math.inf:
            raise UsageError(f"{name} {hertz:g}: a frequency in Hz is wanted, above 0.")
    if low is not None and high is not None and not low < high:
        raise UsageError(f"--range {low:g} {high:g}: the lower frequency comes first.")
    for name, seconds in (("--from", request.from_s), ("--to", request.to_s)):
        if seconds is not None and not 0.0 <= seconds < math.inf:
            raise UsageError(f"{name} {seconds:g}: seconds from the start are wanted, 0 or more.")
    if request.from_s is not None and request.to_s is not None and not request.from_s < request.to_s:
        raise UsageError(f"--from {request.from_s:g} --to {request.to_s:g}: the end comes after the beginning.")
