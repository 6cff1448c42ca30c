"""Speed as ratios within one run, one thread: python -m tests.bench speed.

- measure() on 10 s at 48 kHz with 20 modes, against one scipy.fft.rfft of the recording (floor 25, aim 8);
- against the textbook chain that is told the 20 frequencies (at least 6 times faster, aim 11);
- a dense real recording (at most 3 s, aim 1); memory over the samples (at most 15);
- `qmeter --help` over `python -c "import typer, rich"` (at most 2.5);
- a batch of 40 files of 10 s at two jobs over one job (at least 1.7 on two idle cores).
"""

from __future__ import annotations

import math
import os
import subprocess
import sys
import tempfile
import time
import tracemalloc
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from scipy import fft
from scipy.signal import butter, hilbert, sosfiltfilt

from qmeter.dsp import synth
from tests.bench.case import Array, decibels, generator, log_uniform, phase
from tests.bench.families import spaced

RATE_HZ, SECONDS, MODES = 48000.0, 10.0, 20
ENTRY = "from qmeter.cli.app import main; main()"
"""What the installed command runs."""

DENSE = ("perc_till", "drum_cymbal_open", "drum_splash_hard", "perc_bell")


def twenty_modes(index: int = 0) -> tuple[Array, list[synth.RingingMode]]:
    """10 s of noise 50 dB below the strongest of 20 modes: 100 Hz to 8 kHz, five widths apart, Q 50 to 1000, levels over 40 dB."""
    rng = generator("speed", 1, index)
    places = spaced(rng, MODES, 100.0, 8000.0, lambda: log_uniform(rng, 50, 1000), 5.0)
    modes = [synth.RingingMode.from_q(f, q, 0.1 * decibels(-rng.uniform(0, 40)) * phase(rng)) for f, q in places]
    count = int(RATE_HZ * SECONDS)
    noise = max(abs(m.amplitude) for m in modes) / math.sqrt(2) / decibels(50)
    return synth.ring(modes, RATE_HZ, count, 0.5) + synth.white_noise(rng, count, noise), modes


def textbook(samples: Array, rate_hz: float, frequencies_hz: list[float], onset: int) -> list[float]:
    """Decay rates by the usual chain: per mode a 4th-order Butterworth band (0.9 to 1.1 f), envelope, straight line from -5 to -25 dB."""
    rates = []
    for f in frequencies_hz:
        band = butter(4, [0.9 * f, 1.1 * f], "bandpass", fs=rate_hz, output="sos")
        envelope = np.abs(hilbert(sosfiltfilt(band, samples)))[onset:]
        level = 20 * np.log10(np.maximum(envelope / envelope.max(), 1e-12))
        top = int(np.argmax(level))
        begin = top + int(np.argmax(level[top:] < -5))
        end = max(top + int(np.argmax(level[top:] < -25)), begin + 8)
        slope = np.polyfit(np.arange(begin, end) / rate_hz, level[begin:end], 1)[0]
        rates.append(-slope / 8.685889638)
    return rates


def quickest(work: Callable[[], Any], times: int) -> float:
    """Shortest of several runs, in seconds: the run least disturbed by others on the machine."""
    best = math.inf
    for _ in range(times):
        started = time.perf_counter()
        work()
        best = min(best, time.perf_counter() - started)
    return best


def verdict(what: str, value: float, unit: str, least: float | None, most: float | None, aim: str) -> bool:
    """Print one line; returns whether the floor holds."""
    holds = (least is None or value >= least) and (most is None or value <= most)
    bound = f">= {least:g}" if least is not None else f"<= {most:g}"
    print(f"  {what:<58}{value:9.3g} {unit:<6} {bound}{', aim ' + aim if aim else ''}{'' if holds else '   <-- missed'}", flush=True)
    return holds


def measure_ratios() -> list[bool]:
    """Against one rfft, against the textbook chain, and memory."""
    from qmeter.estimate.measure import measure_samples
    from qmeter.estimate.modes import Settings

    samples, modes = twenty_modes()
    settings = Settings()
    found = measure_samples(samples, RATE_HZ, settings)
    print(f"  {len(found.modes)} modes reported of {MODES} planted")
    one_rfft = quickest(lambda: fft.rfft(samples), 25)
    ours = quickest(lambda: measure_samples(samples, RATE_HZ, settings), 7)
    told = [m.damped_frequency_hz for m in modes]
    chain = quickest(lambda: textbook(samples, RATE_HZ, told, int(0.5 * RATE_HZ)), 3)
    print(f"  rfft {1e3 * one_rfft:.2f} ms, measure {1e3 * ours:.1f} ms, textbook chain {1e3 * chain:.0f} ms")
    tracemalloc.start()
    measure_samples(samples, RATE_HZ, settings)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    return [
        verdict("measure over one rfft", ours / one_rfft, "", None, 25.0, "8"),
        verdict("textbook chain over measure", chain / ours, "", 6.0, None, "11"),
        verdict("memory over that of the samples", peak / samples.nbytes, "", None, 15.0, ""),
    ]


def dense_real() -> list[bool]:
    """The slowest of four dense real recordings."""
    from qmeter.estimate.measure import measure_samples
    from qmeter.estimate.modes import Settings
    from tests.bench.clutter import NoRecordingsError, recording

    worst, which = 0.0, ""
    for name in DENSE:
        try:
            samples, rate, _ = recording(name)
        except NoRecordingsError as error:
            print(f"  NOT RUN: {error}")
            return [False]
        seconds = quickest(lambda s=samples, r=rate: measure_samples(s, r, Settings()), 2)  # type: ignore[misc]
        print(f"    {name}: {samples.size / rate:.2f} s of sound in {seconds:.2f} s")
        if seconds > worst:
            worst, which = seconds, name
    return [verdict(f"dense real recording ({which})", worst, "s", None, 3.0, "1")]


def start_up() -> list[bool]:
    """`qmeter --help` against importing what it stands on."""

    def run(*arguments: str) -> None:
        subprocess.run([sys.executable, *arguments], check=True, stdout=subprocess.DEVNULL)

    ours = quickest(lambda: run("-c", ENTRY, "--help"), 7)
    base = quickest(lambda: run("-c", "import typer, rich"), 7)
    return [verdict("qmeter --help over import typer, rich", ours / base, "", None, 2.5, "")]


def batch() -> list[bool]:
    """Forty files of 10 s, `--jobs 1` against `--jobs 2`.

    "Workers started" is allowed for by timing a run on two files at two jobs (one each, all of it starting) and taking that off both.
    """
    import soundfile

    with tempfile.TemporaryDirectory() as folder:
        files = []
        for index in range(40):
            path = Path(folder) / f"ring{index:02d}.wav"
            soundfile.write(path, twenty_modes(index)[0], int(RATE_HZ), subtype="PCM_24")
            files.append(str(path))

        def run(jobs: int, some: list[str]) -> None:
            command = [sys.executable, "-c", ENTRY, "replay", "--json", "--jobs", str(jobs), *some]
            subprocess.run(command, check=True, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)

        start_one, start_two = quickest(lambda: run(1, files[:1]), 2), quickest(lambda: run(2, files[:2]), 2)
        one, two = quickest(lambda: run(1, files), 2), quickest(lambda: run(2, files), 2)
    print(f"  one job {one:.1f} s (first file {start_one:.1f}), two jobs {two:.1f} s (first two {start_two:.1f})")
    ratio = ((one - start_one) / (len(files) - 1)) / ((two - start_two) / (len(files) - 2))
    return [verdict("40 files: time a file at one job over two, once started", ratio, "", 1.7, None, "")]


def main() -> int:
    """Run every part; a part that cannot run is said and counts as missed."""
    print(f"speed   (load {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores: ratios mean little on a busy machine)")
    results: list[bool] = []
    for part in (measure_ratios, dense_real, start_up, batch):
        try:
            results += part()
        except Exception as error:  # noqa: BLE001 - one part that fails must not hide the others
            print(f"  {part.__name__} could not run: {type(error).__name__}: {error}   <-- missed")
            results.append(False)
    return 0 if all(results) else 1


if __name__ == "__main__":
    sys.exit(main())
