"""Rules of thumb (common practice, no source), through the whole program: a synthesised WAV file in, the printed table read back.

A decay of 1 s at 100 Hz has a Q of about 300; doubling the frequency doubles it; 0.1 s at 200 Hz about 60; 10 s at 200 Hz about 6000.
The decay is the time constant of the amplitude: Q = pi f tau, so the rules are low by 5 % (pi against 3), which is what "about" allows.
"""

from __future__ import annotations

import math
import os
import re
import subprocess
import sys
from dataclasses import dataclass
from functools import cache
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from numpy.testing import assert_allclose

ROOT = Path(__file__).resolve().parent.parent
RATE_HZ = 8_000
PROGRAM = "import sys; from qmeter.cli.app import main; sys.exit(main())"

RULES = [(100.0, 1.0, 300.0), (200.0, 1.0, 600.0), (400.0, 1.0, 1200.0), (200.0, 0.1, 60.0), (200.0, 10.0, 6000.0)]
"""frequency in Hz, time constant of the amplitude in s, Q as the rule has it"""

pytestmark = pytest.mark.timeout(120)


@dataclass(frozen=True)
class Shown:
    """One row of the table as it is printed: frequency, Q, T60, cycles to e^-pi, each with its u95."""

    frequency_hz: tuple[float, float]
    q: tuple[float, float]
    t60_s: tuple[float, float]
    cycles: tuple[float, float]


def write_tap(path: Path, frequency_hz: float, time_constant_s: float) -> None:
    """A tap after 0.5 s of quiet, 70 dB above white noise, seven time constants long, 24 bit."""
    import soundfile

    rng = np.random.default_rng(7)
    t = np.arange(int(7 * time_constant_s * RATE_HZ) + RATE_HZ // 2) / RATE_HZ
    ring = 0.5 * np.exp(-t / time_constant_s) * np.sin(2 * math.pi * frequency_hz * t + 0.3)
    samples = np.concatenate([np.zeros(RATE_HZ // 2), ring])
    soundfile.write(path, samples + 0.5 * 10 ** (-70 / 20) * rng.standard_normal(samples.size), RATE_HZ, subtype="PCM_24")


@cache
def replayed(folder: Path, frequency_hz: float, time_constant_s: float) -> str:
    """What `qmeter replay` prints into a pipe."""
    path = folder / f"tap-{frequency_hz:g}-{time_constant_s:g}.wav"
    write_tap(path, frequency_hz, time_constant_s)
    environment = os.environ | {"PYTHONPATH": str(ROOT), "PYTHONIOENCODING": "utf-8"}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM, "replay", str(path)],
        capture_output=True,
        encoding="utf-8",
        timeout=100,
        env=environment,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def rows(printed: str) -> list[Shown]:
    """The rows of the printed table: a line with four figures, the first in Hz and the third in s."""
    figure = r"([\d.]+) (?:±|\+/-) ([\d.]+)"
    found = re.findall(rf"{figure} Hz\s+{figure}\s+{figure} s\s+{figure}", printed)
    numbers = [[float(text) for text in row] for row in found]
    return [Shown((n[0], n[1]), (n[2], n[3]), (n[4], n[5]), (n[6], n[7])) for n in numbers]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the files of this module lie."""
    return tmp_path_factory.mktemp("taps")


def only_row(folder: Path, frequency_hz: float, time_constant_s: float) -> Shown:
    printed = replayed(folder, frequency_hz, time_constant_s)
    found = rows(printed)
    assert len(found) == 1, printed
    return found[0]


@pytest.mark.parametrize(("frequency_hz", "time_constant_s", "q"), RULES)
def test_rule(folder: Path, frequency_hz: float, time_constant_s: float, q: float) -> None:
    """The table shows about the Q of the rule, and within 1.5 u95 (3 standard uncertainties) f, pi f tau, 6.9078 tau and the cycles."""
    row = only_row(folder, frequency_hz, time_constant_s)
    assert_allclose(row.q[0], q, rtol=0.06, atol=0)
    exact = math.pi * frequency_hz * time_constant_s
    expected = (
        (row.frequency_hz, frequency_hz),
        (row.q, math.sqrt(exact**2 + 0.25)),
        (row.t60_s, 3 * math.log(10) * time_constant_s),
        (row.cycles, exact),
    )
    for (value, u95), truth in expected:
        # the value is printed to the last digit of its u95: half of that digit is lost
        assert abs(value - truth) <= 1.5 * u95 + 0.05 * u95, f"{value} +- {u95}, true {truth}"


def test_twice_the_frequency_has_twice_the_q(folder: Path) -> None:
    """At one time constant, twice the frequency shows twice the Q, twice again the same; T60 stays. All within 1 %."""
    at = [only_row(folder, frequency_hz, 1.0) for frequency_hz in (100.0, 200.0, 400.0)]
    for low, high in pairwise(at):
        assert_allclose(high.q[0] / low.q[0], 2.0, rtol=0.01, atol=0)
        assert_allclose(high.t60_s[0] / low.t60_s[0], 1.0, rtol=0.01, atol=0)


def test_the_table_is_there_on_a_terminal_too(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """The drawn table of 80 columns holds the same Q as the plain one, with its u95 on the line below."""
    import soundfile

    from qmeter.estimate.measure import measure
    from qmeter.recording import Recording
    from qmeter.show.table import render_measurement
    from qmeter.uncertainty import format_value_u95

    row = only_row(folder, 200.0, 0.1)
    samples, rate = soundfile.read(folder / "tap-200-0.1.wav")
    measurement = measure(Recording(samples, rate))
    drawn = render_measurement(measurement, 80).plain
    value, u95 = format_value_u95(measurement.modes[0].q.value, measurement.modes[0].q.u95)
    assert (float(value), float(u95)) == row.q
    assert re.search(rf"200\.\d+\s+{re.escape(value)}\s", drawn), drawn
    assert re.search(rf"±{re.escape(u95)}\b", drawn), drawn
