"""A recording: samples, a sample rate, and where they came from. Pure: no file, no device (those are in qmeter.sound)."""

from __future__ import annotations

import dataclasses
import math
from dataclasses import dataclass, field
from typing import Any, NamedTuple, Self

import numpy as np
import numpy.typing as npt

from qmeter.errors import RecordingError, UsageError

LOWEST_RATE_HZ = 8_000
HIGHEST_RATE_HZ = 192_000
MOST_CHANNELS = 64
"""Multi-channel rigs reach 64; more than that is nearly always an array handed over the wrong way round, or a damaged header."""
LARGEST_SAMPLE = 1e12
"""240 dB above full scale is no sound in any unit, and its fourth power still fits a float64."""
END_TOLERANCE_S = 0.01
"""How far `to_s` may lie beyond the end: a duration is shown rounded, and is typed back as shown."""

_CHECKED_AT_ONCE = 1 << 18
"""Frames checked at a time, so that the check needs little memory of its own."""
_PCM_SCALE = {"uint8": (128.0, 2.0**-7), "int16": (0.0, 2.0**-15), "int32": (0.0, 2.0**-31)}
"""Zero and step of the integer types in which sound is kept."""


class SourceDoubt(NamedTuple):
    """A doubt that the source of the samples raises (code and sentence); `Doubt(*source_doubt)` makes one of a result."""

    code: str
    says: str


@dataclass(frozen=True, slots=True)
class Origin:
    """Where the samples came from."""

    file: str
    """name as given; "-" is standard input"""
    sha256: str | None = None
    """of the file's bytes, hexadecimal"""
    format: str = ""
    """container: WAV, FLAC, ..."""
    subtype: str = ""
    """coding of the samples: PCM_24, FLOAT, VORBIS, ..."""
    lossy: bool = False
    bits: int | None = None
    """bits a sample; None where the coding has no fixed number"""


@dataclass(frozen=True, init=False, eq=False)
class Recording:
    """Samples and a sample rate, immutable.

    samples: (frames,) or (frames, channels), full scale = 1; kept as a read-only (frames, channels) array.
        float32 stays float32 (half the memory, and exact for sound of up to 24 bits); everything else becomes float64.
        uint8, int16 and int32 are taken as PCM and scaled to +-1; other integers are refused, their full scale being unknown.
        An array that owns its memory and is read-only already is kept without a copy.
    rate: Hz, 8000 to 192000; it need not be whole.
    origin: the file or device, where there is one.
    doubts: what the source has against itself (lossy, truncated, ...).
    starts_at_s: time of the first sample within the source, where a part of it was taken.

    Errors: RecordingError with code "no-samples", "wrong-shape", "wrong-type", "too-many-channels", "bad-rate", "not-finite", "too-large".
    """

    samples: npt.NDArray[np.floating[Any]] = field(repr=False)
    rate: float
    origin: Origin | None = field(default=None, kw_only=True)
    doubts: tuple[SourceDoubt, ...] = field(default=(), kw_only=True)
    starts_at_s: float = field(default=0.0, kw_only=True)

    def __init__(
        self,
        samples: npt.ArrayLike,
        rate: float,
        *,
        origin: Origin | None = None,
        doubts: tuple[SourceDoubt, ...] = (),
        starts_at_s: float = 0.0,
    ) -> None:
        name = _name(origin)
        kept = _as_frames_by_channels(samples, name)
        checked_rate = check_rate(rate, name)
        _check_values(kept, checked_rate, name)
        kept.flags.writeable = False
        put = object.__setattr__  # a frozen dataclass allows no other way
        put(self, "samples", kept)
        put(self, "rate", checked_rate)
        put(self, "origin", origin)
        put(self, "doubts", tuple(doubts))
        put(self, "starts_at_s", float(starts_at_s))

    def __setstate__(self, state: dict[str, Any]) -> None:
        """Unpickled arrays are writable (a worker process gets one); make it read-only again."""
        self.__dict__.update(state)
        self.samples.flags.writeable = False

    @property
    def frames(self) -> int:
        """Samples a channel."""
        return int(self.samples.shape[0])

    @property
    def channels(self) -> int:
        """Number of channels."""
        return int(self.samples.shape[1])

    @property
    def duration_s(self) -> float:
        """Length in seconds: frames / rate."""
        return self.frames / self.rate

    @property
    def name(self) -> str:
        """What to call it in a sentence."""
        return _name(self.origin)

    def channel(self, number: int) -> npt.NDArray[np.float64]:
        """Channel `number` (the first is 1) as a contiguous, read-only float64 array of shape (frames,).

        Errors: RecordingError "no-such-channel".
        """
        if not 1 <= number <= self.channels:
            held = "one channel" if self.channels == 1 else f"{self.channels} channels"
            raise RecordingError(
                f"{self.name} has {held}; there is no channel {number}. Choose one from 1 to {self.channels}.", code="no-such-channel"
            )
        column = np.ascontiguousarray(self.samples[:, number - 1], dtype=np.float64)
        column.flags.writeable = False
        return column

    def between(self, from_s: float | None = None, to_s: float | None = None) -> Self:
        """The part from `from_s` to `to_s` (seconds from the first sample kept here; None: the start, the end), as a copy.

        Errors: UsageError where the two cannot be meant, RecordingError "outside" where they lie beyond the end.
        """
        first, stop = span_frames(from_s, to_s, self.frames, self.rate, self.name)
        if (first, stop) == (0, self.frames):
            return self
        return dataclasses.replace(self, samples=self.samples[first:stop], starts_at_s=self.starts_at_s + first / self.rate)


def _name(origin: Origin | None) -> str:
    if origin is None:
        return "The recording"
    return "Standard input" if origin.file == "-" else origin.file


def check_rate(rate: float, name: str) -> float:
    """The rate as a float, or RecordingError "bad-rate"."""
    try:
        value = float(rate)
    except (TypeError, ValueError):
        value = math.nan
    if not LOWEST_RATE_HZ <= value <= HIGHEST_RATE_HZ:
        shown = f"{value:g} Hz" if math.isfinite(value) else repr(rate)
        raise RecordingError(
            f"{name} has a sample rate of {shown}; {LOWEST_RATE_HZ} to {HIGHEST_RATE_HZ} Hz can be measured. "
            "If the header is wrong, export it again; if the rate is right, resample it.",
            code="bad-rate",
        )
    return value


def span_frames(from_s: float | None, to_s: float | None, frames: int, rate: float, name: str) -> tuple[int, int]:
    """First frame and the frame after the last of a span in seconds, within a recording of `frames` frames at `rate` Hz.

    Errors: UsageError where the span cannot be meant (NaN, negative, empty), RecordingError "outside" where it lies beyond the end.
    """
    duration_s = frames / rate
    start_s = 0.0 if from_s is None else float(from_s)
    end_s = duration_s if to_s is None else float(to_s)
    if not (math.isfinite(start_s) and math.isfinite(end_s)) or start_s < 0 or end_s <= 0:
        raise UsageError(f"The part to measure must lie at 0 s or later; it was given as {start_s:g} to {end_s:g} s.")
    if to_s is not None and end_s <= start_s:
        raise UsageError(f"The part to measure must end after it starts; it was given as {start_s:g} to {end_s:g} s.")
    if start_s >= duration_s or end_s > duration_s + END_TOLERANCE_S:
        asked = f"to {end_s:g} s" if start_s < duration_s else f"from {start_s:g} s"
        raise RecordingError(
            f"{name} lasts {duration_s:.6g} s and was to be measured {asked}. Choose a part within it, or leave the limit out.",
            code="outside",
        )
    first = min(round(start_s * rate), frames - 1)
    stop = min(max(round(end_s * rate), first + 1), frames)
    return first, stop


def _as_frames_by_channels(samples: npt.ArrayLike, name: str) -> npt.NDArray[np.floating[Any]]:
    """A float array of shape (frames, channels) that nobody else can write to; RecordingError where it cannot be one."""
    try:
        given = np.asarray(samples)
    except ValueError as error:  # rows of unequal length
        raise RecordingError(f"{name} is not an array of numbers: {error}.", code="wrong-shape") from error
    if given.ndim not in (1, 2):
        raise RecordingError(
            f"{name} has {given.ndim} dimensions; samples are (frames,) or (frames, channels). Reshape the array.", code="wrong-shape"
        )
    if given.size == 0:
        raise RecordingError(f"{name} holds no samples (0 frames). Record it again, or check what wrote it.", code="no-samples")
    if given.ndim == 2 and given.shape[1] > MOST_CHANNELS:
        hint = "Transpose the array: frames come first." if given.shape[0] < given.shape[1] else "Keep the channels that matter."
        raise RecordingError(
            f"{name} has {given.shape[1]} channels; at most {MOST_CHANNELS} can be measured. {hint}", code="too-many-channels"
        )
    floats = _as_floats(given, name)
    return floats.reshape(-1, 1) if floats.ndim == 1 else floats


def _as_floats(given: npt.NDArray[Any], name: str) -> npt.NDArray[np.floating[Any]]:
    """float32 or float64, in C order, copied unless nobody can write to it."""
    if given.dtype.name in _PCM_SCALE:
        zero, step = _PCM_SCALE[given.dtype.name]
        return np.ascontiguousarray((given.astype(np.float64) - zero) * step)
    if not np.issubdtype(given.dtype, np.floating):
        raise RecordingError(
            f"{name} is an array of {given.dtype.name}; its full scale is not known. Give floats with a full scale of 1, "
            "or int16, int32 or uint8 as sound files hold them.",
            code="wrong-type",
        )
    dtype: type[np.floating[Any]] = np.float32 if given.dtype.name == "float32" else np.float64
    if given.base is None and not given.flags.writeable and given.flags.c_contiguous and given.dtype == dtype:
        return given
    return np.array(given, dtype=dtype, order="C", copy=True)


def _check_values(samples: npt.NDArray[np.floating[Any]], rate: float, name: str) -> None:
    """RecordingError where a sample is NaN, Inf or beyond any sound."""
    bad, first = 0, -1
    largest = 0.0
    for start in range(0, samples.shape[0], _CHECKED_AT_ONCE):
        block = samples[start : start + _CHECKED_AT_ONCE]
        peak = float(np.max(np.abs(block)))  # NaN and Inf both come through max
        if math.isfinite(peak):
            largest = max(largest, peak)
            continue
        wrong = ~np.isfinite(block)
        if first < 0:
            first = start * samples.shape[1] + int(np.argmax(wrong))
        bad += int(np.count_nonzero(wrong))
    if bad:
        frame, channel = divmod(first, samples.shape[1])
        held = "1 sample that is" if bad == 1 else f"{bad} samples that are"
        where = f"at {frame / rate:.4f} s (frame {frame}, channel {channel + 1})"
        raise RecordingError(
            f"{name} holds {held} NaN or Inf, the first {where}. Export it again, or leave that part out with --from and --to.",
            code="not-finite",
        )
    if largest > LARGEST_SAMPLE:
        raise RecordingError(
            f"{name} holds a sample of {largest:.3g} times full scale, which is no sound: the file is damaged, or its coding is not what "
            "the header says. Export it again.",
            code="too-large",
        )
