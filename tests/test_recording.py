"""Recording: what is kept, what is refused, and in which words."""

from __future__ import annotations

import dataclasses
import pickle

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal

from qmeter.errors import RecordingError, UsageError
from qmeter.recording import MOST_CHANNELS, Origin, Recording, SourceDoubt


def test_one_dimension_becomes_one_channel() -> None:
    """(frames,) is kept as (frames, 1), and frames, channels and duration follow from it."""
    recording = Recording(np.linspace(-1, 1, 4800), 48_000)
    assert recording.samples.shape == (4800, 1)
    assert (recording.frames, recording.channels, recording.rate) == (4800, 1, 48_000.0)
    assert_allclose(recording.duration_s, 0.1, rtol=1e-12, atol=0)


def test_channels_count_from_one() -> None:
    """channel(1) is the first column, as contiguous float64; 0 and one too many are refused with the range."""
    samples = np.arange(20, dtype=np.float32).reshape(10, 2) / 32
    recording = Recording(samples, 8000)
    second = recording.channel(2)
    assert second.dtype == np.float64 and second.flags.c_contiguous
    assert_array_equal(second, samples[:, 1].astype(np.float64))
    for number in (0, 3, -1):
        with pytest.raises(RecordingError, match="has 2 channels; there is no channel") as caught:
            recording.channel(number)
        assert caught.value.code == "no-such-channel"


def test_samples_cannot_be_changed() -> None:
    """Neither through the recording, nor through the caller's array, nor after a trip through pickle; nor can a field be set."""
    mine = np.zeros(100)
    recording = Recording(mine, 48_000)
    mine[0] = 9.0
    assert recording.samples[0, 0] == 0.0
    for kept in (recording, pickle.loads(pickle.dumps(recording))):
        with pytest.raises(ValueError, match="read-only"):
            kept.samples[0, 0] = 1.0
        with pytest.raises(ValueError, match="read-only"):
            kept.channel(1)[0] = 1.0
    with pytest.raises(dataclasses.FrozenInstanceError):
        recording.rate = 1.0  # type: ignore[misc]


def test_read_only_view_of_a_writable_array_is_copied() -> None:
    """A read-only view does not protect from its writable base, so it is copied; an owned read-only array is kept as it is."""
    base = np.zeros((10, 1), dtype=np.float32)
    view = base[:]
    view.flags.writeable = False
    recording = Recording(view, 48_000)
    base[0] = 1.0
    assert recording.samples[0, 0] == 0.0
    owned = np.ones((10, 1), dtype=np.float32)
    owned.flags.writeable = False
    assert Recording(owned, 48_000).samples is owned


@pytest.mark.parametrize(("given", "kept"), [("float32", "float32"), ("float64", "float64"), ("float16", "float64"), (">f8", "float64")])
def test_kept_type(given: str, kept: str) -> None:
    """float32 stays (half the memory), all other floats become native float64."""
    assert Recording(np.ones(4, dtype=given), 48_000).samples.dtype == np.dtype(kept)


@pytest.mark.parametrize(("dtype", "lowest", "zero"), [("int16", -32768, 0), ("int32", -(2**31), 0), ("uint8", 0, 128)])
def test_pcm_integers_are_scaled(dtype: str, lowest: int, zero: int) -> None:
    """The lowest code of PCM is -1 and its zero 0 (definition of two's complement and offset PCM)."""
    recording = Recording(np.array([lowest, zero], dtype=dtype), 48_000)
    assert_array_equal(recording.samples[:, 0], [-1.0, 0.0])


@pytest.mark.parametrize(
    ("samples", "code", "says"),
    [
        ([], "no-samples", r"no samples \(0 frames\)"),
        (np.zeros((0, 2)), "no-samples", "0 frames"),
        (np.zeros((5, 0)), "no-samples", "0 frames"),
        (1.0, "wrong-shape", "has 0 dimensions"),
        (np.zeros((2, 2, 2)), "wrong-shape", "has 3 dimensions"),
        ([[1.0], [1.0, 2.0]], "wrong-shape", "not an array of numbers"),
        (np.zeros((2, 4800)), "too-many-channels", "has 4800 channels; at most 64.*Transpose"),
        (np.zeros((480, 65)), "too-many-channels", "has 65 channels; at most 64.*Keep"),
        (np.zeros(5, dtype=np.int64), "wrong-type", "array of int64"),
        (np.zeros(5, dtype=complex), "wrong-type", "array of complex128"),
        (["a", "b"], "wrong-type", "array of str"),
        ([0.0, 1e13], "too-large", r"a sample of 1e\+13 times full scale"),
    ],
)
def test_refused_samples(samples: object, code: str, says: str) -> None:
    """Each kind of unusable array has its own code and names its figure."""
    with pytest.raises(RecordingError, match=says) as caught:
        Recording(samples, 48_000)  # type: ignore[arg-type]
    assert caught.value.code == code


def test_not_finite_says_how_many_and_where() -> None:
    """The count covers all channels and blocks; the place is the first in time."""
    samples = np.zeros((600_000, 2))
    samples[300_000, 1] = np.inf
    samples[599_999, 0] = np.nan
    samples[300_001, 0] = -np.inf
    with pytest.raises(
        RecordingError, match=r"3 samples that are NaN or Inf, the first at 6\.2500 s \(frame 300000, channel 2\)"
    ) as caught:
        Recording(samples, 48_000)
    assert caught.value.code == "not-finite" and caught.value.exit_status == 4


@pytest.mark.parametrize("rate", [0, -48_000, 7999, 192_001, float("nan"), float("inf"), "fast", None])
def test_refused_rates(rate: object) -> None:
    """Rates outside 8 to 192 kHz, and things that are no rate."""
    with pytest.raises(RecordingError, match="8000 to 192000 Hz can be measured") as caught:
        Recording(np.zeros(10), rate)  # type: ignore[arg-type]
    assert caught.value.code == "bad-rate"


@pytest.mark.parametrize("rate", [8000, 44_100.5, 192_000])
def test_accepted_rates(rate: float) -> None:
    """The ends of the range are in it, and a rate need not be whole (a measured clock)."""
    assert Recording(np.zeros(10), rate).rate == rate


def test_most_channels_and_one_sample_are_kept() -> None:
    """64 channels and a single sample are recordings; whether anything rings in them is not asked here."""
    assert Recording(np.zeros((3, MOST_CHANNELS)), 48_000).channels == 64
    assert Recording([0.5], 48_000).frames == 1


def test_between_keeps_origin_and_time() -> None:
    """A part knows where it lies in its source, also a part of a part; its samples are those of that span."""
    origin = Origin("tap.wav", "ab", "WAV", "PCM_24", False, 24)
    doubt = SourceDoubt("lossy", "...")
    whole = Recording(np.arange(48_000) / 48_000, 48_000, origin=origin, doubts=(doubt,))
    part = whole.between(0.25, 0.75).between(0.1)
    assert part.origin == origin and part.doubts == (doubt,)
    assert_allclose(part.starts_at_s, 0.35, rtol=1e-12, atol=0)
    assert_array_equal(part.samples, whole.samples[16_800:36_000])
    assert whole.between() is whole
    assert whole.between(to_s=1.004).frames == 48_000, "a rounded duration typed back"


@pytest.mark.parametrize(
    ("from_s", "to_s", "says"),
    [(-1, None, "at 0 s or later"), (0.5, 0.5, "end after it starts"), (0.5, 0.2, "0.5 to 0.2 s"), (float("nan"), 1, "nan")],
)
def test_between_refuses_what_cannot_be_meant(from_s: float, to_s: float | None, says: str) -> None:
    """A span that no recording could have is a usage error."""
    with pytest.raises(UsageError, match=says):
        Recording(np.zeros(48_000), 48_000).between(from_s, to_s)


@pytest.mark.parametrize(("from_s", "to_s"), [(1.0, None), (3.0, 4.0), (0.0, 1.02)])
def test_between_refuses_what_lies_outside(from_s: float, to_s: float) -> None:
    """A span beyond this recording's end is this recording's error, with its length."""
    with pytest.raises(RecordingError, match="lasts 1 s") as caught:
        Recording(np.zeros(48_000), 48_000).between(from_s, to_s)
    assert caught.value.code == "outside"


def test_subclass_survives_between() -> None:
    """A part of a subclass's recording is of the subclass."""

    class Loaded(Recording):
        pass

    assert type(Loaded(np.zeros(480), 48_000).between(0.001)) is Loaded


def test_repr_shows_no_samples() -> None:
    """A recording in a traceback or a notebook is one line."""
    text = repr(Recording(np.zeros(100_000), 48_000))
    assert len(text) < 150 and "rate=48000.0" in text
