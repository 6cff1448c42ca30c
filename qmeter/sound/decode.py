"""From an open sound file to samples, in blocks, into memory that grows with what is there and not with what a header promises."""

from __future__ import annotations

import contextlib
import os
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np
import numpy.typing as npt

from qmeter.errors import RecordingError
from qmeter.recording import MOST_CHANNELS, check_rate, span_frames

Floats = npt.NDArray[np.floating[Any]]

MOST_SAMPLES = 30 * 60 * 48_000 * 2
"""Samples read at once: 30 minutes of stereo at 48 kHz (691 MB as float32)."""
MOST_FRAMES = 1 << 46
"""Twelve years at 192 kHz: a length beyond it stands for an unknown one."""
MOST_EXPANSION = 512
"""Bytes of samples to one byte of file. Speech at the lowest rate of Opus reaches 256; only a file made to fill memory goes beyond."""
FREE_BYTES = 64 << 20
"""... which does not count below this."""

FORMATS = ("WAV", "WAVEX", "RF64", "W64", "AIFF", "CAF", "FLAC", "OGG", "MP3")
_BITS = {"PCM_S8": 8, "PCM_U8": 8, "PCM_16": 16, "PCM_24": 24, "PCM_32": 32, "FLOAT": 32, "DOUBLE": 64}
_BITS |= {f"ALAC_{bits}": bits for bits in (16, 20, 24, 32)}
_NEEDS_FLOAT64 = ("PCM_32", "DOUBLE", "ALAC_32")
"""float32 holds 24 bits exactly, and nothing longer."""
_SEEKS_EXACTLY = ("WAV", "WAVEX", "RF64", "W64", "AIFF", "CAF", "FLAC")
_TALKATIVE = ("MP3", "CAF")
_BLOCK_SAMPLES = 1 << 16


@dataclass(frozen=True, slots=True)
class Decoded:
    """What a decoder made of a file."""

    samples: Floats
    """(frames, channels), owned, read-only"""
    rate: float
    first_frame: int
    """of the file, where only a part was asked for"""
    format: str
    subtype: str
    bits: int | None
    lossy: bool
    cut_short: str | None = None
    """a clause that says what is missing, where something is"""


class Sink:
    """Memory for frames as they come; refuses to outgrow MOST_SAMPLES, and the file by MOST_EXPANSION."""

    def __init__(self, name: str, file_bytes: int, channels: int, dtype: type[np.floating[Any]]) -> None:
        self._name = name
        self._most_bytes = max(FREE_BYTES, MOST_EXPANSION * file_bytes)
        self._file_bytes = file_bytes
        self._buffer: Floats = np.empty((0, channels), dtype=dtype)
        self.frames = 0

    def room(self, frames: int) -> Floats:
        """A writable stretch for the next `frames` frames; `self.frames` moves on only through `keep`."""
        needed = self.frames + frames
        capacity, channels = self._buffer.shape
        if needed > capacity:
            grown = max(needed, capacity + capacity // 2)
            if self.frames * channels > MOST_SAMPLES:
                raise too_long(self._name, None)
            if self.frames * channels * self._buffer.itemsize > self._most_bytes:
                raise RecordingError(
                    f"{self._name} ({self._file_bytes} bytes) unpacks to more than {MOST_EXPANSION} times its size, which no sound does. "
                    "If it holds long silence, measure a part with --from and --to.",
                    code="expands-too-far",
                )
            self._buffer.resize((grown, channels), refcheck=False)  # grows in place, where a new array would need both for a while
        return self._buffer[self.frames : needed]

    def keep(self, frames: int) -> None:
        """Count the first `frames` of the last stretch as kept."""
        self.frames += frames

    def finish(self) -> Floats:
        """What was kept; the sink is empty afterwards."""
        kept, self._buffer = self._buffer, np.empty((0, 1), dtype=np.float32)
        kept.resize((self.frames, kept.shape[1]), refcheck=False)
        kept.flags.writeable = False
        return kept


def too_long(name: str, samples: int | None) -> RecordingError:
    """More than is read at once."""
    held = "more" if samples is None else f"{samples / 1e6:.4g} million samples"
    return RecordingError(
        f"{name} holds {held}; at most {MOST_SAMPLES / 1e6:.4g} million samples are read at once (30 minutes of stereo at 48 kHz). "
        "Measure a part with --from and --to.",
        code="too-long",
    )


def check_channels(channels: int, name: str) -> None:
    """RecordingError "too-many-channels" before anything is decoded."""
    if not 1 <= channels <= MOST_CHANNELS:
        raise RecordingError(
            f"{name} has {channels} channels; 1 to {MOST_CHANNELS} can be measured. Export those that matter.", code="too-many-channels"
        )


def decode(file: BinaryIO, name: str, file_bytes: int, container: str, from_s: float | None, to_s: float | None) -> Decoded:
    """Read an unbuffered binary file, open at any place, through libsndfile.

    Errors: RecordingError "unreadable", "unknown-format", "bad-rate", "too-many-channels", "no-samples", "outside", "too-long",
    "expands-too-far"; UsageError for a span that cannot be meant.
    """
    import soundfile

    file.seek(0)
    # A descriptor keeps the decoder from guessing by the file's name; Windows cannot hand one over between C libraries.
    handle: Any = file.fileno() if os.name == "posix" else file
    with _muffled(container in _TALKATIVE):
        try:
            opened = soundfile.SoundFile(handle, closefd=False)
        except (soundfile.SoundFileError, RuntimeError, ValueError, TypeError, OSError) as error:
            raise RecordingError(
                f"{name} begins like a {container} file, but cannot be read as one: {_reason(error)} Copy or export it again.",
                code="unreadable",
            ) from error
        with opened:
            return _decode_opened(opened, name, file_bytes, from_s, to_s)


def open_span(from_s: float | None, to_s: float | None, rate: float, name: str) -> tuple[int, int | None]:
    """First frame and the frame after the last where the length is not known before it is decoded (None: up to the end).

    Call `span_frames` with the length once it is known: it says what lies outside.
    """
    beyond_any = 2 * MOST_FRAMES
    first, stop = span_frames(from_s, to_s, beyond_any, rate, name)
    return first, None if to_s is None else stop


def _decode_opened(opened: Any, name: str, file_bytes: int, from_s: float | None, to_s: float | None) -> Decoded:
    if opened.format not in FORMATS:
        raise RecordingError(f"{name} is a {opened.format} file, which is not read. Convert it to WAV or FLAC.", code="unknown-format")
    rate = check_rate(opened.samplerate, name)
    check_channels(opened.channels, name)
    promised = int(opened.frames)
    if promised <= 0:
        raise RecordingError(f"{name} holds no samples (0 frames). Record it again, or check what wrote it.", code="no-samples")
    streamed = promised >= MOST_FRAMES  # FLAC written to a pipe does not know its length; libsndfile then gives the largest number
    first, stop = open_span(from_s, to_s, rate, name) if streamed else span_frames(from_s, to_s, promised, rate, name)
    wanted = None if stop is None else stop - first
    if wanted is not None and wanted * opened.channels > MOST_SAMPLES:
        raise too_long(name, wanted * opened.channels)
    sink = Sink(name, file_bytes, opened.channels, np.float64 if opened.subtype in _NEEDS_FLOAT64 else np.float32)
    skipped, trouble = _skip_to(opened, first, seeks=opened.format in _SEEKS_EXACTLY and not streamed)
    if skipped == first and trouble is None:
        trouble = _fill(opened, sink, wanted)
    if streamed and (wanted is None or sink.frames < wanted):
        span_frames(from_s, to_s, max(skipped + sink.frames, 1), rate, name)  # says so where the part asked for lies outside
    elif wanted is not None and sink.frames < wanted:
        trouble = trouble or "the file ends there."
    if sink.frames == 0:
        raise RecordingError(f"{name} could not be decoded: {trouble or 'it holds no sound.'} Copy or export it again.", code="unreadable")
    cut_short = None
    if trouble:
        promise = "" if wanted is None else f" of {wanted / rate:.6g} s promised"
        cut_short = f"{sink.frames / rate:.6g} s{promise} could be decoded: {trouble}"
    bits = _BITS.get(opened.subtype)
    return Decoded(sink.finish(), rate, first, opened.format, opened.subtype, bits, bits is None, cut_short)


def _skip_to(opened: Any, first: int, *, seeks: bool) -> tuple[int, str | None]:
    """Go to frame `first`; how far it got, and what stopped it."""
    import soundfile

    if first == 0:
        return 0, None
    if seeks:
        try:
            return int(opened.seek(first)), None
        except (soundfile.SoundFileError, RuntimeError, OSError) as error:
            return 0, _reason(error)
    # OGG and MP3 seek by estimate, FLAC of unknown length not at all; decoding up to the place is exact.
    scratch = np.empty((_BLOCK_SAMPLES // opened.channels, opened.channels), dtype=np.float32)
    skipped = 0
    while skipped < first:
        got, trouble = _read(opened, scratch[: min(first - skipped, len(scratch))])
        skipped += got
        if trouble or not got:
            return skipped, trouble
    return skipped, None


def _fill(opened: Any, sink: Sink, frames: int | None) -> str | None:
    """Decode up to `frames` frames (None: all) into the sink; what stopped it, where the decoder met damage."""
    block = max(1, _BLOCK_SAMPLES // opened.channels)
    while frames is None or sink.frames < frames:
        got, trouble = _read(opened, sink.room(block if frames is None else min(block, frames - sink.frames)))
        sink.keep(got)
        if trouble or not got:
            return trouble
    return None


def _read(opened: Any, into: Floats) -> tuple[int, str | None]:
    """Frames decoded into `into`, and what went wrong.

    This calls libsndfile beneath the wrapper, whose own read seeks after every block: that fails in FLAC of unknown length,
    and it raises on damage without saying how many frames came before it.
    """
    import soundfile

    library = soundfile._snd
    single = into.dtype == np.float32
    call = library.sf_readf_float if single else library.sf_readf_double
    pointer = soundfile._ffi.cast("float *" if single else "double *", into.ctypes.data)
    got = int(call(opened._file, pointer, len(into)))
    code = int(library.sf_error(opened._file))
    return max(got, 0), _reason(soundfile.LibsndfileError(code)) if code else None


def _reason(error: Exception) -> str:
    """libsndfile's own words, without what the wrapper puts before them."""
    said = str(getattr(error, "error_string", "") or error).strip()
    return said if said.endswith(".") else f"{said}."


@contextlib.contextmanager
def _muffled(needed: bool) -> Iterator[None]:
    """Keep the decoders' own notes off stdout and stderr: C code writes them, past Python, when it meets damage in MP3 or CAF."""
    if not needed:
        yield
        return
    with contextlib.ExitStack() as undo:
        null = os.open(os.devnull, os.O_WRONLY)
        undo.callback(os.close, null)
        for descriptor in (1, 2):
            with contextlib.suppress(OSError):  # it is closed: nothing to keep quiet
                kept = os.dup(descriptor)
                undo.callback(os.close, kept)
                undo.callback(os.dup2, kept, descriptor)
                os.dup2(null, descriptor)
        yield
