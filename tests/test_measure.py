"""The whole chain on recordings that ship (their sidecars hold the truth they were made with) and on rings made here."""

from __future__ import annotations

import json
import math
import warnings
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from numpy.testing import assert_allclose

import qmeter
from qmeter.dsp import synth
from qmeter.errors import OutOfRangeError, RecordingError, UsageError
from qmeter.estimate.measure import measure, measure_samples
from qmeter.estimate.modes import Measurement, Mode, Settings
from qmeter.recording import Origin, Recording, SourceDoubt

RECORDINGS = Path(__file__).resolve().parent.parent / "recordings"
RATE = 48_000
Array = npt.NDArray[np.float64]

pytestmark = pytest.mark.timeout(120)


def truth(name: str) -> dict[str, Any]:
    """The sidecar of a recording that ships."""
    held: dict[str, Any] = json.loads((RECORDINGS / name).with_suffix(".json").read_text(encoding="utf-8"))
    return held


@cache
def shipped(name: str, **asked: Any) -> Measurement:
    """A recording that ships, measured."""
    return measure(qmeter.Recording.load(RECORDINGS / name), Settings(**asked))


def codes(measurement: Measurement) -> set[str]:
    """Doubts about the recording as a whole."""
    return {doubt.code for doubt in measurement.doubts}


def ring(
    modes: list[tuple[float, float, float]], *, seconds: float = 1.5, quiet_s: float = 0.5, noise: float = 1e-4, seed: int = 1
) -> Array:
    """Noise, and from `quiet_s` on modes of (Hz, Q, amplitude)."""
    count = int((quiet_s + seconds) * RATE)
    kept = [synth.RingingMode.from_q(f, q, a) for f, q, a in modes]
    return synth.ring(kept, RATE, count, quiet_s) + synth.white_noise(np.random.default_rng(seed), count, noise)


def same(mode: Mode, other: Mode, rtol: float) -> None:
    """Frequency and Q are the same to `rtol`."""
    assert_allclose([mode.damped_frequency_hz, mode.q.value], [other.damped_frequency_hz, other.q.value], rtol=rtol, atol=0)


# ---- recordings that ship ----


@pytest.mark.parametrize("name", sorted(path.name for path in RECORDINGS.iterdir() if path.suffix in (".wav", ".flac")))
def test_every_mode_that_was_put_in_comes_out(name: str) -> None:
    """Each mode of the sidecar is found, Q within twice u95 (or 0.05 %), known to 1 %, and nothing else is reported."""
    planted = truth(name)["modes"]
    found = shipped(name).modes
    for mode in planted:
        nearest = min(found, key=lambda m: abs(m.damped_frequency_hz - mode["damped_frequency_hz"]))
        assert_allclose(nearest.damped_frequency_hz, mode["damped_frequency_hz"], rtol=5e-4, atol=0)
        assert nearest.q.u95 is not None
        assert abs(nearest.q.value - mode["q"]) < max(2.0 * nearest.q.u95, 0.0005 * mode["q"])
        assert nearest.q.u95 < 0.01 * mode["q"]
    assert len(found) == len(planted)


def test_the_clipped_tap_is_set_aside() -> None:
    """Five taps in a workshop: all are found within a millisecond, four are pooled, the clipped one says why it is not."""
    measured, told = shipped("workshop_five_taps.flac"), truth("workshop_five_taps.flac")
    assert len(measured.strikes) == 5
    for strike, onset_s in zip(measured.strikes, told["strikes_s"], strict=True):
        assert abs(strike.onset_s - onset_s) < 1e-3
    assert [strike.accepted for strike in measured.strikes] == [True, True, True, False, True]
    assert [doubt.code for doubt in measured.strikes[3].doubts] == ["clipped"]
    assert all(mode.strikes == 4 for mode in measured.modes)
    assert all(mode.budget["scatter"].degrees_of_freedom == 3 for mode in measured.modes)


def test_hum_is_named() -> None:
    """The hum of the workshop is named with its frequency, and none of its lines is a mode."""
    measured = shipped("workshop_five_taps.flac")
    (says,) = (doubt.says for doubt in measured.doubts if doubt.code == "steady-tone")
    assert "mains hum of 50.0 Hz with harmonics up to" in says
    assert not any(abs(mode.damped_frequency_hz - 50.0 * k) < 1.0 for mode in measured.modes for k in range(1, 20))


def test_the_split_mode_of_the_bell() -> None:
    """The pair of the bell, 0.8 Hz apart, comes out as two modes whose doubt names both frequencies."""
    pair = [mode for mode in shipped("bell_split_mode.wav").modes if 1240 < mode.damped_frequency_hz < 1250]
    assert len(pair) == 2
    for mode in pair:
        (says,) = (doubt.says for doubt in mode.doubts if doubt.code == "close-pair")
        assert "1244.9 and 1245.73 Hz" in says


def test_two_mountings_differ_by_more_than_u95() -> None:
    """The lowest mode of the strip loses more on foam than on threads (the sidecars say by how much), and each u95 is smaller than that."""
    foam, threads = (
        min(shipped(name).modes, key=lambda m: m.damped_frequency_hz) for name in ("strip_on_foam.wav", "strip_on_threads.wav")
    )
    assert foam.q.u95 is not None
    assert threads.q.u95 is not None
    assert threads.q.value - foam.q.value > 5.0 * (foam.q.u95 + threads.q.u95)


def test_both_other_routes_agree_on_clean_rings() -> None:
    """On a clean bar the half-power width and the backward integral are there for every mode, and agree."""
    for mode in shipped("tuned_bar.wav").modes:
        assert mode.half_power is not None
        assert mode.backward_integral is not None
        assert mode.half_power.agrees
        assert mode.backward_integral.agrees


# ---- strikes ----


def test_one_strike_is_said() -> None:
    """One strike, one mounting: both are doubts, and without the clock the budget holds what one ring can tell."""
    measured = shipped("tuned_bar.wav", clock_ppm=0.0)
    assert {"single-strike", "single-mounting"} <= codes(measured)
    assert all(set(mode.budget) <= {"fit", "model"} for mode in measured.modes)


def test_a_bounce_is_measured_from_the_second_contact() -> None:
    """Struck again 20 ms later it is one strike, doubted, and f and Q are still right."""
    x = ring([(420.0, 60.0, 0.4), (1110.0, 90.0, 0.3)])
    later = int(0.02 * RATE)
    x[later:] += 0.6 * ring([(420.0, 60.0, 0.4), (1110.0, 90.0, 0.3)], seed=2)[:-later]
    measured = measure_samples(x, RATE)
    assert [[doubt.code for doubt in strike.doubts] for strike in measured.strikes] == [["double-strike"]]
    assert measured.strikes[0].accepted
    for f, q in ((420.0, 60.0), (1110.0, 90.0)):
        mode = min(measured.modes, key=lambda m: abs(m.damped_frequency_hz - f))
        assert_allclose([mode.damped_frequency_hz, mode.q.value], [math.sqrt(1 - 0.25 / q**2) * f, q], rtol=5e-3, atol=0)


def test_a_clipped_ring_that_is_all_there_is_is_measured() -> None:
    """Clipped over its first 30 ms, it is measured from there on, and says so."""
    measured = measure_samples(np.clip(6.0 * ring([(700.0, 110.0, 1.0)]), -1.0, 1.0), RATE)
    assert [doubt.code for doubt in measured.strikes[0].doubts] == ["clipped"]
    assert_allclose(measured.modes[0].q.value, 110.0, rtol=2e-3, atol=0)


@pytest.mark.parametrize("fallen_db", [4.0, 10.0, 17.0])
def test_a_ring_cut_by_the_end_is_doubted(fallen_db: float) -> None:
    """A ring that falls by so little before the recording ends: strike and mode say cut-off, and u95 still holds the Q."""
    seconds = 2.0
    decay = fallen_db / (20 * math.log10(math.e) * seconds)
    q = math.pi * 500.0 / decay
    measured = measure_samples(ring([(500.0, q, 0.3)], seconds=seconds, noise=1e-3), RATE)
    assert "cut-off" in {doubt.code for doubt in measured.strikes[0].doubts}
    (mode,) = measured.modes
    (says,) = (doubt.says for doubt in mode.doubts if doubt.code == "cut-off")
    assert f"a fall of {fallen_db:.0f}." in says or f"a fall of {fallen_db - 1:.0f}." in says
    assert mode.q.u95 is not None
    assert abs(mode.q.value - q) < 2.0 * mode.q.u95


def test_a_ring_that_dies_away_is_not_called_cut_off() -> None:
    """Twenty rings of nine time constants: none is doubted."""
    for seed in range(20):
        x = ring([(300.0 + 50 * seed, 80.0, 0.3)], seconds=9 * 80.0 / (math.pi * (300.0 + 50 * seed)) + 0.1, seed=seed, noise=1e-3)
        measured = measure_samples(x, RATE)
        assert not any(doubt.code == "cut-off" for strike in measured.strikes for doubt in strike.doubts)
        assert [doubt.code for mode in measured.modes for doubt in mode.doubts] == []


def test_few_decibels_are_said() -> None:
    """A mode that stands 22 dB or so above the noise in its own band says few-decibels, with the figure."""
    measured = measure_samples(ring([(900.0, 300.0, 0.3), (2500.0, 30.0, 0.003)], noise=3e-3), RATE)
    weak = [mode for mode in measured.modes if abs(mode.damped_frequency_hz - 2500.0) < 40.0]
    assert weak
    assert weak[0].decay_range_db < 25.0
    assert "few-decibels" in {doubt.code for doubt in weak[0].doubts}


def test_no_quiet_before_the_strike() -> None:
    """A response that starts at sample 0 takes its floor from the tail; digital silence after it changes nothing."""
    x = ring([(700.0, 110.0, 0.5)], quiet_s=0.0)
    plain, padded = measure_samples(x, RATE), measure_samples(np.concatenate([x, np.zeros(RATE)]), RATE)
    for measured in (plain, padded):
        (mode,) = measured.modes
        assert mode.q.u95 is not None
        assert abs(mode.q.value - 110.0) < 2.0 * mode.q.u95 < 0.1
    same(plain.modes[0], padded.modes[0], 1e-6)


# ---- what a measurement carries ----


def test_scaling_changes_the_level_only() -> None:
    """From 1e-9 to 1e9 times full scale (a count, a voltage): f, Q and u95 stay to nine digits, the level follows."""
    x = ring([(700.0, 110.0, 0.5), (1500.0, 60.0, 0.2)])
    plain = measure_samples(x, RATE)
    for factor in (1e-9, 1e-3, 30.0, 1e9):
        scaled = measure_samples(factor * x, RATE)
        assert len(scaled.modes) == len(plain.modes) == 2
        for mode, other in zip(scaled.modes, plain.modes, strict=True):
            same(mode, other, 1e-9)
            assert_allclose(mode.level_dbfs, other.level_dbfs + 20 * math.log10(factor), rtol=0, atol=1e-6)
            assert_allclose(mode.amplitude, factor * other.amplitude, rtol=1e-6, atol=0)
            assert mode.trace is not None
            assert other.trace is not None
            assert_allclose(mode.trace.fit_dbfs[0] - mode.level_dbfs, other.trace.fit_dbfs[0] - other.level_dbfs, rtol=0, atol=1e-6)


def test_the_channel_that_decays_best() -> None:
    """Of a noisy and a clean channel the clean one is taken, wherever it is; a channel asked for is taken whatever it is like."""
    clean, noisy = ring([(700.0, 110.0, 0.5)]), ring([(700.0, 110.0, 0.5)], noise=0.02)
    for place, samples in enumerate((np.stack([clean, noisy], 1), np.stack([noisy, clean], 1)), 1):
        measured = measure(Recording(samples, RATE))
        assert (measured.channel, measured.channels) == (place, 2)
    many = np.stack([noisy, 0 * clean, noisy[::-1], clean, noisy], 1)
    assert measure(Recording(many, RATE)).channel == 4
    assert measure(Recording(many, RATE), Settings(channel=1)).channel == 1
    with pytest.raises(RecordingError, match="there is no channel 6"):
        measure(Recording(many, RATE), Settings(channel=6))


def test_what_the_recording_says_is_carried() -> None:
    """Its own doubts come first, its file and hash are kept, and onsets count from the start of the file."""
    origin = Origin("tap.mp3", "ab", "MP3", "MPEG", True, None)
    part = Recording(ring([(700.0, 110.0, 0.5)]), RATE, origin=origin, doubts=(SourceDoubt("lossy", "A coder."),), starts_at_s=2.0)
    measured = measure(part)
    assert measured.doubts[0].code == "lossy"
    assert (measured.file, measured.sha256) == ("tap.mp3", "ab")
    assert abs(measured.strikes[0].onset_s - 2.5) < 1e-3


def test_the_decay_strip_follows_the_fit() -> None:
    """The trace falls along the line that was fitted: within 1 dB where it stands 30 dB above its floor."""
    for mode in shipped("tonewood_plate.wav").modes:
        trace = mode.trace
        assert trace is not None
        time = trace.start_s + trace.step_s * np.arange(len(trace.level_dbfs))
        slope = (trace.fit_dbfs[1] - trace.fit_dbfs[0]) / (trace.fit_to_s - trace.fit_from_s)
        line = trace.fit_dbfs[0] + slope * (time - trace.fit_from_s)
        clear = (line > trace.floor_dbfs + 30.0) & (time < trace.fit_to_s)
        assert clear.sum() > 5
        assert np.max(np.abs(np.array(trace.level_dbfs)[clear] - line[clear])) < 1.0


# ---- what is asked ----


def test_near_gives_one_mode() -> None:
    """--near gives the nearest mode; where none is near it says which is nearest."""
    (mode,) = shipped("tonewood_plate.wav", near_hz=185.0).modes
    assert_allclose(mode.damped_frequency_hz, 183.9, rtol=1e-3, atol=0)
    nothing = shipped("tonewood_plate.wav", near_hz=270.0)
    assert nothing.modes == ()
    assert any("the nearest rings at 302.8 Hz" in doubt.says for doubt in nothing.doubts if doubt.code == "no-ring")


def test_most_and_range() -> None:
    """--most keeps the strongest, --range those within; the modes are the same as without."""
    plain = shipped("tonewood_plate.wav").modes
    assert shipped("tonewood_plate.wav", most=3).modes == plain[:3]
    within = shipped("tonewood_plate.wav", range_hz=(200.0, 400.0)).modes
    assert within == tuple(mode for mode in plain if 200.0 <= mode.damped_frequency_hz <= 400.0)
    assert len(within) == 3


@pytest.mark.parametrize(
    ("asked", "error", "says"),
    [
        ({"near_hz": 30_000.0}, OutOfRangeError, "20 to 21600 Hz"),
        ({"near_hz": 3.0}, OutOfRangeError, "3 Hz was asked"),
        ({"near_hz": math.nan}, OutOfRangeError, "20 to 21600 Hz"),
        ({"range_hz": (400.0, 200.0)}, UsageError, "from a lower to a higher"),
        ({"range_hz": (30_000.0, 40_000.0)}, OutOfRangeError, "lies outside"),
        ({"most": 0}, UsageError, "ask for 1 or more"),
        ({"channel": 0}, UsageError, "counted from 1"),
        ({"clock_ppm": -1.0}, UsageError, "0 ppm or more"),
    ],
)
def test_settings_that_cannot_be_meant(asked: dict[str, Any], error: type[UsageError], says: str) -> None:
    """They are refused with the range in the sentence, before anything is measured."""
    with pytest.raises(error, match=says):
        measure_samples(np.zeros(100), RATE, Settings(**asked))


# ---- nothing rang ----


def nothing(which: str) -> Array:
    """A second in which nothing rings."""
    rng = np.random.default_rng(3)
    t = np.arange(RATE) / RATE
    made: dict[str, Array] = {
        "silence": np.zeros(RATE),
        "DC": np.full(RATE, 0.5),
        "one sample": np.array([0.3]),
        "100 samples": rng.standard_normal(100),
        "white noise": 0.1 * rng.standard_normal(RATE),
        "an impulse": np.eye(1, 9000, 4000)[0],
        "a step": np.repeat([0.0, 1.0], 5000),
        "a ramp": t,
        "a steady tone": 0.1 * np.sin(2 * np.pi * 440 * t) + 1e-3 * rng.standard_normal(RATE),
        "alternating": np.tile([1e12, -1e12], 5000),
        "a voice": voice(t, rng),
    }
    return made[which]


def voice(t: Array, rng: np.random.Generator) -> Array:
    """Pulses of a gliding pitch through two formants (500 and 1500 Hz), swelling and fading over a third of a second."""
    pitch = np.cumsum(120.0 * (1 + 0.2 * t)) / RATE
    pulses = np.diff(np.floor(pitch), prepend=0.0)
    formants = np.sum([np.exp(-math.pi * width * t) * np.sin(2 * np.pi * f * t) for f, width in ((500.0, 70.0), (1500.0, 110.0))], axis=0)
    swell = np.clip(np.minimum((t - 0.3) / 0.05, (0.65 - t) / 0.08), 0.0, 1.0)
    spoken: Array = np.convolve(pulses, formants[:4800])[: len(t)] * swell
    return spoken + 1e-3 * rng.standard_normal(len(t))


@pytest.mark.parametrize(
    "which",
    [
        "silence",
        "DC",
        "one sample",
        "100 samples",
        "white noise",
        "an impulse",
        "a step",
        "a ramp",
        "a steady tone",
        "alternating",
        "a voice",
    ],
)
def test_nothing_rang(which: str) -> None:
    """No mode, a doubt that says so, and no warning from numpy."""
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        measured = measure_samples(nothing(which), RATE)
    assert measured.modes == ()
    assert "no-ring" in codes(measured)
    assert not {"single-strike", "single-mounting"} & codes(measured)


def test_a_steady_tone_is_named() -> None:
    """A tone without a strike is named with its frequency and level."""
    measured = measure_samples(nothing("a steady tone"), RATE)
    (says,) = (doubt.says for doubt in measured.doubts if doubt.code == "steady-tone")
    assert "440.0 Hz, 20 dB below full scale" in says


def test_a_tap_beside_speech_is_still_measured() -> None:
    """A voice before the tap costs it nothing: the tap alone is accepted."""
    t = np.arange(RATE) / RATE
    x = ring([(700.0, 110.0, 0.5), (1500.0, 60.0, 0.2)], quiet_s=1.0)
    x[:RATE] += 0.5 * voice(t, np.random.default_rng(5))
    measured = measure_samples(x, RATE)
    accepted = [strike for strike in measured.strikes if strike.accepted]
    assert len(accepted) == 1
    assert abs(accepted[0].onset_s - 1.0) < 2e-3
    assert_allclose([mode.q.value for mode in measured.modes], [110.0, 60.0], rtol=1e-2, atol=0)


def test_strikes_cut_short_by_the_next_are_set_aside() -> None:
    """Three taps a tenth of a second apart and one that rings out: only the last can tell a mode of 0.4 s, and only it is pooled."""
    modes = [(500.0, 600.0, 0.3), (1700.0, 90.0, 0.3)]
    x = ring(modes, quiet_s=1.0, seconds=2.5)
    for k in range(1, 4):
        early = int(0.1 * k * RATE)
        x[:-early] += ring(modes, quiet_s=1.0, seconds=2.5, seed=k + 1, noise=0.0)[early:]
    measured = measure_samples(x, RATE)
    assert [strike.accepted for strike in measured.strikes] == [False, False, False, True]
    assert "cut-off" in {doubt.code for doubt in measured.strikes[0].doubts}
    assert_allclose(sorted(mode.q.value for mode in measured.modes[:2]), [90.0, 600.0], rtol=1e-2, atol=0)
