"""qmeter measures how struck objects ring: each mode's frequency, Q, T60 and cycles to e^-pi, each with an uncertainty.

    import qmeter

    recording = qmeter.Recording.load("plate.wav")     # or qmeter.Recording(samples, rate)
    for mode in qmeter.measure(recording).modes:
        print(qmeter.format_figure(mode.frequency_hz, "Hz"), qmeter.format_figure(mode.q))

The names load what they need when first used, so `import qmeter` alone is quick and needs no audio library.
"""

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from qmeter.errors import QmeterError as QmeterError
    from qmeter.estimate.measure import measure as measure
    from qmeter.estimate.modes import Doubt as Doubt
    from qmeter.estimate.modes import Measurement as Measurement
    from qmeter.estimate.modes import Mode as Mode
    from qmeter.estimate.modes import Settings as Settings
    from qmeter.estimate.modes import Strike as Strike
    from qmeter.sound.files import Recording as Recording
    from qmeter.uncertainty import Figure as Figure
    from qmeter.uncertainty import format_figure as format_figure

__version__ = "0.1.0"

_HOME = {
    "Doubt": "qmeter.estimate.modes",
    "Figure": "qmeter.uncertainty",
    "Measurement": "qmeter.estimate.modes",
    "Mode": "qmeter.estimate.modes",
    "QmeterError": "qmeter.errors",
    "Recording": "qmeter.sound.files",
    "Settings": "qmeter.estimate.modes",
    "Strike": "qmeter.estimate.modes",
    "format_figure": "qmeter.uncertainty",
    "measure": "qmeter.estimate.measure",
}

__all__ = [
    "Doubt",
    "Figure",
    "Measurement",
    "Mode",
    "QmeterError",
    "Recording",
    "Settings",
    "Strike",
    "__version__",
    "format_figure",
    "measure",
]


def __getattr__(name: str) -> object:
    """Load a public name from its module on first use (PEP 562)."""
    if name not in _HOME:
        raise AttributeError(f"module 'qmeter' has no attribute '{name}'")
    return getattr(import_module(_HOME[name]), name)


def __dir__() -> list[str]:
    return sorted(__all__)
