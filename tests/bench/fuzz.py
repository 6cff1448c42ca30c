"""Damage small sound files in thousands of ways and read them: only a Recording or a RecordingError may come of it.

    python -m tests.bench.fuzz --count 5000 --seed 1
    python -m tests.bench.fuzz --count 500 --measure     those that can be read are measured too

Each mutation follows from the seed and its number, so that a failure can be had again (`--only NUMBER`, which also keeps the file).
They are read in a child process with a limit on its memory and an alarm on its time; when the child dies, the mutation that killed it is
known, and the next child goes on after it. Counts are printed by outcome; the exit status is 1 if anything but the two allowed came out.
"""

from __future__ import annotations

import argparse
import contextlib
import io
import json
import os
import resource
import signal
import subprocess
import sys
import tempfile
import time
import warnings
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import soundfile

ROOT = Path(__file__).resolve().parent.parent.parent
CHILD = (sys.executable, "-m", "tests.bench.fuzz", "--child")
ITEM_SECONDS = 10
"""What one file may take before it counts as a hang; the sound ones take a hundredth of a second."""
HEADROOM_BYTES = 160 << 20
"""Memory beyond what the child holds after reading the sound files once: the 64 MB that the reader allows itself at most for files this
small, half as much again for a buffer that grows, and the decoders' own."""
FORMATS = (
    ("WAV", "PCM_16"),
    ("WAV", "PCM_24"),
    ("WAV", "FLOAT"),
    ("WAV", "IMA_ADPCM"),
    ("WAVEX", "PCM_24"),
    ("RF64", "PCM_16"),
    ("W64", "PCM_24"),
    ("AIFF", "PCM_24"),
    ("AIFF", "FLOAT"),
    ("CAF", "PCM_16"),
    ("CAF", "ALAC_16"),
    ("FLAC", "PCM_16"),
    ("FLAC", "PCM_24"),
    ("OGG", "VORBIS"),
    ("OGG", "OPUS"),
    ("MP3", "MPEG_LAYER_III"),
)
NASTY = (0, 1, 0x7F, 0x80, 0xFF)
NASTY_WORDS = (0, 1, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF, 0xFFFFFFF0, 0x7FFFF000, 0x00010000)


@dataclass(frozen=True)
class Outcome:
    """What came of one mutation."""

    number: int
    kind: str
    """format of the file that was damaged"""
    says: str
    """"recording", "refused: CODE", or what must not be"""
    seconds: float = 0.0

    @property
    def allowed(self) -> bool:
        return self.says == "recording" or self.says.startswith(("doubted", "refused"))


def sound_files() -> list[tuple[str, bytes]]:
    """Small files of every format, with two channels and a decaying tone in noise; AAC too where PyAV is there."""
    time_s = np.arange(6000) / 48_000
    noise = np.random.default_rng(0).normal(0, 0.02, (6000, 2))
    samples = 0.5 * np.exp(-20 * time_s)[:, None] * np.sin(2 * np.pi * 700 * time_s)[:, None] + noise
    files = []
    for container, subtype in FORMATS:
        written = io.BytesIO()
        soundfile.write(written, samples, 48_000, format=container, subtype=subtype)
        content = written.getvalue()
        if container == "CAF":  # 4 kB of padding, in which damage does nothing
            content = without_padding(content)
        files.append((f"{container}/{subtype}", content))
    with contextlib.suppress(ImportError):
        files += [("M4A/AAC", aac("mp4", samples)), ("ADTS/AAC", aac("adts", samples))]
    return files


def without_padding(caf: bytes) -> bytes:
    """A CAF file without its `free` chunk (8 bytes of head; a chunk is a name of 4 bytes and a size of 8)."""
    place, kept = 8, caf[:8]
    while place + 12 <= len(caf):
        size = 12 + int.from_bytes(caf[place + 4 : place + 12], "big")
        if caf[place : place + 4] != b"free":
            kept += caf[place : place + size]
        place += size
    return kept


def aac(container: str, samples: np.ndarray) -> bytes:
    """The samples as AAC, by FFmpeg."""
    import av

    written = io.BytesIO()
    with av.open(written, "w", format=container) as output:
        track = output.add_stream("aac", rate=48_000, layout="stereo")
        frame = av.AudioFrame.from_ndarray(np.ascontiguousarray(samples.T, dtype=np.float32), format="fltp", layout="stereo")
        frame.sample_rate, frame.pts = 48_000, 0
        output.mux(track.encode(frame))
        output.mux(track.encode(None))
    return written.getvalue()


def mutate(rng: np.random.Generator, content: bytes, others: list[tuple[str, bytes]]) -> bytes:
    """One to four damages; half of them to the first 200 bytes, where the headers are."""
    data = bytearray(content)
    for _ in range(int(rng.integers(1, 5))):
        if not data:
            break
        reach = min(len(data), 200) if rng.random() < 0.5 else len(data)
        at = int(rng.integers(reach))
        kind = int(rng.integers(10))
        if kind == 0:  # flip a bit
            data[at] ^= 1 << int(rng.integers(8))
        elif kind == 1:  # a byte at random, or an extreme one
            data[at] = int(rng.integers(256)) if rng.random() < 0.5 else int(rng.choice(NASTY))
        elif kind == 2:  # a size or a count that cannot be, in either byte order
            word = int(rng.choice(NASTY_WORDS))
            data[at : at + 4] = word.to_bytes(4, "little" if rng.random() < 0.5 else "big")
        elif kind == 3:  # cut the end off
            del data[at:]
        elif kind == 4:  # take a piece out
            del data[at : at + int(rng.integers(1, 64))]
        elif kind == 5:  # put noise in
            data[at:at] = rng.bytes(int(rng.integers(1, 64)))
        elif kind == 6:  # say a piece twice
            data[at:at] = data[at : at + int(rng.integers(1, 512))]
        elif kind == 7:  # a stretch of one value
            length = int(rng.integers(1, 256))
            data[at : at + length] = bytes([int(rng.choice(NASTY))]) * len(data[at : at + length])
        elif kind == 8:  # two bytes change places
            other = int(rng.integers(reach))
            data[at], data[other] = data[other], data[at]
        else:  # the end of another format's file
            donor = others[int(rng.integers(len(others)))][1]
            data[at:] = donor[int(rng.integers(len(donor))) :]
    return bytes(data)


def mutation(seed: int, number: int, files: list[tuple[str, bytes]]) -> tuple[str, bytes]:
    """Mutation `number` of `seed`: the format damaged, and the bytes."""
    rng = np.random.default_rng([seed, number])
    kind, content = files[number % len(files)]
    return kind, mutate(rng, content, files)


def read_one(path: Path, *, measured: bool = False) -> str:
    """Load the file, measure it too if asked, and say what came of it."""
    from qmeter.errors import NothingRangError, RecordingError
    from qmeter.sound.files import Recording

    try:
        recording = Recording.load(path)
        if measured:
            from qmeter.estimate.measure import measure

            with contextlib.suppress(NothingRangError), warnings.catch_warnings():
                warnings.simplefilter("error")  # a division by zero, or an overflow, that numpy would only mention
                measure(recording)
    except RecordingError as error:
        return f"refused: {error.code}"
    except BaseException as error:  # noqa: BLE001 - any other is what is looked for
        return f"{type(error).__name__}: {error}"
    if not np.isfinite(recording.samples).all() or recording.frames < 1:
        return "a recording that is none"
    codes = sorted({doubt.code for doubt in recording.doubts})
    return f"doubted: {', '.join(codes)}" if codes else "recording"


def child(seed: int, first: int, count: int, measured: int = 0) -> None:
    """Read mutations `first` to `first + count`, one line of JSON before and after each."""
    files = sound_files()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "damaged"
        for kind, content in files:  # load every library, and be sure that the undamaged are read
            path.write_bytes(content)
            if "refused" in (says := read_one(path, measured=bool(measured))):
                raise SystemExit(f"{kind} is not read undamaged: {says}")
        held = int(Path("/proc/self/statm").read_text().split()[0]) * resource.getpagesize()
        resource.setrlimit(resource.RLIMIT_AS, (held + HEADROOM_BYTES, held + HEADROOM_BYTES))
        print(json.dumps({"resident_kb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss}), flush=True)
        for number in range(first, first + count):
            kind, content = mutation(seed, number, files)
            path.write_bytes(content)
            print(json.dumps({"number": number, "kind": kind}), flush=True)
            signal.alarm(ITEM_SECONDS)  # not handled: the kernel ends the child, also inside a C loop
            start = time.perf_counter()
            says = read_one(path, measured=bool(measured))
            signal.alarm(0)
            print(json.dumps({"number": number, "kind": kind, "says": says, "seconds": time.perf_counter() - start}), flush=True)
        print(json.dumps({"resident_kb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss}), flush=True)


def run(seed: int, count: int, *, measured: bool = False, resident_kb: list[int] | None = None) -> Iterator[Outcome]:
    """Outcomes of the first `count` mutations; children are started anew after each death.

    `resident_kb` receives the peak of the resident memory at the start and at the end of each child that lived.
    """
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OPENBLAS_NUM_THREADS": "1", "OMP_NUM_THREADS": "1"}
    place, stop = 0, count
    while place < stop:
        command = [*CHILD, f"{seed},{place},{stop - place},{int(measured)}"]
        with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env=environment, cwd=ROOT) as process:
            assert process.stdout is not None and process.stderr is not None
            begun: dict[str, object] | None = None
            for line in process.stdout:
                if not line.startswith("{"):  # the decoder's C code has written where a result of ours belongs
                    yield Outcome(place, str(begun and begun["kind"]), f"words on stdout: {line.strip()}")
                    continue
                record = json.loads(line)
                if "resident_kb" in record:
                    if resident_kb is not None:
                        resident_kb.append(record["resident_kb"])
                elif "says" in record:
                    yield Outcome(**record)
                    place, begun = record["number"] + 1, None
                else:
                    begun = record
            said = process.stderr.read().strip()
        if begun is not None:
            name = "hang" if process.returncode == -signal.SIGALRM else f"death of the process ({process.returncode})"
            yield Outcome(int(str(begun["number"])), str(begun["kind"]), f"{name} {said[-300:]}")
            place = int(str(begun["number"])) + 1
        elif process.returncode != 0:
            raise RuntimeError(f"the child did not start: {said}")


def table(outcomes: list[Outcome]) -> str:
    """Counts by format and by outcome."""
    groups = ("recording", "doubted", "refused", "other")
    rows = {kind: Counter[str]() for kind in sorted({o.kind for o in outcomes})}
    for outcome in outcomes:
        rows[outcome.kind][outcome.says.split(":")[0] if outcome.allowed else "other"] += 1
    lines = [f"{'damaged':<20}" + "".join(f"{group:>12}" for group in groups)]
    lines += [f"{kind:<20}" + "".join(f"{counts[group]:>12}" for group in groups) for kind, counts in rows.items()]
    total = sum(rows.values(), Counter())
    lines.append(f"{'all':<20}" + "".join(f"{total[group]:>12}" for group in groups))
    lines.append("")
    lines += [f"{count:>8}  {says}" for says, count in Counter(o.says for o in outcomes if o.allowed).most_common()]
    return "\n".join(lines)


def main() -> int:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--count", type=int, default=5000)
    parser.add_argument("--seed", type=int, nargs="+", default=[1])
    parser.add_argument("--only", type=int, help="make this mutation alone, keep its file and read it in this process")
    parser.add_argument("--measure", action="store_true", help="measure what can be read")
    parser.add_argument("family", nargs="*", help=argparse.SUPPRESS)  # `python -m tests.bench fuzz` leaves its own word here
    parser.add_argument("--child", help=argparse.SUPPRESS)
    options = parser.parse_args()
    seed = options.seed[0]
    if options.child:
        child(*(int(part) for part in options.child.split(",")))
        return 0
    if options.only is not None:
        kind, content = mutation(seed, options.only, sound_files())
        path = Path(tempfile.gettempdir()) / f"qmeter-fuzz-{seed}-{options.only}"
        path.write_bytes(content)
        print(f"{path} ({kind}): {read_one(path, measured=options.measure)}")
        return 0
    return sum(report(each, options.count, measured=options.measure) for each in options.seed) and 1


def report(seed: int, count: int, *, measured: bool) -> int:
    """Run one seed and print what came of it; the number of outcomes that are not allowed."""
    start, resident_kb = time.monotonic(), list[int]()
    outcomes = list(run(seed, count, measured=measured, resident_kb=resident_kb))
    print(table(outcomes))
    slowest = max(outcomes, key=lambda outcome: outcome.seconds)
    print(f"\nseed {seed}: {len(outcomes)} mutations in {time.monotonic() - start:.0f} s; slowest {slowest.seconds:.2f} s", end="")
    print(
        f" (number {slowest.number}); resident memory {min(resident_kb) / 1024:.0f} MB undamaged, {max(resident_kb) / 1024:.0f} at most\n"
    )
    bad = [outcome for outcome in outcomes if not outcome.allowed]
    for outcome in bad:
        print(f"NOT ALLOWED: number {outcome.number} ({outcome.kind}): {outcome.says}")
    return len(bad)


if __name__ == "__main__":
    sys.exit(main())
