"""The other two routes held against the fit, mode by mode, and what is to be doubted where they differ or where the decay is bent."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt
import scipy.fft

from qmeter import relations
from qmeter.dsp.band import bins_around
from qmeter.estimate.backward import Backward, Bend, Slope, backward_integrals, bend
from qmeter.estimate.half_power import ModeRing, agreement, half_power_widths, ring_from_bins
from qmeter.estimate.modes import Doubt, Mode, SecondRoute
from qmeter.uncertainty import NORMAL_95, Figure

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

_LEAST_CHANGE = 0.03
"""a change of the loss by less than this is not worth a sentence, however well it is seen"""
_LEAST_GLIDE_WIDTHS = 0.1
_LEAST_SAMPLES = 64
_TIME_CONSTANTS = 7.0
_BAND_WIDTHS = 16.0
"""half of a band in decay rates (both per sample): eight half-power widths, each of 2 alpha in rad/s"""
_LEAST_BINS = 8
_WORTH_U = 0.25
"""a route that knows Q no better than this, relative, is left out"""


def mode_rings(
    rest: Array, rate_hz: float, poles: Complex, amplitudes: Complex, starts: Sequence[int], noise_psd: Sequence[float]
) -> list[ModeRing | None]:
    """The ring of each mode alone, from what is left of the samples when all modes are taken away.

    `rest`: samples from the onset on, less all modes. `poles` (m,): log-poles per sample; `amplitudes` (m,): of Re(A exp(pole n)), n from
    the onset; `starts` (m,): sample from which each mode is to be read; `noise_psd` (m,): one-sided, per Hz, at each mode; what is
    left in a mode's band counts where it is more. Modes of like
    start and decay share a transform, of seven to fourteen time constants as far as there are samples. None: fewer
    than 64 samples are left.
    """
    spectra: dict[tuple[int, int], Complex] = {}
    rings: list[ModeRing | None] = []
    for pole, amplitude, start, density in zip(poles.tolist(), amplitudes.tolist(), starts, noise_psd, strict=True):
        left = rest.size - start
        if left < _LEAST_SAMPLES:
            rings.append(None)
            continue
        length = min(1 << math.ceil(math.log2(max(_TIME_CONSTANTS / max(-pole.real, 1e-12), _LEAST_SAMPLES))), left & ~1)
        if (start, length) not in spectra:
            spectra[start, length] = np.asarray(scipy.fft.rfft(rest[start : start + length])) * (2.0 / length)
        bin_per_sample = 2.0 * math.pi / length
        centre = round(pole.imag / bin_per_sample)
        half = max(_LEAST_BINS, math.ceil(_BAND_WIDTHS * -pole.real / bin_per_sample))
        half = max(min(half, length // 2 - centre - 1), _LEAST_BINS)
        bins = bins_around(spectra[start, length], np.array([centre - half]), 2 * half)[0]
        offset_hz = (pole.imag - centre * bin_per_sample) * rate_hz / (2.0 * math.pi)
        at_start = amplitude * np.exp(pole * start)
        bin_hz = rate_hz / length
        # clutter stands above the noise; the median keeps what a wrong fit leaves at the line itself out of it
        clutter = float(np.median(np.abs(bins) ** 2)) / (math.log(2.0) * 2.0 * bin_hz)
        rings.append(ring_from_bins(bins, half, bin_hz, at_start, offset_hz, -pole.real * rate_hz, max(density, clutter)))
    return rings


def cross_checked(modes: Sequence[Mode], rings: Sequence[ModeRing | None]) -> tuple[Mode, ...]:
    """The same modes with their second and third route and the doubts that these raise.

    `rings`: each mode's ring, complex envelope, other modes taken away (None: no check can be made of it). A route is None where it
    cannot be read or is too uncertain to check anything.
    """
    known = [place for place, ring in enumerate(rings) if ring is not None]
    present = [ring for ring in rings if ring is not None]
    result = list(modes)
    for place, ring, width, backward in zip(known, present, half_power_widths(present), backward_integrals(present), strict=True):
        result[place] = _checked(modes[place], *width.q(modes[place].damped_frequency_hz), backward, bend(ring))
    return tuple(result)


def _checked(mode: Mode, q_width: float, u_width: float, backward: Backward, bent: Bend | None) -> Mode:
    half_power = _route(mode, q_width, u_width)
    integral = _route(mode, *backward.q(mode.damped_frequency_hz))
    doubts = list(mode.doubts)
    named = (("half-power width", half_power), ("backward-integrated decay", integral))
    differing = [(name, route) for name, route in named if route is not None and not route.agrees]
    if differing:
        doubts.append(_differ(mode, differing))
    if bent is not None:
        doubts += _bent(mode, bent)
    return replace(mode, half_power=half_power, backward_integral=integral, doubts=tuple(doubts))


def _q_part(mode: Mode, name: str) -> float:
    """One part of the standard uncertainty of Q; 0 where the mode has none of that name."""
    if name not in mode.budget:
        return 0.0
    f, a = mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s
    # Q = sqrt(omega^2 + a^2)/(2 a)
    root = math.hypot(2.0 * math.pi * f, a)
    return mode.budget[name].along(2.0 * math.pi**2 * f / (a * root), -2.0 * (math.pi * f / a) ** 2 / root)


def _route(mode: Mode, q: float, u: float) -> SecondRoute | None:
    """A route as a figure with its agreement; its u95 is that of the noise alone."""
    if not (math.isfinite(q) and math.isfinite(u)) or u > _WORTH_U * q:
        return None
    fit = relations.q_from_damped(mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s)
    _, agrees = agreement(fit, _q_part(mode, "fit"), q, u, u_apart=_q_part(mode, "model"))
    return SecondRoute(Figure(q, NORMAL_95 * u), agrees)


def _differ(mode: Mode, routes: Sequence[tuple[str, SecondRoute]]) -> Doubt:
    others = ", ".join(f"the {name} {_plus_minus(route.q)}" for name, route in routes)
    return Doubt(
        "routes-differ",
        f"The fit of the decay gives Q = {_plus_minus(mode.q)}, {others}: further apart than the noise allows. Something else rings in "
        "this band, or the loss changes as it decays: trust none beyond their difference.",
    )


def _plus_minus(figure: Figure) -> str:
    from qmeter.uncertainty import format_value_u95

    return "{} ± {}".format(*format_value_u95(figure.value, figure.u95))


def _bent(mode: Mode, bent: Bend) -> list[Doubt]:
    """One doubt where loss or frequency change with the level, and by enough to matter."""
    early, late = bent.early, bent.late
    f = mode.damped_frequency_hz
    says = []
    change = abs(late.decay_rate_per_s / early.decay_rate_per_s - 1.0)
    if bent.is_curved and min(early.decay_rate_per_s, late.decay_rate_per_s) > 0.0 and change > _LEAST_CHANGE:
        q_early, q_late = (relations.q_from_damped(f, slope.decay_rate_per_s) for slope in (early, late))
        says.append(f"The decay is not straight: Q is {q_early:.3g} {_between(early)} below the strike and {q_late:.3g} {_between(late)}.")
    glide = late.offset_hz - early.offset_hz
    if bent.is_gliding and abs(glide) > _LEAST_GLIDE_WIDTHS * mode.amplitude_decay_rate_per_s / math.pi:
        way = "falls" if glide < 0.0 else "rises"
        from_to = f"the first {-early.to_db:.0f} dB to the next {early.to_db - late.to_db:.0f} dB"
        says.append(f"The frequency {way} by {_two_digits(abs(glide))} Hz ({_two_digits(100 * abs(glide) / f)} %) from {from_to}.")
    if not says:
        return []
    says.append("It depends on the amplitude, or two modes share the band: tap softer and compare, and give the range with the figure.")
    return [Doubt("curved-decay", " ".join(says))]


def _between(slope: Slope) -> str:
    return f"from {-slope.from_db + 0.0:.0f} to {-slope.to_db:.0f} dB"


def _two_digits(value: float) -> str:
    """Two significant digits without a power of ten."""
    return f"{float(f'{value:.2g}'):g}"
