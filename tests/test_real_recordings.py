"""Struck objects recorded by others (Debian package sonic-pi-samples): committed ranges, physics, the doubts of the spoiled ones.

The ranges are those of real_ranges.json, which names their source; they were committed before qmeter measured these files.
Figures are of the reading itself: the sample clock's part of u95 is left out.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Iterable
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest

from qmeter.estimate.measure import measure_samples
from qmeter.estimate.modes import Measurement, Mode, Settings
from qmeter.uncertainty import Figure

Array = npt.NDArray[np.float64]
Find = Callable[[str], Path]

RANGES: dict[str, Any] = json.loads((Path(__file__).parent / "real_ranges.json").read_text(encoding="utf-8"))
CLEAN = ("tabla_tun3.flac", "tabla_na.flac")
KNOWN = [(name, mode) for name in CLEAN for mode in RANGES["recordings"][name]["modes"]]
NAMES = [f"{name.removesuffix('.flac')}-{mode['frequency_hz']}" for name, mode in KNOWN]

pytestmark = pytest.mark.timeout(180)

SHORTFALLS = {
    "test_glide_is_doubted": "its Q is that of the late, slow part of the glide, 32 +- 6, not that of the first 25 dB, 21",
}
"""Checks that real recordings still fail, word for word in docs/accuracy.md (known shortfalls): strict, so that mending one is noticed."""


@cache
def samples_of(path: Path) -> tuple[Array, float]:
    """First channel and rate."""
    import soundfile

    samples, rate = soundfile.read(path, always_2d=True)
    return np.ascontiguousarray(samples[:, 0]), float(rate)


@cache
def measured(path: Path, cut_s: float = 0.0, up: int = 1, down: int = 1, keep: tuple[int, int] | None = None) -> Measurement:
    """The recording measured: a part of it, without its first `cut_s`, resampled by up/down with scipy's polyphase filter."""
    from scipy.signal import resample_poly

    samples, rate = samples_of(path)
    samples = samples[slice(*keep) if keep else slice(None)][round(cut_s * rate) :]
    if up != down:
        samples = resample_poly(samples, up, down)
    return measure_samples(samples, rate * up / down, Settings(clock_ppm=0.0))


def near(modes: Iterable[Mode], frequency_hz: float, tolerance: float = RANGES["frequency_tolerance"]) -> Mode:
    """The strongest mode within the tolerance of this frequency."""
    found = [m for m in modes if abs(m.damped_frequency_hz / frequency_hz - 1) <= tolerance]
    assert found, f"no mode within {100 * tolerance:g} % of {frequency_hz} Hz: {[round(m.damped_frequency_hz, 1) for m in modes]}"
    return max(found, key=lambda m: m.level_db)


def codes(measurement: Measurement) -> set[str]:
    """Every doubt raised anywhere in the measurement."""
    raised = [*measurement.doubts]
    for strike in measurement.strikes:
        raised += strike.doubts
    for mode in (*measurement.modes, *(m for s in measurement.strikes for m in s.modes)):
        raised += mode.doubts
    return {doubt.code for doubt in raised}


def u95(figure: Figure) -> float:
    assert figure.u95 is not None
    return figure.u95


def assert_agree(one: Figure, other: Figure, what: str) -> None:
    """The two differ by no more than their joint u95."""
    joint = math.hypot(u95(one), u95(other))
    assert abs(one.value - other.value) <= joint, f"{what}: {one.value:.6g} and {other.value:.6g} differ by more than {joint:.3g}"


# ---- ranges ----


@pytest.mark.parametrize(("name", "mode"), KNOWN, ids=NAMES)
def test_ranges(real_recording: Find, name: str, mode: dict[str, float]) -> None:
    """Each mode that the independent look saw is there, its frequency within 0.3 % and its Q within 15 %."""
    found = near(measured(real_recording(name)).modes, mode["frequency_hz"])
    if mode["q"] is not None:
        assert abs(found.q.value / mode["q"] - 1) <= RANGES["q_tolerance"], (
            f"Q {found.q.value:.1f} +- {found.q.u95:.1f}, expected {mode['q']}"
        )


def test_a_clean_line_is_known_well(real_recording: Find) -> None:
    """The line that falls straight for more than 45 dB in a clean file: Q to 3 %, over three time constants or more, no doubt of its shape.

    Beyond three time constants (26 dB) more record buys less than 5 % of u: closed form of the Cramer-Rao bound for a cut record.
    """
    mode = near(measured(real_recording("tabla_tun3.flac")).modes, 315.6)
    assert u95(mode.q) <= 0.03 * mode.q.value
    assert mode.decay_range_db >= 26
    assert not {d.code for d in mode.doubts} & {"curved-decay", "routes-differ", "close-pair"}


@pytest.mark.parametrize(("name", "mode"), KNOWN, ids=NAMES)
def test_u95_is_of_use(real_recording: Find, name: str, mode: dict[str, float]) -> None:
    """A mode with a known Q is stated to better than a third of it: wider intervals would agree with anything."""
    found = near(measured(real_recording(name)).modes, mode["frequency_hz"])
    if mode["q"] is not None:
        assert u95(found.q) <= found.q.value / 3


# ---- physics ----


@pytest.mark.parametrize("cut_ms", [5, 10, 20])
@pytest.mark.parametrize(("name", "mode"), KNOWN, ids=NAMES)
def test_start_moves_nothing(real_recording: Find, name: str, mode: dict[str, float], cut_ms: int) -> None:
    """Without its first milliseconds the recording gives the same frequency and Q, within the joint u95 of the two."""
    path = real_recording(name)
    whole = near(measured(path).modes, mode["frequency_hz"])
    later = near(measured(path, cut_s=1e-3 * cut_ms).modes, mode["frequency_hz"])
    assert_agree(whole.frequency_hz, later.frequency_hz, "frequency")
    assert_agree(whole.q, later.q, "Q")


@pytest.mark.parametrize(("up", "down"), [(1, 2), (160, 147), (1, 5)], ids=["22.05 kHz", "48 kHz", "8.82 kHz"])
@pytest.mark.parametrize(("name", "mode"), KNOWN, ids=NAMES)
def test_bandwidth_moves_nothing(real_recording: Find, name: str, mode: dict[str, float], up: int, down: int) -> None:
    """Resampled to a narrower or wider band the recording gives the same frequency and Q, within the joint u95 of the two."""
    path = real_recording(name)
    whole = near(measured(path).modes, mode["frequency_hz"])
    other = near(measured(path, up=up, down=down).modes, mode["frequency_hz"])
    assert_agree(whole.frequency_hz, other.frequency_hz, "frequency")
    assert_agree(whole.q, other.q, "Q")


@pytest.mark.parametrize("name", RANGES["recordings"])
def test_no_mode_is_louder_than_the_recording(real_recording: Find, name: str) -> None:
    """No mode starts more than 6 dB above the loudest sample of the file.

    Two lines that nearly cancel can; then neither is a resonance of its own.
    """
    samples, _ = samples_of(real_recording(name))
    loudest = 20 * math.log10(np.max(np.abs(samples)))
    for mode in (m for s in measured(real_recording(name)).strikes for m in s.modes):
        assert mode.level_dbfs <= loudest + 6, f"{mode.damped_frequency_hz:.1f} Hz starts at {mode.level_dbfs:.1f} dBFS"


@pytest.mark.parametrize("name", RANGES["recordings"])
def test_every_lone_mode_is_heard_in_its_band(real_recording: Find, name: str) -> None:
    """Where a mode says it stands one time constant after the strike, there is at least a level 10 dB below that in its band.

    The look is scipy's: second-order Butterworth, five half-power widths either side, envelope by Hilbert transform. Modes with another
    within three widths may beat and are left out, so are strikes set aside, and double ones, whose levels count from the second contact;
    a piece of the knock, or a slip of the start, fails it.
    """
    from scipy.signal import butter, hilbert, sosfiltfilt

    samples, rate = samples_of(real_recording(name))
    floor = 20 * math.log10(np.max(np.abs(samples))) - 60
    for strike in (s for s in measured(real_recording(name)).strikes if s.accepted):
        if "double-strike" in {d.code for d in strike.doubts}:
            continue
        for mode in strike.modes:
            a, f = mode.amplitude_decay_rate_per_s, mode.damped_frequency_hz
            width = a / math.pi
            beats = any(0 < abs(o.damped_frequency_hz - f) < 3 * max(width, o.amplitude_decay_rate_per_s / math.pi) for o in strike.modes)
            said = mode.level_dbfs - 8.686
            if beats or 1 / a > strike.usable_s or said < floor:
                continue
            half = min(5 * width, 0.9 * f, 0.95 * (rate / 2 - f))
            envelope = np.abs(hilbert(sosfiltfilt(butter(2, [f - half, f + half], "bandpass", fs=rate, output="sos"), samples)))
            at = round((strike.onset_s + 1 / a) * rate)
            heard = 20 * math.log10(envelope[at])
            assert heard >= said - 10, (
                f"{f:.1f} Hz, Q {mode.q.value:.0f}, at {strike.onset_s:.3f} s: says {said:.1f} dBFS, band holds {heard:.1f}"
            )


def test_two_strikes_of_one_object(real_recording: Find) -> None:
    """A real ring, then the same again at half the level: two strikes, whose modes agree within their joint u95."""
    samples, rate = samples_of(real_recording("tabla_na.flac"))
    twice = measure_samples(np.concatenate([samples, 0.5 * samples]), rate, Settings(clock_ppm=0.0))
    assert len(twice.strikes) == 2
    assert abs(twice.strikes[1].onset_s - twice.strikes[0].onset_s - len(samples) / rate) < 2e-3
    for mode in RANGES["recordings"]["tabla_na.flac"]["modes"]:
        first, second = (near(strike.modes, mode["frequency_hz"]) for strike in twice.strikes)
        assert_agree(first.frequency_hz, second.frequency_hz, "frequency")
        assert_agree(first.q, second.q, "Q")


# ---- the spoiled ones ----


def test_glide_is_doubted(real_recording: Find) -> None:
    """The drum glides from 107 to 90 Hz: one mode in that stretch (not a pair), Q within 15 % of 21, and a curved-decay doubt on it."""
    expected = RANGES["recordings"]["drum_tom_lo_soft.flac"]
    high, low = expected["glide_hz"]
    gliding = [m for m in measured(real_recording("drum_tom_lo_soft.flac")).modes if low * 0.95 <= m.damped_frequency_hz <= high * 1.05]
    assert len(gliding) == 1, [(round(m.damped_frequency_hz, 1), round(m.q.value, 1)) for m in gliding]
    assert "curved-decay" in {d.code for d in gliding[0].doubts}
    assert abs(gliding[0].q.value / expected["q"] - 1) <= RANGES["q_tolerance"]


def test_glide_is_said(real_recording: Find) -> None:
    """Whatever Q it states, the loudest mode of the gliding drum says that it bends or glides."""
    loudest = max(measured(real_recording("drum_tom_lo_soft.flac")).modes, key=lambda m: m.level_db)
    assert "curved-decay" in {d.code for d in loudest.doubts}


def test_cut_off_is_doubted(real_recording: Find) -> None:
    """The cowbell is faded and cut while still 27 dB up: cut-off."""
    assert "cut-off" in codes(measured(real_recording("drum_cowbell.flac")))


def test_plucks_are_told_apart(real_recording: Find) -> None:
    """Several plucks in the first 1.1 s and a free decay after the last: three strikes or more by 1.3 s, the last of 1.5 s."""
    measurement = measured(real_recording("guit_harmonics.flac"))
    begun = [s for s in measurement.strikes if s.onset_s <= 1.3]
    assert len(begun) >= 3
    assert begun[-1].usable_s >= 1.5


def test_plucks_cut_short_are_left_out(real_recording: Find) -> None:
    """A pluck that the next one cuts off is not pooled beside the one that decays freely."""
    accepted = [s for s in measured(real_recording("guit_harmonics.flac")).strikes if s.accepted]
    assert len(accepted) == 1
    assert accepted[0].usable_s >= 1.5


def test_free_decay_holds_still(real_recording: Find) -> None:
    """The guitar's free decay, from 1.3 to 3 s: its two strongest modes keep f and Q when the start moves by 20 ms."""
    path = real_recording("guit_harmonics.flac")
    keep = (57_330, 132_300)
    whole = measured(path, keep=keep)
    for mode in sorted(whole.modes, key=lambda m: -m.level_db)[:2]:
        later = near(measured(path, cut_s=0.02, keep=keep).modes, mode.damped_frequency_hz, 0.2 / mode.q.value)
        assert_agree(mode.frequency_hz, later.frequency_hz, "frequency")
        assert_agree(mode.q, later.q, "Q")


def test_clatter_and_bell(real_recording: Find) -> None:
    """Clatter with a late second event: two strikes or more, and the small bell at 1524 Hz among the modes."""
    measurement = measured(real_recording("perc_till.flac"))
    assert len(measurement.strikes) >= 2
    near([m for s in measurement.strikes for m in s.modes], RANGES["recordings"]["perc_till.flac"]["modes"][0]["frequency_hz"])
