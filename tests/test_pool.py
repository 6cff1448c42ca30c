"""Pooling strikes and mountings: intervals that hold, parts that fall with the number of strikes or do not, modes that are matched."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pytest
from numpy.testing import assert_allclose

from qmeter.errors import UsageError
from qmeter.estimate.match import match
from qmeter.estimate.modes import Doubt, Measurement, Mode, Spread, Strike
from qmeter.estimate.pool import between_variance, measurement_doubts, pool_measurements, pool_readings, pool_values
from qmeter.uncertainty import student_t


def a_mode(
    frequency: float,
    decay: float,
    *,
    u_f: float = 0.01,
    u_a: float = 0.1,
    model: float = 0.0,
    snr_db: float = 45.0,
    level_db: float = -20.0,
    doubts: Sequence[str] = (),
) -> Mode:
    """A mode as one strike reads it; `model` is the model part over the fit part."""
    budget = {"fit": Spread(u_f**2, u_a**2)}
    if model:
        budget["model"] = Spread((model * u_f) ** 2, (model * u_a) ** 2)
    said = tuple(Doubt(code, f"{code} at {frequency:.6g} Hz") for code in doubts)
    return Mode(frequency, decay, complex(10 ** (level_db / 20)), budget, 0.0, level_db, snr_db, 40.0, doubts=said)


# ---- numbers against the outside ----


def test_readings_without_noise_of_their_own_give_the_type_a_evaluation() -> None:
    """Q = 98.2 101.5 99.7 102.3 100.4: mean 100.42, u = 0.712320, U95 = 1.977718 (GUM 4.2 by hand: s = 1.592796, t(4) = 2.7764)."""
    q = np.array([98.2, 101.5, 99.7, 102.3, 100.4])
    pooled = pool_values(q, np.full(5, 1e-12), np.zeros(5), np.zeros(5, dtype=np.intp))
    u = math.sqrt(pooled.scatter_variance / 5)
    assert_allclose(pooled.value, 100.42, rtol=1e-9, atol=0)
    assert_allclose(u, 0.712320, rtol=2e-5, atol=0)
    assert_allclose(student_t(4) * u, 1.977718, rtol=2e-5, atol=0)


def test_twenty_temperatures_of_the_gum() -> None:
    """GUM 4.4.3: twenty readings, mean 100.145 C, standard uncertainty of the mean 0.333 C (as printed)."""
    celsius = (
        "96.90 98.18 98.25 98.61 99.03 99.49 99.56 99.74 99.89 100.07 100.33 100.42 100.68 100.95 101.11 101.20 101.57 101.84 102.36 102.72"
    )
    readings = np.array([float(word) for word in celsius.split()])
    pooled = pool_values(readings, np.full(20, 1e-12), np.zeros(20), np.zeros(20, dtype=np.intp))
    assert_allclose(pooled.value, 100.145, rtol=1e-6, atol=0)
    assert_allclose(math.sqrt(pooled.scatter_variance / 20), 0.332916, rtol=2e-5, atol=0)


def test_readings_that_agree_are_weighed_by_their_noise() -> None:
    """Without scatter the mean is the textbook one: weights 1/u^2, u = (sum 1/u^2)^(-1/2); 1 +- 1 and 1.5 +- 2: 1.1 +- sqrt(0.8)."""
    pooled = pool_values(np.array([1.0, 1.5]), np.array([1.0, 4.0]), np.zeros(2), np.zeros(2, dtype=np.intp))
    assert pooled.scatter_variance == 0.0
    assert_allclose(pooled.value, 1.1, rtol=1e-12, atol=0)
    assert_allclose(pooled.weights**2 @ np.array([1.0, 4.0]), 0.8, rtol=1e-12, atol=0)


def test_a_strike_that_is_wrong_but_sure_does_not_rule() -> None:
    """One of five strikes claims a u a hundred times smaller and lies off: no weight beyond a fifth or so is left to it."""
    values = np.array([100.0, 100.3, 99.6, 100.2, 104.0])
    pooled = pool_values(values, np.array([0.3, 0.3, 0.3, 0.3, 0.003]) ** 2, np.zeros(5), np.zeros(5, dtype=np.intp))
    assert pooled.weights[-1] < 0.22
    assert abs(pooled.value - np.mean(values)) < 0.2


def test_between_variance_of_mountings_is_about_their_own_means() -> None:
    """Two mountings far apart, alike within: the variance within does not see the distance between. Three groups of one: none at all."""
    values = np.array([1.0, 2.0, 3.0, 101.0, 102.0, 103.0])
    groups = np.array([0, 0, 0, 1, 1, 1])
    assert_allclose(between_variance(values, np.full(6, 1e-12), groups), 1.0, rtol=1e-4, atol=0)
    assert between_variance(values[:3], np.full(3, 1e-12), np.arange(3, dtype=np.intp)) == 0.0


# ---- intervals hold ----

MODES = 20
FREQUENCY = 150.0 * 1.2 ** np.arange(MODES)
DECAY = 0.02 * FREQUENCY
SAMPLING_SD = math.sqrt(0.95 * 0.05 / 1000)
U_F, U_A = 0.0005 * FREQUENCY / 50, 0.01 * DECAY


def coverage(strikes: int, mountings: int, scatter: float | None, mounting: float, rounds: int, seed: int) -> tuple[float, float]:
    """Share of pooled intervals of f and of Q that hold the truth; `scatter`, `mounting`: in units of the fit's u (None: 0.3 to 10)."""
    rng = np.random.default_rng(seed)
    held = np.zeros(2)
    for _ in range(rounds):
        between = np.exp(rng.uniform(math.log(0.3), math.log(10.0), MODES)) if scatter is None else np.full(MODES, scatter)
        readings, names = [], []
        for place in range(mountings):
            moved = mounting * rng.normal(size=(2, MODES))
            for _ in range(strikes):
                own = np.exp(0.3 * rng.normal(size=MODES))
                away = moved + between * rng.normal(size=(2, MODES)) + own * rng.normal(size=(2, MODES))
                f, a = FREQUENCY + U_F * away[0], DECAY + U_A * away[1]
                readings.append(tuple(a_mode(f[i], a[i], u_f=own[i] * U_F[i], u_a=own[i] * U_A[i]) for i in range(MODES)))
                names.append(f"mounting {place}")
        if mountings == 1:
            modes = pool_readings(readings, clock_ppm=0.0)
        else:
            modes, _ = pool_measurements([a_measurement([reading]) for reading in readings], names, clock_ppm=0.0)
        assert len(modes) == MODES
        for mode in modes:
            truth = int(np.argmin(np.abs(FREQUENCY - mode.damped_frequency_hz)))
            q = math.hypot(2 * math.pi * FREQUENCY[truth], DECAY[truth]) / (2 * DECAY[truth])
            for which, (figure, true) in enumerate(((mode.frequency_hz, FREQUENCY[truth]), (mode.q, q))):
                assert figure.u95 is not None
                held[which] += abs(figure.value - true) <= figure.u95
    return tuple(held / (rounds * MODES))


def a_measurement(readings: Sequence[tuple[Mode, ...]], accepted: Sequence[bool] | None = None) -> Measurement:
    kept = accepted or [True] * len(readings)
    strikes = tuple(Strike(float(i), 1.0, -3.0, -80.0, kept[i], (), modes) for i, modes in enumerate(readings))
    return Measurement(48000.0, 1, 1, 10.0, strikes, (), ())


@pytest.mark.timeout(120)
@pytest.mark.parametrize("strikes", [3, 5, 10])
@pytest.mark.parametrize("scatter", [0.0, 2.5, 10.0, None])
def test_intervals_over_strikes_hold(strikes: int, scatter: float | None) -> None:
    """The stated 95 % hold in 92 to 98 %, whether strikes scatter far beyond the fit, alike, or not at all (1000 modes, 2 sd allowed)."""
    for held in coverage(strikes, 1, scatter, 0.0, 50, seed=20261201):
        assert 0.92 - 2 * SAMPLING_SD <= held <= 0.98 + 2 * SAMPLING_SD


@pytest.mark.timeout(120)
@pytest.mark.parametrize("mountings", [3, 4, 5])
@pytest.mark.parametrize(("scatter", "mounting"), [(1.0, 5.0), (None, 8.0)])
def test_intervals_over_mountings_hold(mountings: int, scatter: float | None, mounting: float) -> None:
    """Three strikes in each of three to five mountings: 92 to 98 % (1000 modes, 2 sd allowed)."""
    for held in coverage(3, mountings, scatter, mounting, 50, seed=20261202):
        assert 0.92 - 2 * SAMPLING_SD <= held <= 0.98 + 2 * SAMPLING_SD


# ---- the budget ----


def five_strikes(model: float = 0.0) -> list[tuple[Mode, ...]]:
    decays = (13.8, 14.0, 13.7, 13.9, 13.85)
    return [(a_mode(440.0 + 0.01 * i, decay, model=model),) for i, decay in enumerate(decays)]


def test_fit_falls_with_strikes_and_model_does_not() -> None:
    """Twenty equal strikes: the fit's part is a fifth of sqrt(20) of one strike's, the model's stays as it was."""
    (mode,) = pool_readings([(a_mode(440.0, 13.8, model=0.5),)] * 20, clock_ppm=0.0)
    assert_allclose(mode.budget["fit"].decay_variance, 0.1**2 / 20, rtol=1e-9, atol=0)
    assert_allclose(mode.budget["model"].decay_variance, 0.05**2, rtol=1e-9, atol=0)
    assert mode.budget["scatter"].decay_variance == 0.0
    assert mode.budget["scatter"].degrees_of_freedom == 19
    assert mode.strikes == 20


def test_the_clock_moves_frequency_and_decay_alike_and_leaves_q_alone() -> None:
    """100 ppm rectangular: u = 57.735 ppm of f and of T60 (GUM 4.3.7), nothing of Q; and no part at all at 0 ppm."""
    (mode,) = pool_readings(five_strikes(), clock_ppm=100.0)
    assert mode.frequency_hz.parts is not None
    assert mode.t60_s.parts is not None
    assert mode.q.parts is not None
    assert_allclose(mode.frequency_hz.parts.clock, 57.735027e-6 * mode.damped_frequency_hz, rtol=1e-6, atol=0)
    assert_allclose(mode.t60_s.parts.clock, 57.735027e-6 * mode.t60_s.value, rtol=1e-6, atol=0)
    assert mode.q.parts.clock < 1e-6 * mode.q.parts.fit
    assert "clock" not in pool_readings(five_strikes(), clock_ppm=0.0)[0].budget


def test_one_strike_has_neither_scatter_nor_mounting() -> None:
    """A single reading comes back as it was, plus the clock; what is not known is said of the measurement, not of each mode."""
    one = a_mode(440.0, 13.8, model=0.5)
    (mode,) = pool_readings([(one,)], clock_ppm=100.0)
    assert set(mode.budget) == {"fit", "model", "clock"}
    assert (mode.damped_frequency_hz, mode.amplitude_decay_rate_per_s, mode.doubts) == (440.0, 13.8, ())
    doubts = {doubt.code: doubt.says for doubt in measurement_doubts(1, 1, (mode,))}
    assert set(doubts) == {"single-strike", "single-mounting"}
    # u95(Q)/Q = 1.96 hypot(0.1, 0.05)/13.8 = 1.6 %; at five strikes 1.96 hypot(0.1/sqrt 5, 0.05)/13.8 = 0.95 %
    assert "now 1.6 %, would be about 0.95 %" in doubts["single-strike"]


def test_two_strikes_are_told_what_five_would_bring() -> None:
    """Two strikes: the doubt carries the figures now and at five; three raise none; two mountings ask for a third."""
    modes = pool_readings(five_strikes()[:2], clock_ppm=0.0)
    codes = {doubt.code: doubt.says for doubt in measurement_doubts(2, 1, modes)}
    assert "would be about" in codes["few-strikes"]
    assert [doubt.code for doubt in measurement_doubts(3, 1, modes)] == ["single-mounting"]
    assert [doubt.code for doubt in measurement_doubts(6, 2, modes)] == ["few-mountings"]
    assert measurement_doubts(6, 3, modes) == ()
    assert measurement_doubts(1, 1, ()) == ()


def test_covariance_of_frequency_and_decay_travels() -> None:
    """Strikes in which frequency and decay rise together: the scatter part is correlated, and within its bounds."""
    readings = [(a_mode(440.0 + 0.05 * x, 13.8 + 0.5 * x, u_f=1e-4, u_a=1e-3),) for x in (-1.2, -0.4, 0.1, 0.6, 0.9)]
    part = pool_readings(readings, clock_ppm=0.0)[0].budget["scatter"]
    correlation = part.covariance / math.sqrt(part.frequency_variance * part.decay_variance)
    assert 0.95 < correlation < 1.0


def test_mountings_by_name_and_strikes_set_aside() -> None:
    """Two files of one mounting and one of another; strikes set aside do not count unless a file has no other; names must match files."""
    files = [a_measurement(five_strikes(), [True, True, True, False, False]), a_measurement(five_strikes()[:1], [False])]
    modes, doubts = pool_measurements([*files, files[0]], ["nodes", "nodes", "foam"], clock_ppm=0.0)
    assert modes[0].strikes == 7
    assert modes[0].budget["mounting"].degrees_of_freedom == 1
    assert modes[0].budget["scatter"].degrees_of_freedom == 5
    assert [doubt.code for doubt in doubts] == ["few-mountings"]
    alone, doubts = pool_measurements(files, None, clock_ppm=0.0)
    assert "mounting" not in alone[0].budget
    assert [doubt.code for doubt in doubts] == ["single-mounting"]
    with pytest.raises(UsageError, match="2 mountings were named for 1 recordings"):
        pool_measurements(files[:1], ["a", "b"], clock_ppm=0.0)
    assert pool_measurements([a_measurement([()])], None, clock_ppm=0.0) == ((), ())


# ---- matching ----


def pooled_frequencies(readings: Sequence[Sequence[Mode]]) -> list[tuple[float, int]]:
    modes = pool_readings([tuple(reading) for reading in readings], clock_ppm=0.0)
    return sorted((round(mode.damped_frequency_hz, 1), mode.strikes) for mode in modes)


def test_a_mode_missing_in_a_strike_is_pooled_from_the_others() -> None:
    """Three modes, one of them not seen in two of five strikes: three modes, with 5, 5 and 3 strikes, and no doubt."""
    readings = [[a_mode(f, 0.02 * f) for f in (200.0, 300.0, 450.0) if not (f == 300.0 and strike in (1, 4))] for strike in range(5)]
    assert pooled_frequencies(readings) == [(200.0, 5), (300.0, 3), (450.0, 5)]
    assert not any(mode.doubts for mode in pool_readings([tuple(reading) for reading in readings], clock_ppm=0.0))


def test_a_mode_of_few_strikes_is_kept_when_strong_and_dropped_when_weak() -> None:
    """Seen in one strike of five: kept with a doubt at 45 dB, left out at 18 dB; in weak taps it could not have shown, so no doubt."""
    common = [[a_mode(200.0, 4.0, snr_db=50.0)] for _ in range(5)]
    strong = pool_readings([(*common[0], a_mode(500.0, 10.0)), *map(tuple, common[1:])], clock_ppm=0.0)
    assert [(mode.strikes, [doubt.code for doubt in mode.doubts]) for mode in strong] == [(5, []), (1, ["few-strikes"])]
    assert "1 of 5 strikes" in strong[1].doubts[0].says
    weak = pool_readings([(*common[0], a_mode(500.0, 10.0, snr_db=18.0)), *map(tuple, common[1:])], clock_ppm=0.0)
    assert [mode.strikes for mode in weak] == [5]
    soft = [(a_mode(200.0, 4.0, snr_db=25.0),) for _ in range(4)]
    loud = pool_readings([(a_mode(200.0, 4.0, snr_db=65.0), a_mode(500.0, 10.0)), *soft], clock_ppm=0.0)
    assert [(mode.strikes, mode.doubts) for mode in loud] == [(5, ()), (1, ())]


def test_both_halves_of_a_close_pair_that_drifts_stay_apart() -> None:
    """Two modes one width apart, moved by 0.3 width in one strike: the nearest-first match would join the wrong halves."""
    decay, width = math.pi * 2.0, 2.0
    readings = [[a_mode(300.0 + shift, decay), a_mode(300.0 + width + shift, decay)] for shift in (0.0, 0.02, 0.3 * width, -0.01)]
    assert [strikes for _, strikes in pooled_frequencies(readings)] == [4, 4]
    groups = match(readings, [0] * 4)
    assert all(len({mode.damped_frequency_hz for mode in group.modes.values()}) == 4 for group in groups)


def test_one_strike_that_splits_a_mode_does_not_make_two() -> None:
    """Four strikes read one mode, the fifth two beside each other: one mode, doubted as a possible pair."""
    decay = math.pi * 2.0
    readings = [[a_mode(300.0 + 0.01 * i, decay)] for i in range(4)] + [
        [a_mode(299.8, decay, level_db=-21), a_mode(301.0, decay, level_db=-30)]
    ]
    (mode,) = pool_readings([tuple(reading) for reading in readings], clock_ppm=0.0)
    assert mode.strikes == 5
    assert [doubt.code for doubt in mode.doubts] == ["close-pair"]
    assert "1 of 5 strikes" in mode.doubts[0].says


def test_a_blend_of_two_is_left_out_of_the_pair() -> None:
    """Four strikes read a pair, the fifth one blend between: a pair of four strikes, and the blend in neither."""
    decay = math.pi * 2.0
    pair = [[a_mode(300.0, decay), a_mode(301.2, decay)] for _ in range(4)]
    assert pooled_frequencies([*pair, [a_mode(300.45, decay)]]) == [(300.0, 4), (301.2, 4)]


@pytest.mark.timeout(60)
def test_dense_spectra_are_matched() -> None:
    """Forty modes at random between 80 Hz and 4 kHz, Q 25 to 120, five strikes with a fifth missing and drift: few are torn or joined."""
    rng = np.random.default_rng(7)
    wrong = total = 0
    for _ in range(5):
        frequency = np.sort(np.exp(rng.uniform(math.log(80), math.log(4000), 40)))
        decay = math.pi * frequency / rng.uniform(25, 120, 40)
        names: dict[int, int] = {}
        readings = []
        for _ in range(5):
            drift = 1.0 + 0.0003 * rng.normal()
            reading = []
            for place in np.flatnonzero(rng.uniform(size=40) < 0.8):
                u_a = 0.01 * decay[place]
                mode = a_mode(
                    drift * frequency[place] + u_a / (2 * math.pi) * rng.normal(),
                    decay[place] * math.exp(0.05 * rng.normal()),
                    u_f=u_a / (2 * math.pi),
                    u_a=u_a,
                )
                names[id(mode)] = int(place)
                reading.append(mode)
            readings.append(reading)
        for group in match(readings, [0] * 5):
            truths = [names[id(mode)] for mode in group.modes.values()]
            total += len(truths)
            wrong += len(truths) - max(map(truths.count, truths))
    assert total > 750
    assert wrong <= 0.02 * total


def test_strongest_strike_gives_the_level_and_strongest_mode_comes_first() -> None:
    """Level, amplitude and SNR are the strongest strike's; levels are relative to the strongest mode."""
    soft = (a_mode(200.0, 4.0, level_db=-40.0, snr_db=30.0), a_mode(500.0, 10.0, level_db=-30.0, snr_db=40.0))
    loud = (a_mode(200.0, 4.0, level_db=-30.0, snr_db=40.0), a_mode(500.0, 10.0, level_db=-18.0, snr_db=52.0))
    modes = pool_readings([soft, loud, soft], clock_ppm=0.0)
    assert [(round(m.damped_frequency_hz), m.level_dbfs, m.level_db, m.snr_db) for m in modes] == [
        (500, -18.0, 0.0, 52.0),
        (200, -30.0, -12.0, 40.0),
    ]


def test_doubts_of_most_strikes_stay_in_the_words_of_the_worst() -> None:
    """Curved in two of three strikes: kept, with the figures of the strike of largest u; few-decibels in one of three: gone."""
    readings = [
        (a_mode(440.00, 13.8, u_a=0.1, doubts=["curved-decay"]),),
        (a_mode(440.01, 13.8, u_a=0.3, doubts=["curved-decay", "few-decibels"]),),
        (a_mode(440.02, 13.8),),
    ]
    (mode,) = pool_readings(readings, clock_ppm=0.0)
    assert mode.doubts == (Doubt("curved-decay", "curved-decay at 440.01 Hz"),)


def test_nothing_to_pool() -> None:
    """No strikes, or strikes without modes, give no modes."""
    assert pool_readings([], clock_ppm=100.0) == ()
    assert pool_readings([(), ()], clock_ppm=100.0) == ()
