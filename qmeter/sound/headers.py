"""What a file is by its content, whatever its name says, and how much sound its header promises.

Only the formats named here reach a decoder. The walk over the chunks reads headers alone, so a damaged size costs nothing.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from typing import BinaryIO

HEAD_BYTES = 4096
"""How much of a file `container_of` looks at."""

AAC_CONTAINERS = ("M4A", "ADTS")
"""Read through PyAV; all others through libsndfile."""

_MOST_CHUNKS = 1000
"""A file has a dozen; without a limit, a large file of empty chunks would be walked for minutes."""
_UNKNOWN_SIZES = (0xFFFFFFFF, 0x7FFFF000)
"""Sizes that programs write into a WAV header when they stream it to a pipe and cannot come back to fill it in (common practice)."""
_W64_GUID_TAIL = bytes.fromhex("f3acd3118cd100c04f8edb8a")
_W64_RIFF = b"riff" + bytes.fromhex("2e91cf11a5d628db04c10000")
"""Sony Wave64 file format, 2.1: 16-byte chunk names, sizes of 64 bits that include the 24 bytes of the chunk's head."""


@dataclass(frozen=True, slots=True)
class SoundChunk:
    """The chunk that holds the samples."""

    promised_bytes: int | None
    """as its header says; None where the writer left it open"""
    present_bytes: int
    """between the chunk's head and the end of the file"""


def container_of(head: bytes) -> str | None:
    """The container that `head`, a file's first bytes, begins: WAV, RF64, W64, AIFF, CAF, FLAC, OGG, MP3, M4A, ADTS; None: none of them."""
    kind = head[8:12]
    if head[:4] in (b"RIFF", b"RIFX") and kind == b"WAVE":
        return "WAV"
    if head[:4] == b"RF64" and kind == b"WAVE":
        return "RF64"
    if head[:4] == b"FORM" and kind in (b"AIFF", b"AIFC"):
        return "AIFF"
    if head[4:8] == b"ftyp":
        return "M4A"
    for magic, name in ((_W64_RIFF, "W64"), (b"caff", "CAF"), (b"fLaC", "FLAC"), (b"OggS", "OGG"), (b"ID3", "MP3")):
        if head.startswith(magic):
            return name
    if len(head) > 1 and head[0] == 0xFF and head[1] != 0xFE:  # FF FE would be MPEG layer I with a check sum, or text in UTF-16: text
        if head[1] & 0xF6 == 0xF0:  # 12 bits of sync, layer 00: AAC in ADTS frames (ISO/IEC 13818-7, 6.2)
            return "ADTS"
        if head[1] & 0xE0 == 0xE0 and head[1] & 0x06:  # 11 bits of sync, a layer: MPEG audio (ISO/IEC 11172-3, 2.4.1.3)
            return "MP3"
    return None


def looks_like_text(head: bytes) -> bool:
    """Whether `head` could be read by a person: UTF-8 or UTF-16 with a mark, and hardly any control characters."""
    if head.startswith((b"\xff\xfe", b"\xfe\xff")):
        return True
    try:
        text = head.decode("utf-8")
    except UnicodeDecodeError as error:
        if error.start < len(head) - 4:  # not just a character cut in two at the end
            return False
        text = head[: error.start].decode("utf-8")
    return bool(text) and sum(not (c.isprintable() or c in "\r\n\t\f") for c in text) <= len(text) // 100


def wav_rate_hz(head: bytes) -> int | None:
    """The rate in the `fmt ` chunk of a WAV file's head, or None."""
    at = head.find(b"fmt ", 12)
    if head[:4] not in (b"RIFF", b"RF64") or at < 0 or len(head) < at + 16:
        return None
    return int(struct.unpack_from("<I", head, at + 12)[0])


def sound_chunk(file: BinaryIO, container: str, size: int) -> SoundChunk | None:
    """Find the chunk with the samples; None where the container has none (FLAC, OGG, MP3) or none was found."""
    if container in ("WAV", "RF64", "AIFF"):
        return _riff_chunk(file, container, size)
    if container == "W64":
        return _wide_chunk(file, size, start=40, name_bytes=16, order="<q", wanted=b"data" + _W64_GUID_TAIL)
    if container == "CAF":
        return _wide_chunk(file, size, start=8, name_bytes=4, order=">q", wanted=b"data")
    return None


def ogg_fault(file: BinaryIO, size: int) -> str | None:
    """What is missing from an OGG file, as a clause, after the numbers and the end mark of its pages (RFC 3533, 6); None: nothing.

    libsndfile takes the last page it finds for the end, and joins what is left around a gap without a word.
    """
    place, next_number, ended = 0, dict[int, int](), False
    while place < size:
        head = _at(file, place, 27)
        if len(head) < 27 or head[:4] != b"OggS":
            return "its pages break off in the middle of one."
        flags, serial, number, segments = head[5], *struct.unpack("<II", head[14:22]), head[26]
        if number != next_number.setdefault(serial, number):
            return f"pages are missing before page {number}."
        next_number[serial] = number + 1
        ended = bool(flags & 4)
        place += 27 + segments + sum(_at(file, place + 27, segments))
    if place > size:
        return "its last page is cut off."
    return None if ended else "its last page is missing."


def _at(file: BinaryIO, place: int, count: int) -> bytes:
    file.seek(place)
    return file.read(count)


def _riff_chunk(file: BinaryIO, container: str, size: int) -> SoundChunk | None:
    """RIFF, RF64 (EBU Tech 3306: a size of -1 refers to the ds64 chunk) and AIFF: names of 4 bytes, sizes of 32 bits, padded to even."""
    order = ">I" if container == "AIFF" or _at(file, 0, 4) == b"RIFX" else "<I"
    wanted = b"SSND" if container == "AIFF" else b"data"
    place, long_size = 12, None
    for _ in range(_MOST_CHUNKS):
        head = _at(file, place, 8)
        if len(head) < 8:
            return None
        name, length = head[:4], int(struct.unpack(order, head[4:])[0])
        if name == b"ds64" and container == "RF64":
            sizes = _at(file, place + 8, 16)
            long_size = struct.unpack("<QQ", sizes)[1] if len(sizes) == 16 else None
        if name == wanted:
            present = size - place - 8
            if container == "RF64" and length == 0xFFFFFFFF and long_size is not None:
                return SoundChunk(int(long_size), present)
            return SoundChunk(None if length in _UNKNOWN_SIZES else length, present)
        place += 8 + length + (length & 1)
    return None


def _wide_chunk(file: BinaryIO, size: int, *, start: int, name_bytes: int, order: str, wanted: bytes) -> SoundChunk | None:
    """W64 and CAF (Apple Core Audio Format specification): sizes of 64 bits; a CAF size of -1 means up to the end of the file."""
    place = start
    head_bytes = name_bytes + 8
    for _ in range(_MOST_CHUNKS):
        head = _at(file, place, head_bytes)
        if len(head) < head_bytes:
            return None
        length = int(struct.unpack(order, head[name_bytes:])[0])
        if name_bytes == 16:  # W64 counts the head, and pads to 8
            length -= head_bytes
        if head[:name_bytes] == wanted:
            return SoundChunk(None if length < 0 else length, size - place - head_bytes)
        if length < 0:
            return None
        place += head_bytes + length
        if name_bytes == 16:
            place = (place + 7) & ~7
        if place >= size:
            return None
    return None
