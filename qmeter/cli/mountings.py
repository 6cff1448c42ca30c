"""`--mounting NAME=FILES`: which recordings belong to one way of holding the object."""

from __future__ import annotations

from collections.abc import Sequence
from fnmatch import fnmatchcase
from pathlib import PurePath

from qmeter.errors import UsageError


def assign(files: Sequence[str], given: Sequence[str]) -> tuple[str | None, ...]:
    """Each file's mounting, in the order of `files`; all None when none was given.

    `given`: NAME=PATTERN[,PATTERN...]; a pattern is a file as written on the command line, its name alone, or either with * and ?.
    UsageError where a file is claimed by none or by two, or where a pattern claims nothing.

    >>> assign(["hung-1.wav", "foam-1.wav"], ["hung=hung-*", "on foam=foam-1.wav"])
    ('hung', 'on foam')
    """
    if not given:
        return (None,) * len(files)
    owner: dict[str, str] = {}
    for statement in given:
        name, patterns = _parse(statement)
        for pattern in patterns:
            claimed = [file for file in files if _matches(file, pattern)]
            if not claimed:
                raise UsageError(f"--mounting {statement}: no file given is called {pattern}.")
            for file in claimed:
                if owner.setdefault(file, name) != name:
                    raise UsageError(f"{file} cannot belong to two mountings, {owner[file]} and {name}. Make the patterns narrower.")
    left = [file for file in files if file not in owner]
    if left:
        raise UsageError(f"{left[0]} belongs to no mounting. Once one is named, name one for every file: --mounting NAME={left[0]}")
    return tuple(owner[file] for file in files)


def _parse(statement: str) -> tuple[str, list[str]]:
    name, equals, rest = statement.partition("=")
    patterns = [pattern.strip() for pattern in rest.split(",") if pattern.strip()]
    if not equals or not name.strip() or not patterns:
        raise UsageError(f"--mounting {statement}: write a name, an equals sign and files, such as --mounting 'hung=hung-*.wav'")
    return name.strip(), patterns


def _matches(file: str, pattern: str) -> bool:
    return pattern in (file, PurePath(file).name) or fnmatchcase(file, pattern) or fnmatchcase(PurePath(file).name, pattern)
