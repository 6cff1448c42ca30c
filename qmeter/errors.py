"""What can go wrong, in sentences: every error says what was found, with the figures, and the way out.

Nothing below the command line prints an error; `qmeter.cli` does, and takes the exit status from the class.
"""

from __future__ import annotations


class QmeterError(Exception):
    """Base of every error that is the user's to mend; `code` is the word used in JSON, `exit_status` the process's."""

    code = "error"
    exit_status = 1

    def __init__(self, says: str, *, code: str | None = None) -> None:
        super().__init__(says)
        self.says = says
        if code is not None:
            self.code = code


class UsageError(QmeterError):
    """An option or an argument that cannot be meant."""

    code = "usage"
    exit_status = 2


class OutOfRangeError(UsageError, ValueError):
    """A physical quantity outside the range in which the formula holds."""

    code = "out-of-range"


class NothingRangError(QmeterError):
    """The recording was read, and nothing trustworthy rang in it."""

    code = "nothing-rang"
    exit_status = 3


class RecordingError(QmeterError):
    """A file that cannot be read, or samples that cannot be measured (NaN, Inf, none at all)."""

    code = "unreadable"
    exit_status = 4
