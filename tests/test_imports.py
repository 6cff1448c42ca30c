"""What is loaded when: the package and its help must come quickly, and without an audio library."""

from __future__ import annotations

import subprocess
import sys

import pytest

import qmeter

HEAVY = ("scipy.signal", "scipy.stats", "scipy.optimize", "matplotlib", "sounddevice", "soundfile", "av")
REPORT = "print('LOADED', *[name for name in {heavy!r} if name in sys.modules])"


def run(code: str, *arguments: str) -> str:
    """What a fresh interpreter prints on stdout, run to the end without an error."""
    done = subprocess.run(
        [sys.executable, "-c", "import sys\n" + code, *arguments], capture_output=True, text=True, timeout=60, check=False
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


def loaded_line(stdout: str) -> str:
    """The line that says which heavy modules were loaded."""
    return next(line for line in stdout.splitlines() if line.startswith("LOADED"))


def test_import_loads_nothing_heavy() -> None:
    """`import qmeter` loads no scipy.signal, matplotlib, sounddevice or the like, nor numpy."""
    assert loaded_line(run("import qmeter\n" + REPORT.format(heavy=(*HEAVY, "numpy")))) == "LOADED"


def test_help_loads_nothing_heavy() -> None:
    """`qmeter --help` prints the commands and loads none of the heavy modules."""
    stdout = run(
        "sys.argv = ['qmeter', '--help']\n"
        "from qmeter.cli.app import main\n"
        "try:\n"
        "    main()\n"
        "except SystemExit as end:\n"
        "    assert not end.code\n" + REPORT.format(heavy=HEAVY)
    )
    assert "replay" in stdout
    assert loaded_line(stdout) == "LOADED"


def test_the_report_can_fail() -> None:
    """The check above sees a module that was loaded."""
    assert loaded_line(run("import scipy.signal\n" + REPORT.format(heavy=HEAVY))).split()[:2] == ["LOADED", "scipy.signal"]


def test_import_needs_no_portaudio() -> None:
    """Where `import sounddevice` fails (no PortAudio on the machine), the package and every public name still load."""
    run(
        "class NoPortAudio:\n"
        "    def find_spec(self, name, path=None, target=None):\n"
        "        if name == 'sounddevice':\n"
        "            raise OSError('PortAudio library not found')\n"
        "sys.meta_path.insert(0, NoPortAudio())\n"
        "import qmeter\n"
        "for name in qmeter.__all__:\n"
        "    getattr(qmeter, name)\n"
    )


def test_public_names() -> None:
    """Every name in __all__ can be had and is what its home defines; others raise AttributeError."""
    from qmeter.estimate.modes import Mode

    for name in qmeter.__all__:
        assert getattr(qmeter, name) is not None
    assert qmeter.Mode is Mode
    assert sorted(qmeter.__all__) == dir(qmeter)
    with pytest.raises(AttributeError, match="module 'qmeter' has no attribute 'masure'"):
        _ = qmeter.masure
