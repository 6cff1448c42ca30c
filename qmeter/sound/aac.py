"""AAC, in M4A or as bare ADTS frames, through PyAV (the optional extra `aac`)."""

from __future__ import annotations

from typing import Any, BinaryIO

import numpy as np

from qmeter.errors import RecordingError
from qmeter.recording import check_rate, span_frames
from qmeter.sound.decode import Decoded, Sink, check_channels, open_span

_DEMUXERS = {"M4A": "mp4", "ADTS": "aac"}
"""Named, so that a file cannot pass for a playlist or any other of the hundreds that FFmpeg knows."""
_PACKET_FRAMES = 2048
"""of AAC, the longer kind"""
_LOSSLESS = ("alac", "flac")


def decode_aac(file: BinaryIO, name: str, file_bytes: int, container: str, from_s: float | None, to_s: float | None) -> Decoded:
    """Read an M4A or ADTS file.

    Errors: RecordingError "needs-aac" without PyAV, "unreadable", "bad-rate", "too-many-channels", "no-samples", "outside", "too-long",
    "expands-too-far"; UsageError for a span that cannot be meant.
    """
    try:
        import av
    except ImportError as error:
        raise RecordingError(
            f'{name} holds AAC sound (M4A or ADTS), whatever its name says. Install what reads it: python -m pip install "av<19"; '
            "or convert it to WAV: ffmpeg -i FILE converted.wav",
            code="needs-aac",
        ) from error
    file.seek(0)
    try:
        with av.open(file, mode="r", format=_DEMUXERS[container], metadata_errors="ignore") as opened:
            if not opened.streams.audio:
                raise RecordingError(f"{name} holds no sound track. Export the sound as WAV or FLAC.", code="no-samples")
            return _decode_track(opened, opened.streams.audio[0], name, file_bytes, from_s, to_s)
    except RecordingError:
        raise
    except (av.error.FFmpegError, OSError, ValueError, RuntimeError, LookupError) as error:
        raise RecordingError(
            f"{name} begins like a file of AAC sound ({container}), but cannot be read as one: {_reason(error)} Copy or export it again.",
            code="unreadable",
        ) from error


def _decode_track(opened: Any, track: Any, name: str, file_bytes: int, from_s: float | None, to_s: float | None) -> Decoded:
    """Decode one track from the start (AAC seeks to whole packets only), and keep the part asked for."""
    import av

    if track.codec_context is None:  # PyAV then gives the track no rate either
        raise RecordingError(f"{name} holds sound in a coding that FFmpeg does not know. Export it as WAV or FLAC.", code="unreadable")
    rate = check_rate(track.rate or 0, name)
    channels = int(track.channels)
    check_channels(channels, name)
    first, stop = open_span(from_s, to_s, rate, name)
    sink = Sink(name, file_bytes, channels, np.float32)
    packed = av.AudioResampler(format="flt", layout=track.layout, rate=track.rate)
    seen, trouble = 0, None
    try:
        for frame in opened.decode(track):
            for piece in packed.resample(frame):
                block = piece.to_ndarray().reshape(-1, channels)
                kept = block[max(first - seen, 0) : None if stop is None else max(stop - seen, 0)]
                sink.room(len(kept))[:] = kept
                sink.keep(len(kept))
                seen += len(block)
            if stop is not None and seen >= stop:
                break
    except (av.error.FFmpegError, ValueError, RuntimeError) as error:
        trouble = _reason(error)
    if seen == 0:
        raise RecordingError(
            f"{name} could not be decoded: {trouble or 'its track is empty.'} Copy or export it again.",
            code="unreadable" if trouble else "no-samples",
        )
    if stop is None or seen < stop:
        promised = round(float(track.duration * track.time_base) * rate) if track.duration and container_name(opened) == "M4A" else 0
        if promised - seen > 2 * _PACKET_FRAMES and trouble is None:  # the coder's delay is part of one length and not of the other
            trouble = f"{promised / rate:.6g} s are promised, and the file ends there."
        span_frames(from_s, to_s, seen, rate, name)  # says so where the part asked for lies outside
    if trouble:
        trouble = f"{seen / rate:.6g} s could be decoded: {trouble}"
    codec = str(track.codec_context.name)
    return Decoded(sink.finish(), rate, first, container_name(opened), codec.upper(), None, codec not in _LOSSLESS, trouble)


def container_name(opened: Any) -> str:
    """M4A or ADTS, from FFmpeg's name of the demuxer."""
    return "ADTS" if opened.format.name == "aac" else "M4A"


def _reason(error: Exception) -> str:
    """FFmpeg's own words, without the number and the name of the pseudo-file around them."""
    said = str(getattr(error, "strerror", None) or error).strip()
    return said if said.endswith(".") else f"{said}."
