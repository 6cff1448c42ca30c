"""Write samples as WAV or FLAC: exact where the grid of the integers allows it, and never clipped in silence."""

from __future__ import annotations

import os
from typing import Any

import numpy as np
import numpy.typing as npt

from qmeter.errors import RecordingError, UsageError
from qmeter.recording import Recording

_INTEGER_BITS = {"PCM_U8": 8, "PCM_S8": 8, "PCM_16": 16, "PCM_24": 24, "PCM_32": 32}
_FLOATS = ("FLOAT", "DOUBLE")
_CODINGS = {"WAV": ("PCM_U8", "PCM_16", "PCM_24", "PCM_32", *_FLOATS), "FLAC": ("PCM_S8", "PCM_16", "PCM_24")}
_BLOCK_FRAMES = 1 << 16


def write_wav(path: str | os.PathLike[str], samples: npt.ArrayLike, rate: int, subtype: str = "PCM_24") -> None:
    """Write `samples` ((frames,) or (frames, channels), full scale 1) at `rate` Hz as a WAV file.

    subtype: PCM_U8, PCM_16, PCM_24, PCM_32, FLOAT or DOUBLE. Integers are rounded to the nearest step, without dither; +1 itself,
    which no integer holds, becomes the highest step.
    Errors: UsageError for an unknown subtype or a rate that is not whole; RecordingError "would-clip" where an integer subtype cannot hold
    a sample, "unwritable" where the file cannot be written, and what Recording refuses.
    """
    _write(path, samples, rate, "WAV", subtype)


def write_flac(path: str | os.PathLike[str], samples: npt.ArrayLike, rate: int, subtype: str = "PCM_24") -> None:
    """Write a FLAC file: as write_wav, with PCM_S8, PCM_16 or PCM_24."""
    _write(path, samples, rate, "FLAC", subtype)


def _write(path: str | os.PathLike[str], samples: npt.ArrayLike, rate: int, container: str, subtype: str) -> None:
    import soundfile

    if subtype not in _CODINGS[container]:
        raise UsageError(f"{container} is not written as {subtype}; choose one of {', '.join(_CODINGS[container])}.")
    if int(rate) != rate:
        raise UsageError(f"A sound file holds a whole number of hertz; {rate} Hz is none. Round it.")
    recording = Recording(samples, rate)
    bits = _INTEGER_BITS.get(subtype)
    if bits is not None:
        _refuse_clipping(recording, path, subtype)
    try:
        with (
            open(path, "wb") as file,
            soundfile.SoundFile(file, "w", int(rate), recording.channels, subtype, format=container) as sound,
        ):
            for start in range(0, recording.frames, _BLOCK_FRAMES):
                block = recording.samples[start : start + _BLOCK_FRAMES]
                sound.write(block if bits is None else _to_integers(block, bits))
    except (OSError, soundfile.SoundFileError) as error:
        raise RecordingError(f"{os.fspath(path)} cannot be written: {error}.", code="unwritable") from error


def _refuse_clipping(recording: Recording, path: str | os.PathLike[str], subtype: str) -> None:
    peak = float(max(-recording.samples.min(), recording.samples.max()))
    if peak > 1.0:
        beyond = int(np.count_nonzero(np.abs(recording.samples) > 1.0))
        raise RecordingError(
            f"{os.fspath(path)} is not written: {beyond} samples lie beyond full scale, by up to {20 * np.log10(peak):.2f} dB, "
            f"and {subtype} would clip them. Scale by {1 / peak:.6g} or less, or write FLOAT.",
            code="would-clip",
        )


def _to_integers(block: npt.NDArray[np.floating[Any]], bits: int) -> npt.NDArray[np.int32]:
    """Codes of `bits` bits in the upper bits of int32, from which libsndfile takes them unchanged.

    Its own scaling of floats is by 2^(bits-1) - 1, so that what is read back (divided by 2^(bits-1)) would not be what was written.
    """
    full = 2.0 ** (bits - 1)
    codes = np.minimum(np.rint(block.astype(np.float64) * full), full - 1).astype(np.int64)
    return (codes << (32 - bits)).astype(np.int32)
