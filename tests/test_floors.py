"""The house: imports go down. Every import is walked, deferred ones and those for types too."""

from __future__ import annotations

import ast
import graphlib
from collections.abc import Iterator
from pathlib import Path

import pytest

PACKAGE = Path(__file__).resolve().parent.parent / "qmeter"

FLOORS = {
    "relations": 0,
    "uncertainty": 0,
    "errors": 0,
    "recording": 0,
    "dsp": 1,
    "estimate": 2,
    "properties": 3,
    "sound": 4,
    "logbook": 5,
    "live": 6,
    "show": 7,
    "cli": 8,
    "__main__": 9,
    "": 9,  # qmeter/__init__.py: the public names, each loaded from its own floor on first use
}
"""Floor of each part of the package. A module imports from lower floors, or from its own as long as no circle comes of it."""

ONLY_IMPORTER = {"sounddevice": "qmeter.sound.portaudio", "av": "qmeter.sound.aac"}
"""Packages that one module alone may import: the one cannot be imported without PortAudio, the other is an optional extra."""


def modules() -> dict[str, Path]:
    """Every module of the package by its dotted name; a package stands for its __init__.py."""
    found = {}
    for path in sorted(PACKAGE.rglob("*.py")):
        parts = path.relative_to(PACKAGE.parent).with_suffix("").parts
        found[".".join(parts[:-1] if parts[-1] == "__init__" else parts)] = path
    return found


def floor(module: str) -> int:
    """Floor on which a module stands; a KeyError is a module that nobody gave a place."""
    return FLOORS[module.partition("qmeter.")[2].partition(".")[0]]


def imports(module: str, source: str, known: set[str]) -> Iterator[str]:
    """Modules of the package that `source` imports, by statement or by their dotted name as text (importlib, lazy tables).

    Names of other packages come too, as their top-level name.
    """
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (_home(alias.name, known) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0, f"{module}, line {node.lineno}: relative imports hide the floor"
            for alias in node.names:
                submodule = f"{node.module}.{alias.name}"
                # `from qmeter import __version__` runs nothing: the package holds nothing else itself
                if submodule == "qmeter.__version__":
                    continue
                yield submodule if submodule in known else _home(str(node.module), known)
        elif isinstance(node, ast.Constant) and isinstance(node.value, str) and node.value in known - {"qmeter"}:
            yield node.value


def _home(name: str, known: set[str]) -> str:
    return name if name in known else name.partition(".")[0]


def faults(sources: dict[str, str]) -> list[str]:
    """What breaks the rules in these modules, one line each."""
    known = set(sources)
    wrong = []
    graph: dict[str, set[str]] = {}
    for module, source in sources.items():
        used = {name for name in imports(module, source, known) if name != module}
        graph[module] = {name for name in used if name in known}
        wrong += [
            f"{module} (floor {floor(module)}) imports {name} (floor {floor(name)})"
            for name in sorted(graph[module])
            if floor(name) > floor(module)
        ]
        wrong += [
            f"{module} imports {name}; only {ONLY_IMPORTER[name]} may"
            for name in sorted(used & set(ONLY_IMPORTER))
            if ONLY_IMPORTER[name] != module
        ]
    try:
        graphlib.TopologicalSorter(graph).prepare()
    except graphlib.CycleError as error:
        wrong.append("a circle: " + " <- ".join(error.args[1]))
    return wrong


def test_imports_go_down() -> None:
    """No module imports from a floor above its own, none goes round in a circle, every module has a floor."""
    assert faults({name: path.read_text(encoding="utf-8") for name, path in modules().items()}) == []


def test_the_walk_sees_the_package() -> None:
    """The test above looks at real modules with real imports: an empty walk would pass it."""
    sources = {name: path.read_text(encoding="utf-8") for name, path in modules().items()}
    assert {"qmeter", "qmeter.relations", "qmeter.estimate.modes", "qmeter.cli"} <= set(sources)
    seen = set(imports("qmeter.estimate.modes", sources["qmeter.estimate.modes"], set(sources)))
    assert {"qmeter.relations", "qmeter.uncertainty", "math"} <= seen


@pytest.mark.parametrize(
    ("source", "fault"),
    [
        ("from qmeter.cli import app", "imports qmeter.cli.app"),
        ("from qmeter.cli.app import main", "imports qmeter.cli.app"),
        ("import qmeter.cli.app", "imports qmeter.cli.app"),
        ("def f():\n    from qmeter.cli import app", "imports qmeter.cli.app"),
        ("import importlib\ndef f():\n    return importlib.import_module('qmeter.cli.app')", "imports qmeter.cli.app"),
        ("if TYPE_CHECKING:\n    from qmeter.cli.app import main", "imports qmeter.cli.app"),
        ("from qmeter import measure", "imports qmeter \\(floor 9\\)"),
        ("from qmeter.estimate import poles", "a circle"),
        ("import sounddevice", "only qmeter.sound.portaudio may"),
        ("def f():\n    import av.audio", "only qmeter.sound.aac may"),
    ],
)
def test_each_fault_is_found(source: str, fault: str) -> None:
    """In an invented house, each way of importing upwards or in a circle is caught."""
    house = {
        "qmeter": "__version__ = '1'",
        "qmeter.cli.app": "def main(): pass",
        "qmeter.estimate.modes": source,
        "qmeter.estimate.poles": "from qmeter.estimate.modes import Mode",
    }
    with pytest.raises(AssertionError, match=fault):
        assert not faults(house), "\n".join(faults(house))


def test_a_module_without_a_floor_is_found() -> None:
    """A new folder has to be given a floor before it passes."""
    with pytest.raises(KeyError, match="attic"):
        faults({"qmeter.attic.chest": "import qmeter.errors", "qmeter.errors": ""})


def test_relative_imports_are_found() -> None:
    """A relative import is refused, whatever it points to."""
    with pytest.raises(AssertionError, match="line 1: relative imports"):
        faults({"qmeter.errors": "from . import relations"})
