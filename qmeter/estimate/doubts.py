"""What a strike, a mode or a recording has against itself, in sentences with the figures and the way out (docs/doubts.md)."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from qmeter.dsp.noise import NoiseSpectrum
from qmeter.dsp.strikes import StrikeSpan
from qmeter.estimate.modes import Doubt, Mode

FEW_DB = 25.0
"""range of decay above the noise in the half-power width; Q is then known to about 40 % at best (the bound)"""
FALL_WANTED_DB = 40.0
"""of a mode in a strike that is cut off: with more its decay is known, whatever comes below"""
TIME_CONSTANTS_WANTED = 3.0
"""of a mode that is cut off: with less than these 26 dB the decay is not known from its own fall alone"""
CUT_DB = 10.0
"""level at the end over the noise in the mode's own band"""
UNSETTLED_PERCENT = 2.0
"""of the decay rate; what moves by less is no reason to tap again"""
LOOKED_AT_DB = 30.0
"""of a decay: what a window hears of a line after that holds a thousandth of its energy"""
_HUM = ((50.0, 0.3), (60.0, 0.3))
_TONES_NAMED = 4
_TONE_WORTH_DB = -70.0

_TAP_AGAIN = "wait longer between taps, and record until it is silent"


# ---- of a strike ----


def clipped(dbfs: float) -> Doubt:
    return Doubt(
        "clipped",
        f"Clipped: the samples stand at their ceiling of {dbfs:.1f} dBFS. It is measured from the last of these on. Turn the input down by "
        "6 dB, or tap softer.",
    )


def double_strike(after_s: float) -> Doubt:
    return Doubt(
        "double-strike",
        f"A second contact {1000.0 * after_s:.1f} ms after the first: it is measured from there on. Let the striker bounce off once.",
    )


def strike_cut_off(span: StrikeSpan, at_s: float, over_noise_db: float | None) -> Doubt:
    by = "The next strike comes" if span.cut_by_next else "The recording ends"
    above = "" if over_noise_db is None else f", {over_noise_db:.0f} dB above the noise"
    return Doubt("cut-off", f"{by} {at_s:.2f} s after this one, while it still rings{above}: {_TAP_AGAIN}.")


def too_short(ring_s: float) -> Doubt:
    return Doubt("no-ring", f"Only {1000.0 * ring_s:.1f} ms follow this strike, too few to read a mode from: {_TAP_AGAIN}.")


def nothing_rang(peak_dbfs: float, noise_dbfs: float) -> Doubt:
    over = peak_dbfs - noise_dbfs
    return Doubt(
        "no-ring",
        f"Nothing decays as a mode after this event, whose peak stands {over:.0f} dB above the noise ({noise_dbfs:.0f} dBFS): a knock, or "
        "noise. If it was a tap, tap harder, or sense closer.",
    )


def driven(growth_db: float, share: float) -> Doubt:
    return Doubt(
        "no-ring",
        f"It grows by {growth_db:.0f} dB after its onset and modes explain {max(100.0 * (1.0 - share), 0.0):.0f} % of it: speech or "
        "another sound that is kept going, not a ring.",
    )


# ---- of a mode ----


def mode_cut_off(decay_rate_per_s: float, seen_s: float, over_noise_db: float) -> Doubt:
    fallen = 20.0 * math.log10(math.e) * decay_rate_per_s * seen_s
    return Doubt(
        "cut-off",
        f"It is cut off after a fall of {fallen:.1f} dB, still {over_noise_db:.0f} dB above the noise in its band; u95 allows for that, "
        f"but a bend further down would not show: {_TAP_AGAIN}.",
    )


def few_decibels(decay_range_db: float) -> Doubt:
    return Doubt(
        "few-decibels",
        f"Only {max(decay_range_db, 0.0):.0f} dB of its decay stand above the noise ({FEW_DB:.0f} are wanted): tap harder, sense closer, "
        "or make it quieter.",
    )


def filter_limited(mode: Mode, low_hz: float, high_hz: float) -> Doubt | None:
    """A line whose half-power width reaches beyond the band that is measured."""
    half = mode.amplitude_decay_rate_per_s / (2.0 * math.pi)
    f = mode.damped_frequency_hz
    if low_hz <= f - half and f + half <= high_hz:
        return None
    edge = low_hz if f - half < low_hz else high_hz
    return Doubt(
        "filter-limited",
        f"Its line is {2.0 * half:.3g} Hz wide and reaches beyond the measured band, which ends at {edge:.4g} Hz: part of it is not seen.",
    )


def close_pairs(modes: Sequence[Mode]) -> list[Doubt | None]:
    """For each mode a doubt where its nearest neighbour is less than a mean half-power width away."""
    f = np.array([mode.damped_frequency_hz for mode in modes])
    width = np.array([mode.amplitude_decay_rate_per_s / math.pi for mode in modes])
    said: list[Doubt | None] = []
    for i in range(len(modes)):
        apart = np.abs(f - f[i]) / (0.5 * (width + width[i]))
        apart[i] = math.inf
        j = int(np.argmin(apart))
        if not apart[j] < 1.0:
            said.append(None)
            continue
        says = f"Two modes, {min(f[i], f[j]):.6g} and {max(f[i], f[j]):.6g} Hz, ring {apart[j]:.2g} half-power widths apart"
        said.append(Doubt("close-pair", f"{says}: each figure leans on the other. Strike or sense where one of them has a node."))
    return said


def unsettled(mode: Mode) -> Doubt | None:
    """Where repeated looks at a mode disagree by more than their own noise explains."""
    fit, model = (mode.budget[name].decay_variance if name in mode.budget else 0.0 for name in ("fit", "model"))
    apart, noise = (100.0 * math.sqrt(v) / mode.amplitude_decay_rate_per_s for v in (model, fit))
    if not (model > fit and apart > UNSETTLED_PERCENT):
        return None
    return Doubt(
        "unsettled",
        f"It does not hold still: its decay moves by {apart:.0f} % with the start and the length of the look, of which noise explains "
        f"{noise:.2g} %. u95 covers that. The figure stands for the first {min(mode.decay_range_db, LOOKED_AT_DB):.0f} dB of its decay.",
    )


def bends_early(share: float, within_s: float) -> Doubt:
    """Of a loud mode in a crowd around which the modes leave this share of the energy at first."""
    much = "all" if share > 0.95 else f"{100.0 * share:.0f} %"
    return Doubt(
        "curved-decay",
        f"All modes together leave {much} of the energy within a quarter of this frequency unexplained in the first "
        f"{1000.0 * within_s:.0f} ms: it glides or bends there, and the figure is that of what follows. Tap softer and compare.",
    )


# ---- of the recording ----


def no_strike(peak_dbfs: float) -> Doubt:
    if peak_dbfs <= -190.0:
        return Doubt("no-ring", "All samples are alike: nothing was recorded. Check the cable and the input.")
    return Doubt(
        "no-ring",
        f"No strike was found: nothing rises abruptly and then falls in it (peak {peak_dbfs:.0f} dBFS). Tap harder, or sense closer.",
    )


def none_trusted(strikes: int) -> Doubt:
    events = "the one event" if strikes == 1 else f"any of the {strikes} events"
    return Doubt("no-ring", f"Nothing that could be trusted rang after {events} in it: tap harder, sense closer, make it quieter.")


def none_near(near_hz: float, reach: float, nearest: Mode | None) -> Doubt:
    other = "" if nearest is None else f"; the nearest rings at {nearest.damped_frequency_hz:.5g} Hz"
    return Doubt("no-ring", f"No mode rings within {100.0 * reach:.0f} % of {near_hz:g} Hz{other}. Ask without --near to see them all.")


def none_in_range(low_hz: float, high_hz: float, outside: int) -> Doubt:
    return Doubt("no-ring", f"No mode rings between {low_hz:g} and {high_hz:g} Hz; {outside} outside. Widen --range to see them.")


def steady_tones(noise: NoiseSpectrum, strongest: float | None) -> Doubt | None:
    """The tones that stand in the quiet, the mains' harmonics together; levels against the strongest mode's amplitude, or full scale."""
    against = strongest if strongest is not None else 1.0
    unit = "below the strongest mode" if strongest is not None else "below full scale"
    with np.errstate(divide="ignore"):
        level = 20.0 * np.log10(noise.tone_amplitude / against)
    tones = [(float(f), float(db)) for f, db in zip(noise.tones_hz, level, strict=True) if db > _TONE_WORTH_DB]
    if not tones:
        return None
    says = []
    for mains, reach in _HUM:
        line = [(f, db) for f, db in tones if _is_harmonic(f, mains, reach, noise.resolution_hz)]
        if any(f < 3.5 * mains for f, _ in line):
            fundamental = line[0][0] / max(round(line[0][0] / mains), 1)
            upto = f" with harmonics up to {line[-1][0]:.0f} Hz" if len(line) > 1 else ""
            loudest = max(db for _, db in line)
            says.append(f"mains hum of {fundamental:.1f} Hz{upto}, {-loudest:.0f} dB {unit} at most")
            tones = [tone for tone in tones if tone not in line]
    tones.sort(key=lambda tone: -tone[1])
    says += [
        f"a tone at {f:.1f} Hz, {abs(db):.0f} dB {unit if db <= 0 else unit.replace('below', 'above')}" for f, db in tones[:_TONES_NAMED]
    ]
    if len(tones) > _TONES_NAMED:
        says.append(f"{len(tones) - _TONES_NAMED} weaker ones")
    return Doubt(
        "steady-tone",
        f"It does not decay, and is no mode: {'; '.join(says)}. A mode that lies on it has a larger u95: switch it off where you can.",
    )


def _is_harmonic(f: float, mains: float, reach_hz: float, resolution_hz: float) -> bool:
    order = max(round(f / mains), 1)
    return abs(f - order * mains) < min(order * reach_hz + 0.2 * resolution_hz, 0.1 * mains)
