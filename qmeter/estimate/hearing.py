"""From a span of the recording to the ring to be fitted: its samples, the noise it stands in, and whether it rings at all."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qmeter.dsp.noise import FloatArray, NoiseSpectrum, noise_spectrum, white_noise
from qmeter.dsp.strikes import StrikeSpan
from qmeter.estimate.find import Poles, Ring
from qmeter.estimate.groups import rest_of

LOWEST_HZ = 20.0
HIGHEST_OF_RATE = 0.45
_QUIET_LEAST_S = 0.02
_QUIET_LEAST_FRAMES = 512
_TAIL_LEAST_FRAMES = 128
_STUCK_S = 0.005
"""samples that do not change for so long at the end are a gate or a file's padding, and no part of the ring"""
_FLOAT_STEP = 2.0**-23
"""of the peak: what is left when the samples are on no grid; the resolution of a float32, and of 24 bits"""
_HEARD_S = 0.3
"""speech is judged over its first syllable"""
_WINDOW_S = 0.008
_GROWTH_S = 0.4
_SLOW_S = 0.6
DRIVEN = ((0.3, 0.95), (1.0, 0.06), (4.0, 0.03))
"""growth in dB, and the share of the energy that the rough fit's modes leave: a sound with more of both is no ring. Speech-like bursts
mostly grow by 1 to 25 dB and leave 0.04 or more; struck rings that grow by 1 dB or more left below 0.02"""
DRIVEN_CROWD, GROWTH_CROWD_DB, FEWEST_CROWD = 0.8, 2.0, 6
"""share that the modes which hold still may leave, growth after the last contact, and how few they may be, where the first look took a
crowded ring for speech. Clatter with a bell in it left 0.5 to 0.7, grew by 1.6 dB and gave 19 modes"""
WELL_EXPLAINED = 0.005
"""share that a few modes, well fitted, may leave to be a ring however they grow: two lines that beat"""
PITCH_HZ = (60.0, 400.0)
_ON_PITCH, _VOICED = 0.12, 0.8
"""distance from a whole multiple of the pitch, and the share of lines within it, that make a voice"""


@dataclass(frozen=True, slots=True)
class Heard:
    """A ring, counted from `first` (sample of the recording), and where in it the contact has ended."""

    ring: Ring
    first: int
    contact: int
    noise_rms: float
    growth_db: float
    """from the onset on, whether or not the ring starts later"""
    dies_slowly: bool
    """it takes more than 0.6 s to fall by 20 dB, and falls all the while"""


def heard(samples: FloatArray, rate: float, span: StrikeSpan, quantum: float) -> Heard:
    """The ring after `span`'s last contact and last clipped sample, less the offset of the quiet, with the noise it stands in.

    A second contact excites the same modes again: what follows it is as good a ring, of the modes' f and Q. The same holds after
    clipping, which is no part of the thing.
    """
    first, contact = span.onset, span.contact_end - span.onset
    if span.second_contact is not None and span.end - span.second_contact > 0.02 * rate:
        first = span.second_contact
    if span.clipped:
        last = _last_clipped(samples[first : span.end])
        if first + last + 0.02 * rate < span.end:
            first, contact = first + last, min(contact, max(int(0.0005 * rate), 1))
    piece = _unstuck(samples[first : span.end], rate)
    quiet = samples[span.quiet_from : span.quiet_to]
    noise, offset, rms = _noise(quiet, piece, rate, quantum)
    grows = growth_db(samples[span.onset : span.end] - offset, rate, noise_power(noise, rate))
    slow = dies_slowly(samples[span.onset : span.end] - offset, rate)
    return Heard(Ring(piece - offset, rate, noise, LOWEST_HZ, HIGHEST_OF_RATE * rate), first, contact, rms, grows, slow)


def step_of(samples: FloatArray, bits: int | None = None) -> float:
    """Step of the samples' grid: of `bits` where known, else of the coarsest of 8, 16 and 24 bits that they lie on, else of a float32."""
    peak = float(np.max(np.abs(samples), initial=0.0))
    if bits is not None and 4 <= bits <= 32:
        return 2.0 ** (1 - bits)
    some = samples[:: max(len(samples) // 4096, 1)]
    for depth in (8, 16, 24):
        scaled = some * 2.0 ** (depth - 1)
        if peak > 2.0 ** (4 - depth) and np.all(scaled == np.round(scaled)):
            return 2.0 ** (1 - depth)
    return _FLOAT_STEP * peak


def _last_clipped(piece: FloatArray) -> int:
    """One past the last sample of the first second's flat tops."""
    top = float(np.max(np.abs(piece)))
    return int(np.flatnonzero(np.abs(piece) > 0.985 * top)[-1]) + 2


def _unstuck(piece: FloatArray, rate: float) -> FloatArray:
    """Without the samples at the end that no longer change."""
    moving = np.flatnonzero(np.diff(piece))
    if not len(moving) or len(piece) - moving[-1] < _STUCK_S * rate:
        return piece
    return piece[: int(moving[-1]) + 1]


def _noise(quiet: FloatArray, piece: FloatArray, rate: float, quantum: float) -> tuple[NoiseSpectrum, float, float]:
    """Noise spectrum, offset and rms of the noise: of the quiet before, or where that is too short or gated, of the tail."""
    if len(quiet) >= max(_QUIET_LEAST_S * rate, _QUIET_LEAST_FRAMES) and not _gated(quiet, quantum):
        return noise_spectrum(quiet, rate, quantum=quantum), float(np.mean(quiet)), float(np.std(quiet))
    tail = piece[-max(len(piece) // 4, min(_TAIL_LEAST_FRAMES, len(piece))) :]
    offset = float(np.mean(tail))
    if len(tail) < _TAIL_LEAST_FRAMES:
        level = max(float(np.var(tail)), quantum**2 / 12.0, 1e-40)
        return white_noise(level * 2.0 / rate, rate), offset, level**0.5
    found = noise_spectrum(tail, rate, quantum=quantum)
    # a line in the tail may be a mode that still rings: it takes no part in the floor, and is not called a tone
    plain = replace(found, tones_hz=np.zeros(0), tone_amplitude=np.zeros(0))
    return plain, offset, noise_power(plain, rate) ** 0.5


def _gated(quiet: FloatArray, quantum: float) -> bool:
    """Whether the quiet is digital silence for the most part: nothing is recorded so well."""
    return float(np.count_nonzero(np.diff(quiet))) < 0.1 * len(quiet) or float(np.std(quiet)) < 0.2 * quantum


def noise_power(noise: NoiseSpectrum, rate: float) -> float:
    """Mean square of noise with this spectrum."""
    grid = np.linspace(1.0, rate / 2.0, 2048)
    return float(np.mean(noise.at(grid))) * rate / 2.0


def growth_db(samples: FloatArray, rate: float, noise: float) -> float:
    """How much louder than at first it grows: the largest power of 8 ms within 0.4 s over that of the first 12 ms; `noise`: mean square."""
    width = max(int(_WINDOW_S * rate), 2)
    part = samples[: int(_GROWTH_S * rate)]
    if len(part) < 3 * width:
        return 0.0
    sums = np.concatenate([[0.0], np.cumsum(part**2)])
    at = np.arange(0, len(part) - width, width // 2)
    power = (sums[at + width] - sums[at]) / width
    least = noise + 1e-300
    return float(10.0 * np.log10((power.max() + least) / (power[:2].max() + least)))


def dies_slowly(samples: FloatArray, rate: float) -> bool:
    """Whether the sound takes more than `_SLOW_S` after its peak to fall by 20 dB, and has fallen by 5 dB half-way there.

    A syllable is over sooner, or holds its level. A thin struck sheet, whose modes are too many to tell apart, does neither.
    """
    width = max(int(0.02 * rate), 2)
    blocks = len(samples) // width
    if blocks < 8:
        return False
    power = np.mean(samples[: blocks * width].reshape(blocks, width) ** 2, axis=1)
    top = int(np.argmax(power[: max(int(_GROWTH_S / 0.02), 1)]))
    below = np.flatnonzero(power[top:] < 0.01 * power[top])
    lasts = int(below[0]) if len(below) else blocks - top
    if lasts * 0.02 < _SLOW_S:
        return False
    middle = power[top + lasts // 2 : top + lasts // 2 + 5]
    return bool(np.mean(middle) < 10.0**-0.5 * power[top])


def unexplained(ring: Ring, poles: Poles, contact: int) -> float:
    """Share of the energy of the first 0.3 s after the contact that these modes leave, the noise's own taken off; 0 where all is noise."""
    stop = min(int(_HEARD_S * ring.rate), len(ring.samples))
    start = min(contact, stop // 2)
    noise = noise_power(ring.noise, ring.rate) * (stop - start)
    total = float(np.sum(ring.samples[start:stop] ** 2)) - noise
    if total <= 0.2 * noise:
        return 0.0
    return max(float(np.sum(rest_of(ring, poles)[start:stop] ** 2)) - noise, 0.0) / total


def is_driven(what: Heard, share: float) -> bool:
    """Whether the sound is kept going by something, as speech is, rather than rings: it grows after its onset, and modes do not explain it.

    `share`: what the modes leave unexplained. A struck thing may grow, too (beats, a low mode that starts near zero, a graze before
    the tap), but then its modes account for it.
    """
    return not what.dies_slowly and any(what.growth_db > grows and share > left for grows, left in DRIVEN)


def is_voiced(frequency_hz: FloatArray) -> bool:
    """Whether most of these lines are harmonics of one pitch of a voice."""
    pitches = np.geomspace(*PITCH_HZ, 600)
    orders = frequency_hz[:, None] / pitches[None, :]
    on_pitch = np.abs(orders - np.round(orders)) < _ON_PITCH
    return bool(np.max(np.mean(on_pitch, axis=0)) >= _VOICED)
