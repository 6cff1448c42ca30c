"""Make the recordings of this folder again: python recordings/make.py [FOLDER]. Same bytes every run.

Invented objects on an invented bench; each sidecar states what was put in. Amplitudes are relative to full scale, at the strike.
"""

from __future__ import annotations

import json
import math
import sys
import zlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import soundfile

if __name__ == "__main__":  # run from a checkout that is not installed
    sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from qmeter.dsp import synth

RATE_HZ = 48000


@dataclass(frozen=True)
class Made:
    """One recording and its truth."""

    name: str
    story: str
    samples: synth.Samples
    modes: list[synth.RingingMode]
    strikes_s: list[float]
    rate_hz: int = RATE_HZ
    suffix: str = ".wav"
    more: dict[str, Any] = field(default_factory=dict)


def rng_for(name: str) -> np.random.Generator:
    """A stream of its own for each recording, so that changing one leaves the others as they are."""
    return np.random.default_rng(zlib.crc32(name.encode()))


def object_modes(rows: list[tuple[float, float, float]], rng: np.random.Generator) -> list[synth.RingingMode]:
    """(damped frequency in Hz, Q, level in dB below full scale) with random phases."""
    return [synth.RingingMode.from_q(f, q, 10 ** (db / 20) * complex(np.exp(2j * math.pi * rng.random()))) for f, q, db in rows]


def tonewood_plate() -> Made:
    """Spruce, free on foam, one fingertip tap."""
    rng = rng_for("tonewood_plate")
    rows = [
        (74.3, 88, -24.0),
        (118.6, 104, -16.0),
        (183.9, 61, -18.0),
        (231.4, 92, -21.0),
        (302.8, 71, -25.0),
        (377.1, 55, -28.0),
        (466.0, 66, -26.0),
        (581.5, 48, -32.0),
    ]
    modes, onset, count = object_modes(rows, rng), 0.42, int(3.0 * RATE_HZ)
    x = synth.ring(modes, RATE_HZ, count, onset)
    x += synth.knock(rng, RATE_HZ, count, onset, 0.01, 0.0015) + synth.pink_noise(rng, RATE_HZ, count, 1.5e-4)
    return Made(
        "tonewood_plate", "A spruce plate for a soundboard, free on foam, tapped once with a fingertip near a corner.", x, modes, [onset]
    )


def tuned_bar() -> Made:
    """A bar of a mallet instrument, undercut to 1 : 4 : 10."""
    rng = rng_for("tuned_bar")
    rows = [(523.31, 640, -14.0), (2093.9, 910, -20.0), (5242.0, 1180, -27.0)]
    modes, onset, count = object_modes(rows, rng), 0.37, int(3.2 * RATE_HZ)
    x = synth.ring(modes, RATE_HZ, count, onset) + synth.white_noise(rng, count, 1e-4)
    return Made("tuned_bar", "A hardwood bar tuned to C5, hung on cords at its nodes, struck once with a soft mallet.", x, modes, [onset])


def cracked_bar() -> Made:
    """The same bar with a crack: lower, faster, and the second partial split off."""
    rng = rng_for("cracked_bar")
    rows = [(509.87, 118, -14.0), (2021.6, 143, -19.0), (2058.3, 96, -25.0), (5077.5, 171, -28.0)]
    modes, onset, count = object_modes(rows, rng), 0.37, int(2.2 * RATE_HZ)
    x = synth.ring(modes, RATE_HZ, count, onset) + synth.white_noise(rng, count, 1e-4)
    return Made(
        "cracked_bar", "The bar of tuned_bar after a fall: a crack near its middle lowers it and takes most of its ring.", x, modes, [onset]
    )


def bell_split_mode() -> Made:
    """A hand bell whose first mode is a pair 0.83 Hz apart, three quarters of a half-power width."""
    rng = rng_for("bell_split_mode")
    rows = [(1244.90, 1120, -15.0), (1245.73, 1060, -19.0), (2987.4, 1430, -22.0), (2992.1, 1390, -24.0), (5310.6, 1250, -30.0)]
    modes, onset, count = object_modes(rows, rng), 0.35, int(4.5 * 44100)
    x = synth.ring(modes, 44100, count, onset) + synth.white_noise(rng, count, 6e-5)
    return Made(
        "bell_split_mode",
        "A small hand bell, not quite round: its two lowest modes are pairs, and the first pair beats slowly.",
        x,
        modes,
        [onset],
        rate_hz=44100,
    )


def damped_panel() -> Made:
    """Sheet steel with a constrained layer, accelerometer; low Q."""
    rng = rng_for("damped_panel")
    rows = [(96.4, 9.5, -15.0), (171.0, 6.8, -17.0), (318.2, 5.4, -20.0), (540.7, 7.9, -19.0), (903.5, 11.2, -24.0)]
    modes, onset, count = object_modes(rows, rng), 0.50, int(2.0 * RATE_HZ)
    x = synth.ring(modes, RATE_HZ, count, onset) + synth.white_noise(rng, count, 1.2e-4)
    return Made(
        "damped_panel", "A steel panel with a damping layer, knocked once; accelerometer. Nothing rings for long.", x, modes, [onset]
    )


def workshop_five_taps() -> Made:
    """Five taps of different strength in a noisy room: a fan and 50 Hz hum; the fourth clips."""
    rng = rng_for("workshop_five_taps")
    rows = [(212.7, 83, -20.0), (447.3, 112, -17.0), (733.9, 96, -23.0), (1318.4, 128, -26.0)]
    modes, count = object_modes(rows, rng), int(5.0 * RATE_HZ)
    strikes_s, strengths = [0.55, 1.42, 2.31, 3.20, 4.08], [1.0, 0.55, 1.3, 6.5, 0.8]
    x = synth.strikes(modes, RATE_HZ, count, strikes_s, strengths)
    for at, strength in zip(strikes_s, strengths, strict=True):
        x += synth.knock(rng, RATE_HZ, count, at, 0.006 * strength, 0.002)
    x += synth.pink_noise(rng, RATE_HZ, count, 6e-4)
    x += synth.hum(RATE_HZ, count, 50.01, [2e-3, 4e-4, 9e-4, 2e-4, 5e-4, 1e-4, 3e-4])
    x = synth.clip(x, 0.98)
    return Made(
        "workshop_five_taps",
        "A maple strip tapped five times in a workshop with a fan and mains hum; the fourth tap was too hard and clips.",
        x,
        modes,
        strikes_s,
        suffix=".flac",
        more={"strengths": strengths, "clipped_strikes": [4], "hum_hz": 50.01},
    )


STRIP = [(164.2, 142, -18.0), (452.8, 187, -20.0), (887.6, 158, -25.0)]


def _strip(name: str, story: str, shift: float, loss: float) -> Made:
    """Two taps of the maple strip in one way of holding it: the support moves frequency a little and Q more."""
    rng = rng_for(name)
    rows = [(f * (1 + shift * w), 1 / (1 / q + loss * w), db) for (f, q, db), w in zip(STRIP, (1.0, 0.5, 0.3), strict=True)]
    modes, count, strikes_s = object_modes(rows, rng), int(4.0 * RATE_HZ), [0.45, 2.25]
    x = synth.strikes(modes, RATE_HZ, count, strikes_s, [1.0, 0.7]) + synth.pink_noise(rng, RATE_HZ, count, 1.5e-4)
    return Made(name, story, x, modes, strikes_s, more={"strengths": [1.0, 0.7]})


def strip_on_foam() -> Made:
    """First mounting."""
    return _strip("strip_on_foam", "A maple strip on two foam blocks at its nodes, tapped twice.", 0.0, 0.0)


def strip_on_threads() -> Made:
    """Second mounting of the same strip: less is lost to the support."""
    return _strip(
        "strip_on_threads", "The strip of strip_on_foam hung on two threads, tapped twice: its lowest mode loses less.", -0.0012, -0.0009
    )


ALL = (tonewood_plate, tuned_bar, cracked_bar, bell_split_mode, damped_panel, workshop_five_taps, strip_on_foam, strip_on_threads)


def sidecar(made: Made) -> dict[str, Any]:
    """The truth as it is written beside the sound."""
    return {
        "file": made.name + made.suffix,
        "story": made.story,
        "made_by": "recordings/make.py",
        "sample_rate_hz": made.rate_hz,
        "strikes_s": made.strikes_s,
        "modes": [
            {
                "damped_frequency_hz": m.damped_frequency_hz,
                "q": round(m.q, 9),
                "decay_rate_per_s": round(m.decay_rate_per_s, 10),
                "t60_s": round(3 * math.log(10) / m.decay_rate_per_s, 10),
                "amplitude": round(abs(m.amplitude), 10),
                "phase_rad": round(float(np.angle(m.amplitude)), 10),
            }
            for m in made.modes
        ],
        **made.more,
    }


def write(made: Made, folder: Path) -> Path:
    """Sound (24 bit, mono) and sidecar; rounded to 24 bits here, so that the library's own rounding has nothing left to decide."""
    path = folder / (made.name + made.suffix)
    steps = np.round(synth.quantise(made.samples, 24) * 2**23).astype(np.int32) << 8
    soundfile.write(path, steps, made.rate_hz, subtype="PCM_24")
    path.with_suffix(".json").write_text(json.dumps(sidecar(made), indent=2) + "\n", encoding="utf-8")
    return path


def main() -> None:
    """All of them, into this folder or the one named."""
    folder = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent
    for make in ALL:
        path = write(make(), folder)
        print(f"{path.name}: {path.stat().st_size / 1000:.0f} kB")


if __name__ == "__main__":
    main()
