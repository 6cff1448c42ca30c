"""The documents say what the code does, and the continuous integration does what the README says: no real recordings, no pass."""

from __future__ import annotations

import ast
import re
from pathlib import Path

import pytest

from tests import conftest

ROOT = Path(__file__).resolve().parent.parent
DOCUMENTS = sorted([*ROOT.glob("*.md"), *ROOT.glob("docs/**/*.md")])


def doubt_codes(source: str) -> set[str]:
    """Codes of the doubts that `source` makes: the first argument of Doubt(...) and SourceDoubt(...), where it is written out."""
    codes = set()
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in ("Doubt", "SourceDoubt"):
            first = [*node.args, *(word.value for word in node.keywords if word.arg == "code")][0]
            codes |= {part.value for part in ast.walk(first) if isinstance(part, ast.Constant) and isinstance(part.value, str)}
    return codes


def test_every_doubt_is_explained() -> None:
    """Each code that the package can give stands in docs/doubts.md, with what was seen and what to do."""
    listed = set(re.findall(r"^\| ([a-z-]+) \| [^|]+ \| [^|]+ \|$", (ROOT / "docs/doubts.md").read_text(encoding="utf-8"), re.MULTILINE))
    used = set().union(*(doubt_codes(path.read_text(encoding="utf-8")) for path in (ROOT / "qmeter").rglob("*.py")))
    assert {"lossy", "single-strike"} <= used
    assert used - listed == set()


def test_doubt_codes_are_seen() -> None:
    """The search finds codes by position, by name and in a conditional expression."""
    assert doubt_codes("Doubt('a-b', says); SourceDoubt(code='c', says=''); Doubt('d' if x else 'e', f'{y}')") == {"a-b", "c", "d", "e"}


@pytest.mark.parametrize("document", DOCUMENTS, ids=[str(path.relative_to(ROOT)) for path in DOCUMENTS])
def test_links_lead_somewhere(document: Path) -> None:
    """Each relative link of a document is a file of this repository."""
    links = re.findall(r"\]\(([^)#:]+)(?:#[^)]*)?\)", document.read_text(encoding="utf-8"))
    assert [link for link in links if not (document.parent / link).exists()] == []


def test_the_readme_names_a_recording_that_ships() -> None:
    """The README's first command measures a file that is there."""
    names = set(re.findall(r"recordings/[\w.-]+", (ROOT / "README.md").read_text(encoding="utf-8")))
    assert names
    assert [name for name in sorted(names) if not (ROOT / name).is_file()] == []


def test_continuous_integration_runs_the_command_of_the_readme() -> None:
    """`sh tests/run` stands alone on a line of the README, and .ci/run runs it and requires the real recordings."""
    assert "\n    sh tests/run\n" in (ROOT / "README.md").read_text(encoding="utf-8")
    script = (ROOT / ".ci/run").read_text(encoding="utf-8")
    assert re.search(r"^timeout -s KILL \d+ sh tests/run </dev/null$", script, re.MULTILINE)
    assert "export QMETER_REQUIRE_REAL=1" in script


@pytest.mark.parametrize("contents", [None, b"not the recording"])
def test_missing_recordings_are_a_skip_or_a_failure(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, contents: bytes | None) -> None:
    """Without the recording, or with another of its name, a test is skipped, and fails where QMETER_REQUIRE_REAL is set."""
    if contents is not None:
        (tmp_path / "tabla_na.flac").write_bytes(contents)
    monkeypatch.setattr(conftest, "REAL_FOLDERS", (tmp_path,))
    monkeypatch.delenv("QMETER_REQUIRE_REAL", raising=False)
    with pytest.raises(pytest.skip.Exception, match=r"tabla_na\.flac of the Debian package sonic-pi-samples is missing"):
        conftest.real_path("tabla_na.flac")
    assert "MISSING" in conftest.pytest_report_header()
    monkeypatch.setenv("QMETER_REQUIRE_REAL", "1")
    with pytest.raises(pytest.fail.Exception, match="QMETER_REQUIRE_REAL is set"):
        conftest.real_path("tabla_na.flac")
