"""The command line: data to stdout, words to stderr, the right exit status, and no traceback whatever is given to it."""

from __future__ import annotations

import csv
import io
import json
import os
import signal
import struct
import subprocess
import sys
import time
import wave
from dataclasses import replace
from pathlib import Path

import pytest
from jsonschema import Draft202012Validator

from qmeter import __version__
from qmeter.cli.app import main
from qmeter.cli.mountings import assign
from qmeter.errors import UsageError
from qmeter.estimate.modes import Measurement, Settings
from qmeter.recording import Recording
from tests import fakes

ROOT = Path(__file__).resolve().parent.parent
SCHEMA = json.loads((ROOT / "docs" / "result.schema.json").read_text(encoding="utf-8"))

RUNNER = f"""
import os, sys, time
sys.path.insert(0, {str(ROOT)!r})
import qmeter.estimate.measure as chain
from tests import fakes

def measure(recording, settings):
    name = os.path.basename(recording.origin.file)
    if name.startswith("slow"):
        print("measuring", file=sys.stderr, flush=True)
        time.sleep(60)
    if name.startswith("die"):
        os._exit(9)
    return fakes.plate()

chain.measure = measure

if __name__ == "__main__":
    from qmeter.cli.app import main
    sys.exit(main())
"""
"""The program with a measurement that takes no time, or too much; worker processes import it, too."""


def write_wav(path: Path, frames: int = 800) -> Path:
    """A short 16-bit file that can be read; what is in it does not matter here, but that it differs from name to name."""
    with wave.open(str(path), "wb") as out:
        out.setparams((1, 2, 8000, frames, "NONE", ""))
        out.writeframes(struct.pack(f"<{frames}h", *((n + sum(path.name.encode())) % 100 for n in range(frames))))
    return path


@pytest.fixture
def hand_made(monkeypatch: pytest.MonkeyPatch) -> list[Settings]:
    """Puts hand-made measurements in the estimator's place, by the file's name; gives the settings that it was called with."""
    asked: list[Settings] = []

    def measure(recording: Recording, settings: Settings) -> Measurement:
        asked.append(settings)
        name = Path(recording.origin.file if recording.origin else "").name
        if name.startswith("bug"):
            raise ZeroDivisionError("division by zero")
        if name.startswith("memory"):
            raise MemoryError
        made = fakes.silence() if name.startswith("quiet") else fakes.bar() if name.startswith("bar") else fakes.plate()
        return replace(made, file=None, sha256=recording.origin.sha256 if recording.origin else None)

    monkeypatch.setattr("qmeter.estimate.measure.measure", measure, raising=False)
    return asked


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A working folder with files whose names say what comes of them."""
    for name in ("plate.wav", "bar.wav", "quiet.wav", "bug.wav", "memory.wav", "hung-1.wav", "hung-2.wav", "foam-1.wav"):
        write_wav(tmp_path / name)
    monkeypatch.chdir(tmp_path)
    return tmp_path


# ---- without a recording ----


def test_bare_shows_help(capsys: pytest.CaptureFixture[str]) -> None:
    """`qmeter` alone says what it can do, and that is no error."""
    assert main([]) == 0
    out, err = capsys.readouterr()
    assert "qmeter replay plate.wav" in out and "Commands:" in out
    assert err == ""


@pytest.mark.parametrize("flag", ["-h", "--help"])
def test_help_begins_with_examples(flag: str, capsys: pytest.CaptureFixture[str]) -> None:
    """The examples stand before the options."""
    assert main(["replay", flag]) == 0
    out = capsys.readouterr().out
    assert out.startswith("Usage: qmeter replay [OPTIONS] FILE...\n")
    assert 0 < out.index("Examples:") < out.index("Exit status") < out.index("--json")
    assert max(map(len, out.splitlines())) <= 80


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    """One line, for bug reports."""
    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"qmeter {__version__}\n"


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ([], "Missing argument"),
        (["a.wav", "--rang", "1", "2"], "No such option"),
        (["a.wav", "--most", "many"], "valid integer"),
        (["a.wav", "--json", "--csv"], "exclude one another"),
        (["a.wav", "--channel", "0"], "--channel 0: it counts from 1"),
        (["a.wav", "--jobs", "-2"], "--jobs -2: it counts from 1"),
        (["a.wav", "--most", "0"], "--most 0"),
        (["a.wav", "--near", "nan"], "--near nan: a frequency in Hz is wanted"),
        (["a.wav", "--near", "-5"], "--near -5"),
        (["a.wav", "--pitch", "0"], "--pitch 0"),
        (["a.wav", "--range", "500", "100"], "the lower frequency comes first"),
        (["a.wav", "--range", "0", "inf"], "--range 0"),
        (["a.wav", "--from", "-1"], "--from -1: seconds"),
        (["a.wav", "--from", "2", "--to", "1"], "the end comes after the beginning"),
        (["-", "-"], "only once"),
        (["a.wav", "--mounting", "hung"], "write a name, an equals sign and files"),
        (["a.wav", "--mounting", "hung=b.wav"], "no file given is called b.wav"),
    ],
)
def test_what_cannot_be_meant(options: list[str], says: str, capsys: pytest.CaptureFixture[str]) -> None:
    """Exit status 2 and a sentence with the figure, before any file is opened; nothing on stdout."""
    assert main(["replay", *options]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert says in err
    assert "Traceback" not in err


# ---- results ----


def test_json(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """One object that keeps to the schema; the file as given, its digest, its modes; nothing on stderr."""
    assert main(["replay", "plate.wav", "bar.wav", "--json"]) == 0
    out, err = capsys.readouterr()
    result = json.loads(out)
    Draft202012Validator(SCHEMA).validate(result)
    assert [recording["file"] for recording in result["recordings"]] == ["plate.wav", "bar.wav"]
    assert result["failures"] == [] and "pooled" not in result
    assert err == ""


def test_options_reach_the_estimator(folder: Path, hand_made: list[Settings]) -> None:
    """Each as it was given."""
    options = ["--channel", "1", "--near", "185", "--most", "3", "--range", "100", "400"]
    assert main(["replay", "plate.wav", *options, "--json"]) == 0
    assert hand_made == [Settings(channel=1, near_hz=185.0, most=3, range_hz=(100.0, 400.0))]


def test_csv(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """One row a mode a file, in order."""
    assert main(["replay", "bar.wav", "plate.wav", "--csv"]) == 0
    rows = list(csv.reader(io.StringIO(capsys.readouterr().out, newline="")))
    assert [row[0] for row in rows] == ["file"] + 3 * ["bar.wav"] + 7 * ["plate.wav"]


def test_piped_is_plain(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """No escapes, no drawing, each mode with its u95."""
    assert main(["replay", "plate.wav", "--pitch", "440"]) == 0
    out = capsys.readouterr().out
    assert "184.120 ± 0.059 Hz" in out and "F♯3" in out
    assert "\x1b" not in out and "█" not in out


def test_terminal_gets_strips(
    folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """On a terminal the table is drawn, in colour; with --plain it is not; NO_COLOR takes the colour and leaves the table."""
    for name in ("NO_COLOR", "FORCE_COLOR", "TTY_COMPATIBLE"):
        monkeypatch.delenv(name, raising=False)
    for name, value in (("TERM", "xterm-256color"), ("COLORTERM", "truecolor"), ("COLUMNS", "80"), ("FORCE_COLOR", "1")):
        monkeypatch.setenv(name, value)
    assert main(["replay", "plate.wav"]) == 0
    coloured = capsys.readouterr().out
    assert "█" in coloured and "\x1b[38;2;86;180;233m" in coloured
    assert main(["replay", "plate.wav", "--plain"]) == 0
    assert "\x1b" not in capsys.readouterr().out
    monkeypatch.setenv("NO_COLOR", "1")
    assert main(["replay", "plate.wav"]) == 0
    bare = capsys.readouterr().out
    assert "█" in bare and "[38;" not in bare
    monkeypatch.setenv("TERM", "dumb")
    assert main(["replay", "plate.wav"]) == 0
    assert capsys.readouterr().out.isascii()


def test_picture(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """--svg draws beside any form of output; a place that cannot be written is said."""
    assert main(["replay", "plate.wav", "--json", "--svg", "plate.svg"]) == 0
    assert "184.120" in (folder / "plate.svg").read_text(encoding="utf-8")
    json.loads(capsys.readouterr().out)
    assert main(["replay", "plate.wav", "--svg", "nowhere/plate.svg"]) == 2
    assert "cannot be written to nowhere" in capsys.readouterr().err


# ---- exit status and failures ----


@pytest.mark.parametrize(
    ("files", "status", "measured"),
    [
        (["plate.wav"], 0, 1),
        (["quiet.wav"], 3, 1),
        (["quiet.wav", "plate.wav"], 0, 2),
        (["lost.wav"], 4, 0),
        (["lost.wav", "plate.wav"], 4, 1),
        (["quiet.wav", "lost.wav"], 4, 1),
        (["memory.wav", "plate.wav"], 4, 1),
        (["bug.wav", "lost.wav", "plate.wav"], 1, 1),
    ],
)
def test_exit_status(
    files: list[str], status: int, measured: int, folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]
) -> None:
    """0 something rang, 3 nothing did, 4 wins over 3, 1 is a bug; the others are measured all the same and the document holds."""
    assert main(["replay", *files, "--json"]) == status
    out, err = capsys.readouterr()
    result = json.loads(out)
    Draft202012Validator(SCHEMA).validate(result)
    assert len(result["recordings"]) == measured
    assert len(result["failures"]) == len(files) - measured
    assert len(err.splitlines()) == sum(name != "plate.wav" for name in files)
    assert all(line.startswith("qmeter: ") for line in err.splitlines())
    assert "Traceback" not in err


def test_a_bug_is_a_sentence(
    folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    """The traceback only when it was asked for."""
    monkeypatch.delenv("QMETER_DEBUG", raising=False)
    assert main(["replay", "bug.wav"]) == 1
    err = capsys.readouterr().err
    assert "fault in qmeter" in err and "QMETER_DEBUG=1" in err and "Traceback" not in err
    monkeypatch.setenv("QMETER_DEBUG", "1")
    assert main(["replay", "bug.wav"]) == 1
    assert "Traceback" in capsys.readouterr().err


def test_unprintable_names(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """A name with an escape or with bytes that are no text is said without harm, and JSON carries it."""
    for name in ("a\x1b[2Jb.wav", os.fsdecode(b"\xff\xfe.wav")):
        assert main(["replay", name, "--json"]) == 4
        out, err = capsys.readouterr()
        assert "\x1b" not in err
        assert json.loads(out)["failures"][0]["file"] == name


# ---- pooling ----


def test_pool(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """--mounting implies --pool; the document names each file's mounting, in order."""
    options = ["--mounting", "hung=hung-*", "--mounting", "foam=foam-1.wav"]
    assert main(["replay", "hung-1.wav", "foam-1.wav", "hung-2.wav", *options, "--json"]) == 0
    result = json.loads(capsys.readouterr().out)
    Draft202012Validator(SCHEMA).validate(result)
    assert result["pooled"]["files"] == ["hung-1.wav", "foam-1.wav", "hung-2.wav"]
    assert result["pooled"]["mountings"] == ["hung", "foam", "hung"]
    assert result["pooled"]["modes"][0]["strikes"] == 3 * 4
    assert main(["replay", "hung-1.wav", "lost.wav", "--pool", "--json"]) == 4
    result = json.loads(capsys.readouterr().out)
    assert result["pooled"]["mountings"] == [None]
    assert main(["replay", "lost.wav", "--pool", "--json"]) == 4
    assert "pooled" not in json.loads(capsys.readouterr().out)


def test_a_file_given_twice_is_pooled_once(folder: Path, hand_made: list[Settings], capsys: pytest.CaptureFixture[str]) -> None:
    """The same bytes under any name are no second strike: u95 would be smaller than it is. It is said, and the file still measured."""
    (folder / "again.wav").write_bytes((folder / "hung-1.wav").read_bytes())
    for files in (["hung-1.wav", "hung-1.wav", "foam-1.wav"], ["hung-1.wav", "again.wav", "foam-1.wav"]):
        assert main(["replay", *files, "--pool", "--json"]) == 0
        out, err = capsys.readouterr()
        result = json.loads(out)
        assert result["pooled"]["files"] == ["hung-1.wav", "foam-1.wav"]
        assert len(result["recordings"]) == 3
        assert f"{files[1]} holds the same bytes as hung-1.wav" in err


def test_mountings_by_name_by_path_and_by_pattern() -> None:
    """A file is known by what was typed or by its name alone."""
    files = ["day 1/a.wav", "day 2/a.wav", "b.wav"]
    assert assign(files, []) == (None, None, None)
    assert assign(files, ["hung=day 1/*,b.wav", "foam=day 2/a.wav"]) == ("hung", "foam", "hung")
    assert assign(files, ["one=a.wav", "two = b.*"]) == ("one", "one", "two")
    assert assign(files, ["one=a.wav", "one=b.wav"]) == ("one", "one", "one")


@pytest.mark.parametrize(
    ("given", "says"),
    [
        (["hung"], "equals sign"),
        (["=a.wav"], "equals sign"),
        (["hung="], "equals sign"),
        (["hung=c.wav"], "no file given is called c.wav"),
        (["hung=a.wav"], "b.wav belongs to no mounting"),
        (["hung=*", "foam=b.wav"], "b.wav cannot belong to two mountings, hung and foam"),
    ],
)
def test_mountings_that_cannot_be_meant(given: list[str], says: str) -> None:
    """A sentence that names the file and the way out."""
    with pytest.raises(UsageError, match=says):
        assign(["a.wav", "b.wav"], given)


# ---- as a process ----


@pytest.fixture
def runner(folder: Path) -> list[str]:
    """The command that runs the program with a hand-made measurement, in worker processes too."""
    script = folder / "runner.py"
    script.write_text(RUNNER, encoding="utf-8")
    return [sys.executable, str(script), "replay"]


def test_standard_input(folder: Path, runner: list[str]) -> None:
    """`-` is a file like another, in a batch of several processes too."""
    data = (folder / "plate.wav").read_bytes()
    done = subprocess.run([*runner, "bar.wav", "-", "plate.wav", "--jobs", "2", "--json"], input=data, capture_output=True, timeout=100)
    assert done.returncode == 0, done.stderr
    assert [recording["file"] for recording in json.loads(done.stdout)["recordings"]] == ["bar.wav", "-", "plate.wav"]


def test_a_reader_that_has_seen_enough(folder: Path, runner: list[str]) -> None:
    """`| head` ends it without a word."""
    with subprocess.Popen([*runner, *(200 * ["plate.wav"])], stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None and process.stderr is not None
        process.stdout.readline()
        process.stdout.close()
        assert process.stderr.read() == b""
        assert process.wait(timeout=60) in (0, 1)


@pytest.mark.skipif(sys.platform == "win32", reason="signals of a POSIX terminal")
@pytest.mark.parametrize("jobs", ["1", "2"])
def test_interrupted(folder: Path, runner: list[str], jobs: str) -> None:
    """Ctrl-C ends it within seconds, with status 130, no traceback, and no process left behind."""
    files = [str(write_wav(folder / f"slow-{n}.wav")) for n in range(4)]
    process = subprocess.Popen([*runner, *files, "--jobs", jobs], stdout=subprocess.PIPE, stderr=subprocess.PIPE, start_new_session=True)
    assert process.stderr is not None
    assert process.stderr.readline().startswith(b"measuring")
    time.sleep(0.3)
    os.killpg(process.pid, signal.SIGINT)  # the terminal sends it to every process of the group
    _, err = process.communicate(timeout=20)  # returns only when no process holds the pipes
    assert process.returncode == 130
    assert b"Traceback" not in err


@pytest.mark.skipif(sys.platform == "win32", reason="needs a pseudo-terminal")
def test_progress_is_shown_on_a_terminal_only(folder: Path, runner: list[str]) -> None:
    """A bar on stderr when that is a terminal, and still nothing but data on stdout."""
    import pty

    ours, theirs = pty.openpty()
    environment = {**os.environ, "TERM": "xterm-256color", "COLUMNS": "80"}
    with subprocess.Popen([*runner, "plate.wav", "bar.wav", "--json"], stdout=subprocess.PIPE, stderr=theirs, env=environment) as process:
        os.close(theirs)
        assert process.stdout is not None
        result = json.loads(process.stdout.read())
        seen = b""
        while chunk := _read(ours):
            seen += chunk
    os.close(ours)
    assert [recording["file"] for recording in result["recordings"]] == ["plate.wav", "bar.wav"]
    assert b"measuring" in seen and b"2/2" in seen
    assert process.returncode == 0


def _read(terminal: int) -> bytes:
    """What there is to read; nothing when the other end is closed."""
    try:
        return os.read(terminal, 4096)
    except OSError:
        return b""


def test_a_lost_process_is_said(folder: Path, runner: list[str]) -> None:
    """A worker that is killed costs its file, not the program's composure."""
    write_wav(folder / "die.wav")
    done = subprocess.run([*runner, "die.wav", "plate.wav", "--jobs", "2"], capture_output=True, text=True, timeout=100)
    assert done.returncode == 1
    assert "die.wav was lost" in done.stderr and "--jobs 1" in done.stderr
    assert "Traceback" not in done.stderr


def test_help_loads_nothing_heavy() -> None:
    """Not even NumPy: `--help` and a wrong option answer at once."""
    code = (
        "import sys; from qmeter.cli.app import main; main(['replay', '--help']);"
        "heavy = {'numpy', 'scipy', 'soundfile', 'sounddevice', 'matplotlib', 'av'} & set(sys.modules); print(heavy, file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, timeout=60, cwd=ROOT)
    assert done.stderr.strip() == "set()"


def test_help_is_quick() -> None:
    """At most 2.5 times what importing typer and rich costs: the best of seven runs each, taken in turn."""

    def seconds(code: str) -> float:
        start = time.perf_counter()
        subprocess.run([sys.executable, "-c", code], check=True, capture_output=True, timeout=60, cwd=ROOT)
        return time.perf_counter() - start

    program = "from qmeter.cli.app import main; main(['--help'])"
    pairs = [(seconds("import typer, rich"), seconds(program)) for _ in range(7)]
    assert min(pair[1] for pair in pairs) <= 2.5 * min(pair[0] for pair in pairs)
