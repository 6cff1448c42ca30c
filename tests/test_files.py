"""Sound files: what is read exactly, what is doubted, and what is refused in which words.

Files of known content are put together here byte by byte from the formats' own descriptions, or written by libsndfile and FFmpeg,
never by the code under test.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import struct
import subprocess
import sys
import tempfile
import tracemalloc
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np
import pytest
import soundfile
from numpy.testing import assert_allclose, assert_array_equal

import qmeter.recording
from qmeter.errors import RecordingError, UsageError
from qmeter.sound import decode, headers
from qmeter.sound.files import Recording, write_flac, write_wav

REPOSITORY = Path(__file__).resolve().parent.parent
RATE_HZ = 48_000


def wav_bytes(
    data: bytes = b"\x00\x10" * 100,
    *,
    rate: int = RATE_HZ,
    channels: int = 1,
    bits: int = 16,
    tag: int = 1,
    promised: int | None = None,
    after: bytes = b"",
) -> bytes:
    """A WAV file after the RIFF description (Multimedia Programming Interface and Data Specifications 1.0, from memory)."""
    width = channels * bits // 8
    body = b"WAVEfmt " + struct.pack("<IHHIIHH", 16, tag, channels, rate, rate * width & 0xFFFFFFFF, width & 0xFFFF, bits)
    body += b"data" + struct.pack("<I", len(data) if promised is None else promised) + data + after
    return b"RIFF" + struct.pack("<I", len(body)) + body


def rf64_bytes(data: bytes) -> bytes:
    """RF64 after EBU Tech 3306: sizes of -1 in the 32-bit fields, the true ones in ds64."""
    ds64 = b"ds64" + struct.pack("<IQQQI", 28, 72 + len(data), len(data), len(data) // 2, 0)
    fmt = b"fmt " + struct.pack("<IHHIIHH", 16, 1, 1, RATE_HZ, RATE_HZ * 2, 2, 16)
    return b"RF64" + b"\xff" * 4 + b"WAVE" + ds64 + fmt + b"data" + b"\xff" * 4 + data


def aiff_bytes(data: bytes) -> bytes:
    """AIFF 1.3 (Apple): big-endian, the rate as an 80-bit float, 8 bytes before the samples."""
    swapped = np.frombuffer(data, "<i2").astype(">i2").tobytes()
    rate = struct.pack(">HQ", 16383 + 15, RATE_HZ << (63 - 15))
    common = b"COMM" + struct.pack(">IhIh", 18, 1, len(data) // 2, 16) + rate
    sound = b"SSND" + struct.pack(">III", 8 + len(data), 0, 0) + swapped
    return b"FORM" + struct.pack(">I", 4 + len(common) + len(sound)) + b"AIFF" + common + sound


def caf_bytes(data: bytes, *, promised: int | None = None) -> bytes:
    """CAF (Apple Core Audio Format): desc, then data with a 4-byte edit count; flag 2 is little-endian."""
    desc = b"desc" + struct.pack(">q", 32) + struct.pack(">d4sIIIII", RATE_HZ, b"lpcm", 2, 2, 1, 1, 16)
    return b"caff\x00\x01\x00\x00" + desc + b"data" + struct.pack(">qI", len(data) + 4 if promised is None else promised, 0) + data


def w64_bytes(data: bytes) -> bytes:
    """Sony Wave64 2.1: GUIDs for names, 64-bit sizes that include the 24 bytes of the head."""
    tail = bytes.fromhex("f3acd3118cd100c04f8edb8a")
    fmt = b"fmt " + tail + struct.pack("<qHHIIHH", 40, 1, 1, RATE_HZ, RATE_HZ * 2, 2, 16)
    sound = b"data" + tail + struct.pack("<q", 24 + len(data)) + data
    head = b"riff" + bytes.fromhex("2e91cf11a5d628db04c10000")
    return head + struct.pack("<q", 40 + len(fmt) + len(sound)) + b"wave" + tail + fmt + sound


CODES = np.array([0, 1, -1, 32767, -32768, 1234], dtype="<i2")


def tone(seconds: float = 1.0, rate: int = RATE_HZ) -> np.ndarray:
    """A decaying 440 Hz tone with a little noise, so that no coder finds it trivial."""
    time_s = np.arange(round(seconds * rate)) / rate
    return 0.5 * np.exp(-3 * time_s) * np.sin(2 * np.pi * 440 * time_s) + np.random.default_rng(1).normal(0, 0.01, len(time_s))


def save(folder: Path, content: bytes, name: str = "tap.wav") -> Path:
    path = folder / name
    path.write_bytes(content)
    return path


def coded(folder: Path, container: str, subtype: str, seconds: float = 1.0) -> Path:
    """A file written by libsndfile."""
    path = folder / f"tone-{subtype}.{container.lower()}"
    soundfile.write(path, tone(seconds), RATE_HZ, format=container, subtype=subtype)
    return path


def refusal(path: str | Path, **options: float) -> RecordingError:
    """The error that loading `path` ends in; every one is a sentence that names the file and closes with a full stop or a command."""
    with pytest.raises(RecordingError) as caught:
        Recording.load(path, **options)
    error = caught.value
    assert error.exit_status == 4 and len(error.says) > 40 and error.says.endswith((".", ".wav"))
    return error


# --- read exactly


def pcm24(codes: list[int]) -> bytes:
    return b"".join(code.to_bytes(3, "little", signed=True) for code in codes)


@pytest.mark.parametrize(
    ("data", "bits", "tag", "expected", "dtype"),
    [
        (bytes([128, 129, 0, 255]), 8, 1, [0, 1 / 128, -1, 127 / 128], "float32"),
        (CODES.tobytes(), 16, 1, CODES / 32768, "float32"),
        (pcm24([0, 1, -1, 8388607, -8388608]), 24, 1, np.array([0, 1, -1, 8388607, -8388608]) / 2**23, "float32"),
        (struct.pack("<4i", 0, 1, 2**31 - 1, -(2**31)), 32, 1, np.array([0, 1, 2**31 - 1, -(2**31)]) / 2**31, "float64"),
        (struct.pack("<3f", 0.1, -1.5, 1e-30), 32, 3, np.array([0.1, -1.5, 1e-30], dtype=np.float32), "float32"),
        (struct.pack("<3d", 0.1, -1.5, 1e-300), 64, 3, [0.1, -1.5, 1e-300], "float64"),
    ],
)
def test_wav_codings_are_exact(tmp_path: Path, data: bytes, bits: int, tag: int, expected: list[float], dtype: str) -> None:
    """Every coding gives code / 2^(bits-1), bit for bit, in float32 where that holds it and in float64 where not."""
    recording = Recording.load(save(tmp_path, wav_bytes(data, bits=bits, tag=tag)))
    assert recording.samples.dtype == dtype
    assert_array_equal(recording.samples[:, 0], np.asarray(expected))
    assert recording.origin is not None and recording.origin.bits == bits and not recording.doubts


@pytest.mark.parametrize(
    ("make", "container"),
    [(wav_bytes, "WAV"), (rf64_bytes, "RF64"), (aiff_bytes, "AIFF"), (caf_bytes, "CAF"), (w64_bytes, "W64")],
)
def test_containers_are_exact(tmp_path: Path, make: Callable[[bytes], bytes], container: str) -> None:
    """The same samples in every uncompressed container, whatever the file is called; no doubt is raised."""
    recording = Recording.load(save(tmp_path, make(CODES.tobytes()), "recording.bin"))
    assert_array_equal(recording.samples[:, 0], CODES / 32768)
    assert recording.origin is not None
    assert (recording.origin.format, recording.rate, recording.doubts) == (container, 48_000.0, ())


@pytest.mark.parametrize(("container", "subtype"), [("FLAC", "PCM_16"), ("CAF", "ALAC_16"), ("WAVEX", "PCM_16")])
def test_lossless_coders_are_exact(tmp_path: Path, container: str, subtype: str) -> None:
    """What libsndfile packed without loss comes back as code / 2^15."""
    codes = np.random.default_rng(7).integers(-32768, 32768, 5000, dtype=np.int16)
    path = tmp_path / "packed"
    soundfile.write(path, codes, RATE_HZ, format=container, subtype=subtype)
    recording = Recording.load(path)
    assert_array_equal(recording.samples[:, 0], codes / 32768)
    assert recording.origin is not None and not recording.origin.lossy and recording.origin.bits == 16


@pytest.mark.parametrize(
    ("container", "subtype"),
    [("OGG", "VORBIS"), ("OGG", "OPUS"), ("MP3", "MPEG_LAYER_III"), ("WAV", "ULAW"), ("WAV", "MS_ADPCM"), ("WAV", "IMA_ADPCM")],
)
def test_lossy_coders_are_doubted(tmp_path: Path, container: str, subtype: str) -> None:
    """They are read (level within 1 dB of what was written) with the doubt "lossy", which names the coder; a lossy WAV is no exception."""
    recording = Recording.load(coded(tmp_path, container, subtype))
    assert recording.origin is not None and recording.origin.lossy and recording.origin.bits is None
    assert [doubt.code for doubt in recording.doubts] == ["lossy"]
    assert subtype in recording.doubts[0].says
    assert abs(20 * np.log10(np.std(recording.samples) / np.std(tone()))) < 1.0
    assert_allclose(recording.duration_s, 1.0, rtol=0.05, atol=0)


def test_channels_stay_apart(tmp_path: Path) -> None:
    """Two channels come back as two columns; `channel` counts from 1."""
    path = save(tmp_path, wav_bytes(CODES.tobytes(), channels=2))
    assert_array_equal(Recording.load(path).channel(2), CODES[1::2] / 32768)


def test_sixty_four_channels_are_read(tmp_path: Path) -> None:
    """64 channels are read; 65 are refused with the number."""
    assert Recording.load(save(tmp_path, wav_bytes(bytes(64 * 2 * 10), channels=64))).channels == 64
    error = refusal(save(tmp_path, wav_bytes(bytes(65 * 2 * 10), channels=65)))
    assert error.code == "too-many-channels" and "has 65 channels" in error.says


def test_origin_is_the_file(tmp_path: Path) -> None:
    """The digest is of the file's bytes, and the name the one given."""
    content = wav_bytes(CODES.tobytes())
    path = save(tmp_path, content)
    origin = Recording.load(path).origin
    assert origin == qmeter.recording.Origin(str(path), hashlib.sha256(content).hexdigest(), "WAV", "PCM_16", False, 16)


def test_it_is_a_recording_made_of_samples_too() -> None:
    """The public class takes samples and a rate as well, and is the pure one to whoever asks."""
    recording = Recording(np.zeros(100), RATE_HZ)
    assert isinstance(recording, qmeter.recording.Recording) and recording.origin is None


@pytest.mark.parametrize("rate", [8000, 11_025, 44_100, 192_000])
def test_rates_that_are_read(tmp_path: Path, rate: int) -> None:
    """From 8 to 192 kHz, both ends included."""
    assert Recording.load(save(tmp_path, wav_bytes(rate=rate))).rate == rate


@pytest.mark.parametrize("rate", [0, 1, 7999, 192_001, 2**31 - 1])
def test_rates_that_are_refused(tmp_path: Path, rate: int) -> None:
    """The rate is named, also where libsndfile will not open the file (0)."""
    error = refusal(save(tmp_path, wav_bytes(rate=rate)))
    assert error.code == "bad-rate" and f"sample rate of {rate:g} Hz" in error.says


# --- a part of a file


@pytest.mark.parametrize(
    ("container", "subtype"),
    [
        ("WAV", "PCM_24"),
        ("FLAC", "PCM_24"),
        ("AIFF", "PCM_16"),
        ("CAF", "ALAC_16"),
        ("OGG", "VORBIS"),
        ("OGG", "OPUS"),
        ("MP3", "MPEG_LAYER_III"),
    ],
)
def test_a_part_is_the_same_part_of_the_whole(tmp_path: Path, container: str, subtype: str) -> None:
    """Reading from 0.7 to 1.9 s gives, sample by sample, what reading all and cutting gives."""
    path = coded(tmp_path, container, subtype, seconds=3.0)
    part = Recording.load(path, from_s=0.7, to_s=1.9)
    assert_array_equal(part.samples, Recording.load(path).between(0.7, 1.9).samples)
    assert part.frames == round(1.2 * RATE_HZ)
    assert_allclose(part.starts_at_s, 0.7, rtol=1e-12, atol=0)


@pytest.mark.parametrize(("from_s", "to_s"), [(1.0, None), (5.0, 6.0), (0.0, 1.5)])
def test_a_part_beyond_the_end_is_refused(tmp_path: Path, from_s: float, to_s: float | None) -> None:
    """With the length, so that the next try can be right; also where the length is known only after decoding."""
    path = coded(tmp_path, "FLAC", "PCM_16")
    for file in (path, save(tmp_path, without_length(path.read_bytes()), "streamed.flac")):
        with pytest.raises(RecordingError, match="lasts 1 s") as caught:
            Recording.load(file, from_s=from_s, to_s=to_s)
        assert caught.value.code == "outside"


def test_a_part_that_cannot_be_meant_is_a_usage_error(tmp_path: Path) -> None:
    """An end before the start."""
    with pytest.raises(UsageError, match="end after it starts"):
        Recording.load(save(tmp_path, wav_bytes()), from_s=2.0, to_s=1.0)


# --- cut short


def without_length(flac: bytes) -> bytes:
    """FLAC as written to a pipe: the 36 bits of STREAMINFO that count the samples are zero (RFC 9639, 8.2)."""
    return flac[:21] + bytes([flac[21] & 0xF0]) + bytes(4) + flac[26:]


@pytest.mark.parametrize("make", [wav_bytes, rf64_bytes, aiff_bytes, w64_bytes])
def test_a_truncated_file_is_read_as_far_as_it_goes(tmp_path: Path, make: Callable[[bytes], bytes]) -> None:
    """Half the samples are gone: the others are read, and the doubt says how many bytes were promised and how many are there."""
    codes = np.arange(2000, dtype="<i2")
    content = make(codes.tobytes())
    recording = Recording.load(save(tmp_path, content[:-2000]))
    assert_array_equal(recording.samples[:, 0], codes[:1000] / 32768)
    assert [doubt.code for doubt in recording.doubts] == ["truncated"]
    assert "promises 400" in recording.doubts[0].says and "200" in recording.doubts[0].says


def test_a_truncated_caf_is_refused(tmp_path: Path) -> None:
    """libsndfile opens no CAF whose data reach beyond the file; the sentence has both figures."""
    error = refusal(save(tmp_path, caf_bytes(bytes(2000))[:-1000]))
    assert error.code == "truncated" and "promises 2004 bytes of sound, 1004 are there" in error.says


@pytest.mark.parametrize(("container", "subtype"), [("FLAC", "PCM_16"), ("MP3", "MPEG_LAYER_III")])
def test_a_truncated_packed_file_is_read_as_far_as_it_goes(tmp_path: Path, container: str, subtype: str) -> None:
    """Half the bytes: about half the sound is read, equal to the whole's first part, and doubted with its length."""
    path = coded(tmp_path, container, subtype, seconds=4.0)
    whole = Recording.load(path)
    content = path.read_bytes()
    cut = Recording.load(save(tmp_path, content[: len(content) // 2]))
    assert 0.3 * whole.frames < cut.frames < 0.7 * whole.frames
    assert_allclose(cut.samples[:40_000], whole.samples[:40_000], rtol=0, atol=1e-6)
    doubt = next(doubt for doubt in cut.doubts if doubt.code == "truncated")
    assert f"{cut.duration_s:.6g} s of 4 s promised could be decoded" in doubt.says


@pytest.mark.parametrize("subtype", ["VORBIS", "OPUS"])
def test_what_is_missing_from_ogg_is_said(tmp_path: Path, subtype: str) -> None:
    """The decoder joins what is left without a word; the page numbers and the end mark tell, wherever the piece was taken out."""
    content = coded(tmp_path, "OGG", subtype, seconds=6.0).read_bytes()
    pages = [place for place in range(len(content)) if content[place : place + 4] == b"OggS"]
    assert len(pages) > 5
    lost = {
        "its last page is cut off": content[:-10],
        "its pages break off": content[: pages[-1] + 20],
        "its last page is missing": content[: pages[-1]],
        "pages are missing before page 4": content[: pages[3]] + content[pages[4] :],
    }
    for says, left in lost.items():
        recording = Recording.load(save(tmp_path, left))
        doubts = [doubt.says for doubt in recording.doubts if doubt.code == "truncated"]
        assert len(doubts) == 1 and (says in doubts[0] or "could be decoded" in doubts[0]), (says, doubts)
    sound = Recording.load(save(tmp_path, content))
    assert [doubt.code for doubt in sound.doubts] == ["lossy"]


def test_a_damaged_flac_is_read_up_to_the_damage(tmp_path: Path) -> None:
    """A hole in the middle: nothing after it is passed off as sound, and what comes before is exact."""
    path = coded(tmp_path, "FLAC", "PCM_16", seconds=4.0)
    whole = Recording.load(path)
    content = path.read_bytes()
    third = len(content) // 3
    holed = Recording.load(save(tmp_path, content[:third] + content[third + 3000 :]))
    assert 0.1 * whole.frames < holed.frames < 0.45 * whole.frames
    assert_array_equal(holed.samples, whole.samples[: holed.frames])
    assert [doubt.code for doubt in holed.doubts] == ["truncated"]


def test_flac_of_unknown_length_is_read_whole(tmp_path: Path) -> None:
    """A FLAC stream from a pipe has no length in its head; it is read to its end, without a doubt."""
    path = coded(tmp_path, "FLAC", "PCM_16", seconds=3.0)
    streamed = Recording.load(save(tmp_path, without_length(path.read_bytes()), "streamed.flac"))
    assert_array_equal(streamed.samples, Recording.load(path).samples)
    assert streamed.doubts == ()
    part = Recording.load(tmp_path / "streamed.flac", from_s=1.5, to_s=2.25)
    assert_array_equal(part.samples, streamed.between(1.5, 2.25).samples)


@pytest.mark.parametrize("promised", [0xFFFFFFFF, 0x7FFFF000])
def test_wav_from_a_pipe_is_not_called_truncated(tmp_path: Path, promised: int) -> None:
    """Programs that stream WAV write these sizes and mean "up to the end" (common practice)."""
    recording = Recording.load(save(tmp_path, wav_bytes(CODES.tobytes(), promised=promised)))
    assert recording.frames == len(CODES) and recording.doubts == ()


def test_a_two_gigabyte_header_costs_nothing(tmp_path: Path) -> None:
    """200 bytes of sound behind a header that promises 2 GB: under 8 MB are used, and the doubt has both figures."""
    path = save(tmp_path, wav_bytes(promised=2_000_000_000))
    recording, peak = measured(lambda: Recording.load(path))
    assert recording.frames == 100 and peak < 8e6
    assert "2000000000 bytes of sound and 200 are there" in recording.doubts[0].says


def test_a_long_length_in_flac_costs_nothing(tmp_path: Path) -> None:
    """STREAMINFO claims a hundred million samples: what is there is read, in under 8 MB."""
    content = coded(tmp_path, "FLAC", "PCM_16", seconds=0.5).read_bytes()
    path = save(tmp_path, content[:22] + struct.pack(">I", 100_000_000) + content[26:])
    recording, peak = measured(lambda: Recording.load(path))
    assert recording.frames == 24_000 and peak < 8e6
    assert [doubt.code for doubt in recording.doubts] == ["truncated"]


# --- memory


def measured(load: Callable[[], Recording]) -> tuple[Recording, int]:
    """What was loaded, and the peak of Python's and numpy's memory meanwhile, bytes (the libraries are loaded beforehand)."""
    tracemalloc.start()
    try:
        return load(), tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize(("container", "subtype"), [("WAV", "PCM_24"), ("FLAC", "PCM_24"), ("OGG", "VORBIS")])
def test_loading_needs_the_samples_once(tmp_path: Path, container: str, subtype: str) -> None:
    """The peak is at most 1.6 times the samples as float32 (a buffer grows by half) and 3 MB beside them."""
    path = coded(tmp_path, container, subtype, seconds=20.0)
    recording, peak = measured(lambda: Recording.load(path))
    assert recording.samples.nbytes == 20 * RATE_HZ * 4
    assert peak < 1.6 * recording.samples.nbytes + 3e6


def test_a_file_made_to_fill_memory_is_refused(tmp_path: Path) -> None:
    """18 million zeros pack into a FLAC of some ten kilobytes; unpacking stops near 64 MB and says why."""
    path = tmp_path / "nothing.flac"
    with soundfile.SoundFile(path, "w", RATE_HZ, 1, "PCM_16", format="FLAC") as file:
        for _ in range(18):
            file.write(np.zeros(1_000_000, dtype=np.int16))
    tracemalloc.start()
    error = refusal(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert error.code == "expands-too-far" and "512 times its size" in error.says
    assert peak < 1.6 * decode.FREE_BYTES
    assert Recording.load(path, from_s=10, to_s=20).frames == 480_000


def test_too_long_is_refused_before_it_is_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Beyond the most samples read at once: the way out is to name a part, and that works."""
    monkeypatch.setattr(decode, "MOST_SAMPLES", 40_000)
    path = coded(tmp_path, "WAV", "PCM_16")
    error = refusal(path)
    assert error.code == "too-long" and "--from and --to" in error.says
    assert Recording.load(path, from_s=0.1, to_s=0.5).frames == 19_200
    assert refusal(save(tmp_path, without_length(coded(tmp_path, "FLAC", "PCM_16", 3.0).read_bytes()))).code == "too-long"


# --- bad input


def float_wav(*values: float) -> bytes:
    return wav_bytes(struct.pack(f"<{len(values)}f", *values), bits=32, tag=3)


@pytest.mark.parametrize(
    ("content", "code", "says"),
    [
        (b"", "empty", r"is empty \(0 bytes\)"),
        (b"R", "text", "is text"),
        (b"Tap 1: the plate, in the middle\n" * 20, "text", "is text, not sound"),
        ("Überprüfung\n".encode("utf-16"), "text", "is text"),
        (b"\x89PNG\r\n\x1a\n" + bytes(range(256)), "unknown-format", "89 50 4e 47"),
        (bytes(1000), "unknown-format", "00 00 00 00"),
        (wav_bytes(b""), "no-samples", r"no samples \(0 frames\)"),
        (wav_bytes(b"\x01"), "no-samples", r"0 frames"),
        (wav_bytes(promised=0), "no-samples", "200 bytes follow: the recorder was stopped"),
        (wav_bytes()[:36], "unreadable", "cannot be read as one"),
        (wav_bytes()[:12], "unreadable", "begins like a WAV file"),
        (wav_bytes(channels=0), "unreadable", "begins like a WAV file"),
        (wav_bytes(bytes(8000), channels=2000), "unreadable", "begins like a WAV file"),
        (wav_bytes(tag=0x1234), "unreadable", "begins like a WAV file"),
        (
            float_wav(0.0, float("nan"), float("inf")),
            "not-finite",
            r"2 samples that are NaN or Inf, the first at 0\.0000 s \(frame 1, channel 1\)",
        ),
        (float_wav(0.0, 3e38), "too-large", "a sample of 3e[+]38 times full scale"),
        (b"fLaC" + bytes(50), "unreadable", "begins like a FLAC file"),
        (b"OggS" + bytes(50), "unreadable", "begins like a OGG file"),
        (b"caff" + bytes(50), "unreadable", "begins like a CAF file"),
    ],
)
def test_bad_files_are_refused_in_a_sentence(tmp_path: Path, content: bytes, code: str, says: str) -> None:
    """Each kind of broken file has its own code, and a sentence that begins with its name and tells what was found."""
    path = save(tmp_path, content)
    with pytest.raises(RecordingError, match=says) as caught:
        Recording.load(path)
    assert caught.value.code == code
    assert caught.value.says.startswith(f"{path} ")
    assert caught.value.says.count(".") >= 2, "what was found, and the way out"


@pytest.mark.parametrize("content", [wav_bytes(bytes(2000)), wav_bytes(b"\x00\x10" * 1000), wav_bytes(b"\x00\x10")])
def test_dull_files_are_read(tmp_path: Path, content: bytes) -> None:
    """All zeros, DC only and a single sample are recordings; that nothing rings in them is for the measurement to say."""
    assert Recording.load(save(tmp_path, content)).frames in (1, 1000)


def test_missing_folder_and_odd_names(tmp_path: Path) -> None:
    """What is not there, what is a folder, what is no file, and names that cannot be opened or shown."""
    assert refusal(tmp_path / "nope.wav").code == "missing"
    folder = refusal(tmp_path)
    assert folder.code == "folder" and f"{tmp_path}/*.wav" in folder.says
    assert refusal("/dev/zero" if os.name == "posix" else tmp_path).code in ("not-a-file", "folder")
    assert refusal("a\0b.wav").code == "unreadable"
    assert refusal("x" * 5000).code == "unreadable"
    assert "\\x1b[31mred\\n.wav" in refusal("\x1b[31mred\n.wav").says
    assert "caf\\udce9.wav" in refusal(os.fsdecode(b"caf\xe9.wav")).says


@contextlib.contextmanager
def as_nobody() -> Iterator[None]:
    """Root may read everything: step down while it lasts."""
    if os.name != "posix" or os.geteuid() != 0:
        yield
        return
    os.seteuid(65534)
    try:
        yield
    finally:
        os.seteuid(0)


@pytest.mark.skipif(os.name != "posix", reason="permissions of POSIX")
def test_no_permission_is_said() -> None:
    """A file that this user may not read says so, and how to mend it."""
    with tempfile.TemporaryDirectory() as folder:
        os.chmod(folder, 0o755)
        path = save(Path(folder), wav_bytes())
        os.chmod(path, 0)
        with as_nobody():
            error = refusal(path)
    assert error.code == "no-permission" and "chmod u+r" in error.says


# --- standard input and pipes

SCRIPT = """
import sys
from qmeter.errors import QmeterError
from qmeter.sound.files import Recording
try:
    recording = Recording.load(sys.argv[1] if len(sys.argv) > 1 else "-")
    print(recording.frames, recording.origin.file, recording.origin.sha256)
except QmeterError as error:
    print(error.code, error)
"""


def piped(content: bytes | None, *arguments: str, script: str = SCRIPT, **options: object) -> str:
    """What SCRIPT prints with `content` on its standard input."""
    environment = {**os.environ, "PYTHONPATH": str(REPOSITORY), "OPENBLAS_NUM_THREADS": "1"}
    done = subprocess.run(  # type: ignore[call-overload]
        [sys.executable, "-c", script, *arguments], input=content, capture_output=True, timeout=60, env=environment, **options
    )
    assert done.returncode == 0 and not done.stderr, done.stderr.decode()
    return str(done.stdout.decode().strip())


@pytest.mark.parametrize(("container", "subtype"), [("WAV", "PCM_24"), ("OGG", "VORBIS"), ("MP3", "MPEG_LAYER_III")])
def test_standard_input_is_read(tmp_path: Path, container: str, subtype: str) -> None:
    """ "-" reads the same bytes as the file: same digest, same length; the name stays "-"."""
    path = coded(tmp_path, container, subtype)
    whole = Recording.load(path)
    assert whole.origin is not None
    assert piped(path.read_bytes()) == f"{whole.frames} - {whole.origin.sha256}"


def test_unreadable_standard_input() -> None:
    """Nothing, text, and a pipe that was closed or is a folder: each is told apart, in words."""
    assert piped(b"").startswith("empty Standard input is empty")
    assert piped(b"no sound in here\n" * 10).startswith("text Standard input is text")
    closed = piped(None, script="import sys; sys.stdin = None\n" + SCRIPT)
    assert closed.startswith("unreadable Standard input (-) is closed") and "< tap.wav" in closed


@pytest.mark.skipif(os.name != "posix", reason="descriptors of POSIX")
def test_standard_input_that_is_no_pipe(tmp_path: Path) -> None:
    """A descriptor that cannot be read, an endless device and a terminal on standard input are refused at once."""
    with open(tmp_path / "written.wav", "wb") as write_only:
        assert piped(None, stdin=write_only).startswith("unreadable Standard input cannot be read: Bad file descriptor")
    with open("/dev/zero", "rb") as endless:
        assert piped(None, stdin=endless).startswith("unknown-format Standard input is no sound file")
    controller, terminal = os.openpty()
    assert piped(None, stdin=terminal).startswith("unreadable Standard input (-) is the keyboard")
    os.close(controller)
    os.close(terminal)


@pytest.mark.skipif(not hasattr(os, "mkfifo"), reason="named pipes of POSIX")
def test_a_named_pipe_is_read(tmp_path: Path) -> None:
    """`qmeter replay <(...)` hands over a pipe with a name."""
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    source = save(tmp_path, wav_bytes(CODES.tobytes()))
    with subprocess.Popen(["sh", "-c", 'cat "$1" > "$2"', "sh", str(source), str(pipe)]) as writer:
        assert piped(b"", str(pipe)).startswith(f"{len(CODES)} ")
        assert writer.wait(timeout=10) == 0


def test_the_caf_decoder_does_not_write_to_the_screen(tmp_path: Path) -> None:
    """A damaged packet table in CAF makes the C decoder write to stdout, where JSON may be expected."""
    content = bytearray(coded(tmp_path, "CAF", "ALAC_16").read_bytes())
    sizes = content.index(b"pakt") + 12 + 24  # after the chunk's head and the table's
    content[sizes : sizes + 6] = b"\xff" * 6
    path = save(tmp_path, bytes(content))
    noisy = piped(b"", str(path), script="import soundfile, sys; soundfile.SoundFile(sys.argv[1])")
    assert "alac_pakt_read_decode" in noisy, "this build is silent, and the check below shows nothing"
    assert piped(b"", str(path)).startswith("no-samples ")


def test_the_mp3_decoder_does_not_write_to_the_screen(tmp_path: Path) -> None:
    """A damaged MP3 makes the C decoder write notes to stderr; `piped` fails if one gets through."""
    content = coded(tmp_path, "MP3", "MPEG_LAYER_III", 3.0).read_bytes()
    third = len(content) // 3
    path = save(tmp_path, content[:third] + content[third + 1001 :], "holed.mp3")
    assert int(piped(b"", str(path)).split()[0]) > RATE_HZ


# --- AAC


def aac_file(folder: Path, container: str, codec: str = "aac", options: dict[str, str] | None = None) -> Path:
    """A tone as M4A or ADTS, written by FFmpeg."""
    av = pytest.importorskip("av", reason="the extra `aac` is not installed")
    path = folder / "telephone.wav"  # AAC renamed .wav, as mail programs do
    with av.open(str(path), "w", format=container, options=options or {}) as output:
        track = output.add_stream(codec, rate=RATE_HZ, layout="mono")
        frame = av.AudioFrame.from_ndarray(tone(2.0).astype(np.float32)[None, :], format="fltp", layout="mono")
        frame.sample_rate = RATE_HZ
        frame.pts = 0
        for piece in av.AudioResampler(format=track.format, layout="mono", rate=RATE_HZ).resample(frame):
            output.mux(track.encode(piece))
        output.mux(track.encode(None))
    return path


@pytest.mark.parametrize(("container", "shown"), [("mp4", "M4A"), ("adts", "ADTS")])
def test_aac_is_read_whatever_it_is_called(tmp_path: Path, container: str, shown: str) -> None:
    """By content, at the right level and length (to within AAC's packets of 1024), with the doubt; and any part of it."""
    path = aac_file(tmp_path, container)
    recording = Recording.load(path)
    assert recording.origin is not None
    assert (recording.origin.format, recording.origin.subtype, recording.rate) == (shown, "AAC", 48_000.0)
    assert [doubt.code for doubt in recording.doubts] == ["lossy"]
    assert abs(recording.frames - 2 * RATE_HZ) <= 3 * 1024
    assert abs(20 * np.log10(np.std(recording.samples) / np.std(tone(2.0)))) < 1.0
    part = Recording.load(path, from_s=0.5, to_s=1.25)
    assert_array_equal(part.samples, recording.between(0.5, 1.25).samples)
    assert refusal(path, from_s=9.0).code == "outside"


def test_a_truncated_m4a_is_read_as_far_as_it_goes(tmp_path: Path) -> None:
    """With the index in front and half the sound gone, the rest is read and doubted; with the index behind it nothing can be."""
    content = aac_file(tmp_path, "mp4", options={"movflags": "+faststart"}).read_bytes()
    whole = Recording.load(save(tmp_path, content))
    cut = Recording.load(save(tmp_path, content[: len(content) * 6 // 10]))
    assert 0.2 * whole.frames < cut.frames < 0.8 * whole.frames
    assert sorted(doubt.code for doubt in cut.doubts) == ["lossy", "truncated"]
    behind = aac_file(tmp_path, "mp4").read_bytes()
    assert refusal(save(tmp_path, behind[: len(behind) * 6 // 10])).code == "unreadable"


def test_apple_lossless_carries_no_doubt(tmp_path: Path) -> None:
    """ALAC in M4A goes the same way and is exact: what FFmpeg packed in 16 bits is within half a step of what was given."""
    recording = Recording.load(aac_file(tmp_path, "mp4", "alac"))
    assert recording.doubts == () and recording.frames == 2 * RATE_HZ
    assert_allclose(recording.samples[:, 0], tone(2.0), rtol=0, atol=1 / 32768)


def test_aac_without_pyav_says_how(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Where the extra is missing: what the file is, what to install, how to convert it."""
    monkeypatch.setitem(sys.modules, "av", None)
    head = b"\x00\x00\x00\x1cftypM4A \x00\x00\x02\x00M4A isomiso2"
    error = refusal(save(tmp_path, head + bytes(100)))
    assert error.code == "needs-aac"
    assert 'pip install "av<19"' in error.says and "ffmpeg -i" in error.says


@pytest.mark.parametrize("content", [b"\x00\x00\x00\x1cftypM4A \x00\x00\x02\x00M4A isomiso2" + bytes(100), b"\xff\xf1" + bytes(200)])
def test_broken_aac_is_refused(tmp_path: Path, content: bytes) -> None:
    """A head of AAC with nothing behind it."""
    pytest.importorskip("av", reason="the extra `aac` is not installed")
    assert refusal(save(tmp_path, content)).code in ("unreadable", "no-samples", "bad-rate")


# --- recognising


@pytest.mark.parametrize("container", ["WAV", "RF64", "W64", "AIFF", "CAF", "FLAC", "OGG", "MP3"])
def test_containers_are_recognised_by_content(tmp_path: Path, container: str) -> None:
    """libsndfile's own files of every format."""
    subtype = {"OGG": "OPUS", "MP3": "MPEG_LAYER_III"}.get(container, "PCM_16")
    assert headers.container_of(coded(tmp_path, container, subtype).read_bytes()[: headers.HEAD_BYTES]) == container


def test_the_walk_over_chunks_ends(tmp_path: Path) -> None:
    """A file of a hundred thousand empty chunks is given up after a thousand; so is a W64 whose chunk has a size of zero."""
    riff = save(tmp_path, b"RIFF\xff\xff\xff\xffWAVE" + (b"junk" + bytes(4)) * 100_000)
    wide = save(tmp_path, w64_bytes(b"")[:40] + bytes(24 * 1000), "zero.w64")
    for path, container in ((riff, "WAV"), (wide, "W64")):
        with open(path, "rb") as file:
            assert headers.sound_chunk(file, container, path.stat().st_size) is None
        assert refusal(path).code == "unreadable"


def test_importing_loads_no_decoder() -> None:
    """soundfile and av are loaded by the first file, not by the import."""
    script = "import sys, qmeter.sound.files; print(sorted({'soundfile', 'av', 'scipy.signal'} & set(sys.modules)))"
    assert piped(b"", script=script) == "[]"


# --- writing


@pytest.mark.parametrize(("subtype", "bits"), [("PCM_U8", 8), ("PCM_16", 16), ("PCM_24", 24), ("PCM_32", 32)])
def test_wav_is_written_exactly(tmp_path: Path, subtype: str, bits: int) -> None:
    """Samples on the grid of the integers come back unchanged, read by libsndfile alone; +1 becomes the highest step."""
    full = 2 ** (bits - 1)
    codes = np.array([[0, 1], [-1, full - 1], [-full, full]], dtype=np.int64)
    path = tmp_path / "out.wav"
    write_wav(path, codes / full, 44_100, subtype)
    back, rate = soundfile.read(path, dtype="int32", always_2d=True)
    assert rate == 44_100 and soundfile.info(path).subtype == subtype
    assert_array_equal(back >> (32 - bits), np.minimum(codes, full - 1))


@pytest.mark.parametrize(("subtype", "bits"), [("PCM_S8", 8), ("PCM_16", 16), ("PCM_24", 24)])
def test_flac_is_written_exactly(tmp_path: Path, subtype: str, bits: int) -> None:
    """As WAV."""
    codes = np.random.default_rng(3).integers(-(2 ** (bits - 1)), 2 ** (bits - 1), 100_000)
    path = tmp_path / "out.flac"
    write_flac(path, codes / 2 ** (bits - 1), RATE_HZ, subtype)
    back, _ = soundfile.read(path, dtype="int32")
    assert soundfile.info(path).format == "FLAC"
    assert_array_equal(back >> (32 - bits), codes)


def test_floats_are_written_beyond_full_scale(tmp_path: Path) -> None:
    """FLOAT and DOUBLE hold any level, unchanged."""
    samples = np.array([0.1, -3.0, 2.5])
    for subtype, dtype in (("FLOAT", np.float32), ("DOUBLE", np.float64)):
        write_wav(tmp_path / "out.wav", samples, RATE_HZ, subtype)
        assert_array_equal(soundfile.read(tmp_path / "out.wav", dtype="float64")[0], samples.astype(dtype))


def test_clipping_is_refused(tmp_path: Path) -> None:
    """One sample beyond full scale in an integer file is an error with the figure, and no file is left behind."""
    path = tmp_path / "out.wav"
    with pytest.raises(RecordingError, match=r"1 samples? lies? beyond full scale, by up to 6\.02 dB.*Scale by 0\.5") as caught:
        write_wav(path, [0.0, -2.0, 1.0], RATE_HZ)
    assert caught.value.code == "would-clip" and not path.exists()


def test_other_refusals_of_writing(tmp_path: Path) -> None:
    """An unknown coding, half a hertz, NaN, and a place that cannot be written."""
    with pytest.raises(UsageError, match="WAV is not written as PCM_12; choose one of PCM_U8"):
        write_wav(tmp_path / "out.wav", [0.0], RATE_HZ, "PCM_12")
    with pytest.raises(UsageError, match="FLAC is not written as FLOAT"):
        write_flac(tmp_path / "out.flac", [0.0], RATE_HZ, "FLOAT")
    with pytest.raises(UsageError, match=r"whole number of hertz; 44100\.5 Hz"):
        write_wav(tmp_path / "out.wav", [0.0], 44_100.5)  # type: ignore[arg-type]
    with pytest.raises(RecordingError, match="NaN or Inf"):
        write_wav(tmp_path / "out.wav", [float("nan")], RATE_HZ)
    with pytest.raises(RecordingError, match=r"cannot be written: .*No such file") as caught:
        write_wav(tmp_path / "nowhere" / "out.wav", [0.0], RATE_HZ)
    assert caught.value.code == "unwritable"


def test_writing_is_reproducible(tmp_path: Path) -> None:
    """The same samples give the same bytes (no time of day in the header)."""
    for path in (tmp_path / "a.wav", tmp_path / "b.wav"):
        write_wav(path, tone(0.1), RATE_HZ)
    assert (tmp_path / "a.wav").read_bytes() == (tmp_path / "b.wav").read_bytes()
