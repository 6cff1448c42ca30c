"""Sound files in and out: `Recording.load(path)` reads what a recorder, a telephone or a pipe gives; every refusal says the way out."""

from __future__ import annotations

import contextlib
import hashlib
import os
import stat
import sys
import tempfile
from collections.abc import Iterator
from typing import IO, BinaryIO, Self, cast

from qmeter import recording as pure
from qmeter.errors import RecordingError
from qmeter.recording import Origin, SourceDoubt
from qmeter.sound import headers
from qmeter.sound.aac import decode_aac
from qmeter.sound.decode import Decoded, decode
from qmeter.sound.writing import write_flac, write_wav

__all__ = ["Recording", "write_flac", "write_wav"]

MOST_PIPED_BYTES = 4 << 30
"""A pipe is copied to a temporary file first; one that never ends must not fill the disk."""
_COPIED_AT_ONCE = 1 << 20


class Recording(pure.Recording):
    """Samples and a sample rate, as `qmeter.recording.Recording`; `load` reads them from a file."""

    @classmethod
    def load(cls, path: str | os.PathLike[str], *, from_s: float | None = None, to_s: float | None = None) -> Self:
        """Read a sound file: WAV, RF64, W64, AIFF, CAF, FLAC, OGG, MP3; M4A and ADTS (AAC) with the extra `aac`. "-" is standard input.

        from_s, to_s: the part to read, in seconds; None: from the start, to the end.
        Recognised by content, not by name. What is cut short is read as far as it goes, with the doubt "truncated"; what was compressed
        with loss carries the doubt "lossy". Rates from 8 to 192 kHz, up to 64 channels, up to 172.8 million samples at once.
        Memory: the samples as float32 (float64 where they have more than 24 bits), about 1 MB beside them, and never more than 512 times
        the file's size or 64 MB, whichever is more.

        Errors: RecordingError, whose code is one of missing, folder, no-permission, not-a-file, empty, text, unknown-format, needs-aac,
        truncated, unreadable, no-samples, bad-rate, too-many-channels, too-long, expands-too-far, outside, not-finite, too-large.
        UsageError for a part that cannot be meant.
        """
        given = shown_name(path)
        name = "Standard input" if given == "-" else given
        with _opened(path, name) as file:
            digest, size, head = _digest(file, name)
            container = _recognise(head, size, name)
            promise = headers.sound_chunk(file, container, size)
            ogg_fault = headers.ogg_fault(file, size) if container == "OGG" else None
            _check_header(head, promise, name)
            read = decode_aac if container in headers.AAC_CONTAINERS else decode
            try:
                decoded = read(file, name, size, container, from_s, to_s)
            except RecordingError as error:
                raise (_cut_header(promise, name) or error) if error.code == "unreadable" else error from error
        origin = Origin(given, digest, decoded.format, decoded.subtype, decoded.lossy, decoded.bits)
        return cls(
            decoded.samples,
            decoded.rate,
            origin=origin,
            doubts=_doubts(decoded, promise, ogg_fault, name),
            starts_at_s=decoded.first_frame / decoded.rate,
        )


def shown_name(path: str | os.PathLike[str]) -> str:
    """The file's name as given, with what a terminal or JSON could not show written as escapes."""
    text = os.fsdecode(path)
    return "".join(c if c.isprintable() else c.encode("unicode_escape", "surrogatepass").decode("ascii") for c in text)


@contextlib.contextmanager
def _opened(path: str | os.PathLike[str], name: str) -> Iterator[BinaryIO]:
    """The file, unbuffered (libsndfile shares its descriptor) and seekable: pipes are copied to a temporary file."""
    if os.fspath(path) == "-":
        with _spooled(_standard_input(), name) as file:
            yield file
        return
    try:
        kind = os.stat(path).st_mode
        if stat.S_ISDIR(kind):
            raise RecordingError(f"{name} is a folder. Name the files in it: {name.rstrip('/')}/*.wav", code="folder")
        if not (stat.S_ISREG(kind) or stat.S_ISFIFO(kind)):
            raise RecordingError(
                f"{name} is a device or a socket, not a file. Record from it first, or pipe it in with -.", code="not-a-file"
            )
        opened = open(path, "rb", buffering=0)  # noqa: SIM115 - the `with` below closes it; only opening may fail here
    except FileNotFoundError as error:
        raise RecordingError(f"{name} does not exist. Check the spelling and the folder you are in.", code="missing") from error
    except PermissionError as error:
        raise RecordingError(
            f"{name} may not be read by this user. Change its permissions (chmod u+r) or copy it.", code="no-permission"
        ) from error
    except (OSError, ValueError) as error:
        raise RecordingError(f"{name} cannot be opened: {_words(error)}.", code="unreadable") from error
    with opened:
        if stat.S_ISFIFO(kind):
            with _spooled(opened, name) as file:
                yield file
        else:
            yield cast(BinaryIO, opened)


def _standard_input() -> IO[bytes]:
    """The bytes of standard input, or RecordingError where there is nothing to read from."""
    source = getattr(sys.stdin, "buffer", None)
    if source is None:
        raise RecordingError("Standard input (-) is closed. Pipe a recording into it: qmeter replay - < tap.wav", code="unreadable")
    with contextlib.suppress(OSError, ValueError):
        if source.isatty():
            raise RecordingError(
                "Standard input (-) is the keyboard. Pipe a recording into it: qmeter replay - < tap.wav", code="unreadable"
            )
    return cast(IO[bytes], source)


@contextlib.contextmanager
def _spooled(source: IO[bytes], name: str) -> Iterator[BinaryIO]:
    """A pipe's bytes in a temporary file that vanishes with the block; refused at the first block when it is no sound."""
    with tempfile.TemporaryFile(buffering=0) as file:
        copied = 0
        try:
            while block := source.read(_COPIED_AT_ONCE):
                if copied == 0 and len(block) >= 12 and headers.container_of(block) is None:
                    _recognise(block[: headers.HEAD_BYTES], len(block), name)
                file.write(block)
                copied += len(block)
                if copied > MOST_PIPED_BYTES:
                    raise RecordingError(
                        f"{name} gave more than {MOST_PIPED_BYTES >> 30} GiB. Save it to a file and measure a part of it.", code="too-long"
                    )
        except (OSError, ValueError) as error:
            raise RecordingError(
                f"{name} cannot be read: {_words(error)}. Pipe a recording into it: qmeter replay - < tap.wav", code="unreadable"
            ) from error
        yield cast(BinaryIO, file)


def _digest(file: BinaryIO, name: str) -> tuple[str, int, bytes]:
    """sha256 of the whole file, its size, and its first bytes; in blocks."""
    digest, size, head = hashlib.sha256(), 0, b""
    try:
        file.seek(0)
        while block := file.read(_COPIED_AT_ONCE):
            if len(head) < headers.HEAD_BYTES:
                head += block[: headers.HEAD_BYTES - len(head)]
            digest.update(block)
            size += len(block)
    except OSError as error:
        raise RecordingError(
            f"{name} cannot be read: {_words(error)}. Copy it to another place and try again.", code="unreadable"
        ) from error
    return digest.hexdigest(), size, head


def _recognise(head: bytes, size: int, name: str) -> str:
    """The container, by content; RecordingError where it is none that can be read."""
    if size == 0:
        raise RecordingError(f"{name} is empty (0 bytes). Record it again, or check that it was copied whole.", code="empty")
    container = headers.container_of(head)
    if container is not None:
        return container
    if headers.looks_like_text(head):
        raise RecordingError(f"{name} is text, not sound. Name the sound file itself.", code="text")
    raise RecordingError(
        f"{name} is no sound file that is known here (WAV, RF64, W64, AIFF, CAF, FLAC, OGG, MP3, M4A); it begins with the bytes "
        f"{head[:8].hex(' ')}. Convert it to WAV: ffmpeg -i FILE converted.wav",
        code="unknown-format",
    )


def _check_header(head: bytes, promise: headers.SoundChunk | None, name: str) -> None:
    """Say in our own words what libsndfile would refuse without naming it."""
    if headers.wav_rate_hz(head) == 0:
        pure.check_rate(0, name)
    if promise is not None and promise.promised_bytes == 0 and promise.present_bytes > 0:
        raise RecordingError(
            f"{name} says that it holds no sound, and {promise.present_bytes} bytes follow: the recorder was stopped before it could write "
            "the length. Repair the header: ffmpeg -i FILE converted.wav",
            code="no-samples",
        )


def _cut_header(promise: headers.SoundChunk | None, name: str) -> RecordingError | None:
    """Why a decoder could not open a file whose sound is not all there, where that is so (CAF)."""
    if promise is None or promise.promised_bytes is None or promise.promised_bytes <= promise.present_bytes:
        return None
    return RecordingError(
        f"{name} ends early: its header promises {promise.promised_bytes} bytes of sound, {promise.present_bytes} are there, and none of "
        "them can be read without the rest. Copy it again.",
        code="truncated",
    )


def _doubts(decoded: Decoded, promise: headers.SoundChunk | None, ogg_fault: str | None, name: str) -> tuple[SourceDoubt, ...]:
    """What speaks against the samples as they came."""
    doubts = []
    if decoded.lossy:
        doubts.append(
            SourceDoubt(
                "lossy",
                f"{name} was compressed with loss ({decoded.subtype}): what the coder took for inaudible is gone, and a ring may end "
                "early or in steps. Record to WAV or FLAC where you can.",
            )
        )
    if decoded.cut_short or ogg_fault:
        doubts.append(
            SourceDoubt("truncated", f"{name} is cut short or damaged: {decoded.cut_short or ogg_fault} Copy it again if the rest matters.")
        )
    elif promise is not None and promise.promised_bytes is not None and promise.promised_bytes > promise.present_bytes + 1:
        doubts.append(
            SourceDoubt(
                "truncated",
                f"{name} ends early: its header promises {promise.promised_bytes} bytes of sound and {promise.present_bytes} are there; "
                "these were read. Copy it again if the rest matters.",
            )
        )
    return tuple(doubts)


def _words(error: Exception) -> str:
    return str(getattr(error, "strerror", None) or error).rstrip(".")
