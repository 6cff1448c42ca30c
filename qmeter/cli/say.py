"""Words to people, on stderr: the one place where errors are printed."""

from __future__ import annotations

import os
import sys
import traceback

DEBUG = "QMETER_DEBUG"
"""environment variable: set, a bug shows its traceback"""


def say(sentence: str) -> None:
    """One line on stderr; characters that the terminal does not have are replaced, control characters never pass."""
    clean = "".join(char if char.isprintable() else "\ufffd" for char in f"qmeter: {sentence}")
    encoding = getattr(sys.stderr, "encoding", None) or "utf-8"
    print(clean.encode(encoding, "replace").decode(encoding), file=sys.stderr, flush=True)


def bug(error: BaseException) -> str:
    """What to say of an error that should not have happened."""
    kind = type(error).__name__
    return f"This is a fault in qmeter, not in what you gave it ({kind}: {error}). Set {DEBUG}=1 to see where, and please report it."


def say_where(error: BaseException) -> None:
    """The traceback, where it was asked for."""
    if os.environ.get(DEBUG):
        traceback.print_exception(error, file=sys.stderr)
