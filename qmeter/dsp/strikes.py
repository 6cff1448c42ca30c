"""Where the strikes of a recording are: onset, end of contact, the quiet before, and how far the ring can be used.

A strike is an abrupt rise of energy against what just preceded it, in any band: the recording is cut into overlapping
frames of about 5 ms, their Hann-weighted spectra are summed into some twenty bands, and each band is held against the
largest of its last 20 ms and the mean of its last 100 ms. A long low ring therefore does not hide a weak tap in the
bands above it, steady noise of any colour never rises, and a beat, which grows no faster than it has just shrunk, stays
below the threshold. The sample of the onset comes from `qmeter.dsp.contact`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import scipy.fft
from numpy.typing import NDArray

from qmeter.dsp import contact

FloatArray = NDArray[np.float64]

HOP_S = 0.0026
"""half a frame"""
PRIOR_FRAMES = 8
"""frames of the short past (about 20 ms): longer than half a period of the lowest modes, and than a fast beat's null"""
PAST_FRAMES = 40
"""frames of the long past (about 100 ms), whose geometric mean scales the noise"""
SAME_STRIKE_S = 0.07
"""a second event within this time belongs to the same strike, unless it is far stronger"""
STRONGER = 3.0
"""peak ratio beyond which it is a strike of its own: a bounce is never stronger than the contact before it"""
NEIGHBOUR = 0.35
"""a rise in one band alone is noise or rumble: a second band must come this near to its threshold"""
LEAST_ADDED = 2.5e-5
"""energy of an event over that of the ring it falls in (-46 dB): what adds less does not end the ring"""
FLOOR_DB = -96.0
"""band energies are floored at white noise this far below the recording's peak: 16 bit rounding is no event"""


@dataclass(frozen=True, slots=True)
class StrikeSpan:
    """One strike in samples of the recording; every `*_to`/`end` is one past the last sample."""

    onset: int
    """first sample of the response, rather late by a few samples than early"""
    contact_end: int
    """where the contact force has ended (an estimate, 0.2 to 3.5 ms after the onset)"""
    quiet_from: int
    """the quiet before it: noise only, no ring of an earlier strike; empty (equal) when there is none"""
    quiet_to: int
    end: int
    """where the next event starts (less a margin) or the recording ends"""
    peak: float
    """largest |sample| after the onset, full scale = 1"""
    clipped: bool
    """flat tops at the strike's own ceiling, wherever that is"""
    second_contact: int | None
    """sample of a bounce or a double tap within this strike, which spoils it"""
    cut_by_next: bool
    """the next event came before the ring met the noise"""
    cut_by_end: bool
    """the recording ends before the ring met the noise"""

    @property
    def usable(self) -> int:
        """Samples from the end of contact to the end of the span."""
        return max(self.end - self.contact_end, 0)


@dataclass(frozen=True, slots=True)
class _Frames:
    """Band energies of a recording: `energy` (frames, bands), with the number of bins and the floor of each band."""

    hop: int
    energy: FloatArray
    bins: FloatArray
    floor: FloatArray
    noise: FloatArray


def find_strikes(samples: FloatArray, rate: float) -> tuple[StrikeSpan, ...]:
    """Every strike of a recording, in order of time.

    samples: one channel, full scale = 1, shape (n,), finite; rate in Hz. Noise, tones, speech and silence yield none
    or a few false ones (the estimator then finds no mode there). An impulse response that starts at sample 0 is one
    strike with an empty quiet.
    """
    x = np.asarray(samples, dtype=np.float64)
    if x.size < 16 or not np.ptp(x) > 0.0:
        return ()
    x = x - x.mean()
    largest = float(max(x.max(), -x.min()))
    frames = _band_energies(x, rate, largest)
    events = _events(frames)
    if not events and _falls(frames):
        events = [0]
    if events and events[0] >= 8:  # the tail may ring to the end, the start did not
        before = frames.energy[: events[0] - 1].mean(axis=0)
        frames = replace(frames, noise=np.minimum(frames.noise, before))
    return _spans(x, rate, frames, events)


def _band_edges(count: int) -> NDArray[np.int64]:
    """First bin of each band: single bins at the bottom, a fifth of their frequency wide further up (`count` bins in all).

    The bin at 0 Hz is left out: drift and rumble; the lowest modes reach the next bin (Hann's lobe is two bins wide).
    """
    edges = [1]
    while edges[-1] < count:
        edges.append(edges[-1] + max(1, round(edges[-1] / 5)))
    edges = edges[:-1]
    if len(edges) > 2 and count - edges[-1] < edges[-1] // 5 + 1:
        edges.pop()  # the last band takes a short remainder, which holds the real-valued bin at half the rate
    return np.array(edges, dtype=np.int64)


def _band_energies(x: FloatArray, rate: float, largest: float) -> _Frames:
    """Hann-weighted spectra of half-overlapping frames summed into bands; single precision does (140 dB)."""
    hop = max(int(scipy.fft.next_fast_len(max(int(rate * HOP_S), 8), real=True)), 8)
    length = 2 * hop
    count = max(x.size // hop - 1, 1)  # a short remainder is left out: padding it would make an edge
    padded = np.zeros((count + 1) * hop, dtype=np.float32)
    padded[: x.size] = x[: padded.size]
    blocks = padded.reshape(-1, hop)
    window = np.hanning(length + 1)[:-1].astype(np.float32)
    edges = _band_edges(hop + 1)
    which = np.searchsorted(edges, np.arange(hop + 1), side="right") - 1
    summing = (which[:, None] == np.arange(edges.size)).astype(np.float32)
    energy = np.empty((count, edges.size))
    step = 256  # frames at a time: stays in the cache
    buffer = np.empty((step, length), dtype=np.float32)
    for first in range(0, count, step):
        last = min(first + step, count)
        part = buffer[: last - first]
        np.multiply(blocks[first:last], window[:hop], out=part[:, :hop])
        np.multiply(blocks[first + 1 : last + 1], window[hop:], out=part[:, hop:])
        spectrum = scipy.fft.rfft(part, axis=1)
        power = spectrum.real**2
        power += spectrum.imag**2
        energy[first:last] = power @ summing
    bins = summing.sum(axis=0).astype(np.float64)
    floor = bins * (largest * 10 ** (FLOOR_DB / 20)) ** 2 * float(np.sum(window.astype(np.float64) ** 2))
    energy += floor
    return _Frames(hop, energy, bins, floor, _noise_level(energy, bins))


def _noise_level(energy: FloatArray, bins: FloatArray) -> FloatArray:
    """Mean noise energy per band from its 20 % quantile over time, corrected for the quantile of chi-squared.

    Wilson and Hilferty's cube-root approximation of chi-squared, with two degrees of freedom a bin (a Hann-weighted
    bin counts for two thirds when summed).
    """
    thinned = energy[:: max(energy.shape[0] // 1000, 1)]
    at = int(0.2 * (thinned.shape[0] - 1))
    quantile: FloatArray = np.partition(thinned, at, axis=0)[at]
    freedom = 2.0 * np.maximum(bins * 0.67, 1.0)
    lower = (1.0 - 2.0 / (9.0 * freedom) - 0.8416 * np.sqrt(2.0 / (9.0 * freedom))) ** 3
    return quantile / lower


def _events(frames: _Frames) -> list[int]:
    """First frames of abrupt rises, in order."""
    energy, bins = frames.energy, frames.bins
    count = energy.shape[0]
    lead = PAST_FRAMES + 2
    extended = np.vstack([np.broadcast_to(frames.noise, (lead, bins.size)), energy])
    widest = extended
    for shift in (1, 2, 4):  # running maximum over PRIOR_FRAMES = 8
        widest = np.maximum(widest[shift:], widest[:-shift])
    prior = widest[lead - 1 - PRIOR_FRAMES : lead - 1 - PRIOR_FRAMES + count]  # frames t-9 .. t-2
    sums = np.cumsum(np.log(extended), axis=0)
    past = np.exp((sums[PAST_FRAMES : PAST_FRAMES + count] - sums[:count]) / PAST_FRAMES)  # frames t-41 .. t-2
    threshold = 1.0 + 20.0 * bins**-0.6
    ratio = energy / (threshold * np.maximum(prior, 1.5 * past))
    rises = np.any(ratio > 1.0, axis=1) & (np.count_nonzero(ratio > NEIGHBOUR, axis=1) >= 2)
    hot = np.flatnonzero(rises)
    if hot.size == 0:
        return []
    starts = hot[np.diff(hot, prepend=-100) > 3]
    return [int(t) for t in starts if _matters(energy[t : t + 3], prior[t])]


def _matters(energy: FloatArray, prior: FloatArray) -> bool:
    """Whether what a rise adds is more than a tick far below the ring it falls in."""
    added = np.maximum(energy.max(axis=0) - prior, 0.0).sum()
    return bool(added > LEAST_ADDED * prior.sum())


def _falls(frames: _Frames) -> bool:
    """Whether the recording starts louder than it ends: a ring that outlasts it, from sample 0 on."""
    count = frames.energy.shape[0]
    part = max(count // 8, 1)
    start, finish = frames.energy[:part].mean(axis=0), frames.energy[-part:].mean(axis=0)
    strong = start > 1e-4 * start.max()
    return bool(count >= 8 and np.any(start[strong] > (1.6 + 6.0 / np.sqrt(part * frames.bins[strong])) * finish[strong]))


def _spans(x: FloatArray, rate: float, frames: _Frames, events: list[int]) -> tuple[StrikeSpan, ...]:
    """Turn events into spans: onsets to the sample, bundling what follows within SAME_STRIKE_S."""
    onsets: list[int] = []
    seconds: list[int | None] = []
    peaks: list[float] = []
    near = max(int(0.01 * rate), 4)
    for frame in events:
        onset = contact.refine_onset(x, rate, frame * frames.hop, frames.hop, onsets[-1] if onsets else None)
        peak = float(np.abs(x[onset : onset + near]).max(initial=0.0))
        if onsets and onset - onsets[-1] < SAME_STRIKE_S * rate and peak < STRONGER * peaks[-1]:
            if seconds[-1] is None and onset - onsets[-1] > 0.0025 * rate:
                seconds[-1] = onset
            continue
        onsets.append(onset)
        seconds.append(None)
        peaks.append(peak)
    margin = max(int(0.001 * rate), 2)
    spans: list[StrikeSpan] = []
    for index, onset in enumerate(onsets):
        following = onsets[index + 1] if index + 1 < len(onsets) else None
        end = x.size if following is None else max(following - margin, onset + 1)
        before = spans[-1].onset if spans else None
        spans.append(_span(x, rate, frames, onset, end, before, following is not None, seconds[index]))
    return tuple(spans)


def _span(
    x: FloatArray, rate: float, frames: _Frames, onset: int, end: int, before: int | None, followed: bool, second: int | None
) -> StrikeSpan:
    quiet_from, quiet_to = _quiet(rate, frames, onset, before)
    noise = frames.noise
    first, last = quiet_from // frames.hop + 1, quiet_to // frames.hop - 1
    if last - first >= 8:
        noise = frames.energy[first:last].mean(axis=0)
    met = _meets_noise(frames, noise, onset, end)
    if quiet_to == quiet_from:  # the noise was taken from the tail, which may still ring
        met = met and not (_still_falls(frames, onset, end, 4) and _still_falls(frames, onset, end, 8))
    clipped = contact.is_clipped(x[onset : min(end, onset + int(rate))])
    found, contact_end = contact.second_contact(x, rate, onset, end)
    if found is not None and not clipped and (second is None or found < second):  # a clipped ring is not predictable
        second = found
    peak = float(np.abs(x[onset:end]).max(initial=0.0))
    return StrikeSpan(
        onset=onset,
        contact_end=contact_end,
        quiet_from=quiet_from,
        quiet_to=quiet_to,
        end=end,
        peak=peak,
        clipped=clipped,
        second_contact=second,
        cut_by_next=followed and not met,
        cut_by_end=not followed and not met,
    )


def _smoothed(energy: FloatArray) -> FloatArray:
    """Mean over eight frames (20 ms), shape (frames - 7, bands); fewer when there are fewer."""
    width = min(8, energy.shape[0])
    sums = np.vstack([np.zeros((1, energy.shape[1])), np.cumsum(energy, axis=0)])
    out: FloatArray = (sums[width:] - sums[:-width]) / width
    return out


def _quiet(rate: float, frames: _Frames, onset: int, before: int | None) -> tuple[int, int]:
    """The longest stretch of noise that ends at the onset, in samples."""
    guard = max(int(0.0005 * rate), 2)
    quiet_to = onset - guard
    last = quiet_to // frames.hop - 1  # one past the last frame that lies wholly before
    if quiet_to < 0.004 * rate:
        return (0, 0) if quiet_to < 0.001 * rate or before is not None else (0, quiet_to)
    first = 0 if before is None else before // frames.hop + 2
    if last - first < 8:
        return (0, quiet_to) if before is None else (quiet_to, quiet_to)
    smooth = _smoothed(frames.energy[first:last])
    limit = frames.noise * (1.0 + 5.0 / np.sqrt(frames.bins))
    loud = np.flatnonzero(np.any(smooth > limit, axis=1))
    if loud.size == 0:
        start = first * frames.hop
    else:
        start = (first + int(loud[-1]) + 8) * frames.hop
        if before is not None:  # what still rings below the noise of a 5 ms frame shows in a longer one
            start += int(0.3 * (start - before))
    return (start, quiet_to) if quiet_to - start > 0.004 * rate else (quiet_to, quiet_to)


def _meets_noise(frames: _Frames, noise: FloatArray, onset: int, end: int) -> bool:
    """Whether the last 20 ms of the span are within 7 to 10 dB of the noise in every band (of 5 ms frames)."""
    last = max(end // frames.hop - 1, 1)
    first = max(last - 8, min(onset // frames.hop + 1, last - 1))
    level = frames.energy[first:last].mean(axis=0)
    return bool(np.all(level < noise * (4.0 + 5.0 / np.sqrt(frames.bins))))


def _still_falls(frames: _Frames, onset: int, end: int, part: int) -> bool:
    """Whether any band's log energy falls over the last 1/part of the span: by 0.3 (1.3 dB), at five sigma of its own scatter."""
    first, last = onset // frames.hop + 1, max(end // frames.hop - 1, 1)
    start = last - max((last - first) // part, min(last - first, 10))
    if last - start < 6:
        return True
    t = np.linspace(-0.5, 0.5, last - start)
    logs = np.log(frames.energy[start:last])
    spread = float(t @ t)
    slope = t @ logs / spread
    scatter = np.sum((logs - logs.mean(axis=0) - t[:, None] * slope) ** 2, axis=0) / (t.size - 2)
    level = np.exp(logs.mean(axis=0)) / frames.bins
    heard = level > 1e-7 * float(level.max())
    error = np.sqrt(1.5 * scatter / spread)  # half-overlapping frames count for two thirds
    return bool(np.any(heard & (-slope > np.maximum(0.3, 5.0 * error))))
