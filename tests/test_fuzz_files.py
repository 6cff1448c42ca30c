"""Damaged sound files: a few hundred of the mutations that `python -m tests.bench.fuzz` makes by the thousand."""

from __future__ import annotations

import sys
from collections import Counter

import pytest

if sys.platform != "linux":
    pytest.skip("the limits on memory and time are those of Linux", allow_module_level=True)

from tests.bench import fuzz

COUNT = 600


@pytest.mark.timeout(120)
def test_damage_ends_in_a_recording_or_in_a_refusal() -> None:
    """Of some hundreds of damaged files of every format, each gives a Recording or a RecordingError: no other exception, no hang, no
    crash of a decoder, no words of its own on stdout, and no memory beyond the stated limit."""
    outcomes = list(fuzz.run(seed=20, count=COUNT))
    assert sorted(outcome.number for outcome in outcomes) == list(range(COUNT))
    assert [outcome for outcome in outcomes if not outcome.allowed] == []
    kinds = Counter(outcome.says.split(":")[0] for outcome in outcomes)
    assert min(kinds["recording"], kinds["doubted"], kinds["refused"]) > COUNT // 20, (
        "the mutations are too mild or too harsh to show anything"
    )


@pytest.mark.parametrize(
    ("harm", "says"),
    [
        ("os.kill(os.getpid(), 11)", "death of the process (-11)"),
        ("time.sleep(60)", "hang"),
        ("np.ones(400 << 17)", "MemoryError"),
        ("[][0]", "IndexError"),
        ("os.write(1, b'Ooops' + bytes([10]))", "words on stdout: Ooops"),
    ],
)
def test_the_fuzz_sees_what_must_not_be(monkeypatch: pytest.MonkeyPatch, harm: str, says: str) -> None:
    """A crash, a hang, 400 MB, another exception and stray words, planted in the reader, are each reported, and the rest still run."""
    planted = f"""
import os, sys, time
import numpy as np
import qmeter.sound.files as files
from tests.bench import fuzz
fuzz.ITEM_SECONDS = 3
load, calls = files.Recording.load, [0]
third = len(fuzz.sound_files()) + 3  # the undamaged are read first
def harmed(path):
    calls[0] += 1
    if calls[0] == third and sys.argv[1].split(",")[1] == "0":
        {harm}
    return load(path)
files.Recording.load = harmed
fuzz.child(*(int(part) for part in sys.argv[1].split(",")))
"""
    monkeypatch.setattr(fuzz, "CHILD", (sys.executable, "-c", planted))
    outcomes = list(fuzz.run(seed=20, count=6))
    assert [outcome.number for outcome in outcomes if not outcome.allowed] == [2]
    assert next(outcome.says for outcome in outcomes if not outcome.allowed).startswith(says)
    assert {outcome.number for outcome in outcomes} == set(range(6))
