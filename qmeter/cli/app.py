"""The command `qmeter`: its commands, its exit status, and what it says when something is wrong."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from typing import Annotated

import typer

from qmeter import __version__
from qmeter.cli.replay import ReplayCommand, replay
from qmeter.cli.say import bug, say, say_where
from qmeter.errors import QmeterError

HELP = """Measure how struck objects ring.

\b
Examples:
  qmeter replay plate.wav          every mode: frequency, Q, T60, cycles
  qmeter replay --help             all that can be asked of a recording

Every figure carries its uncertainty at 95 %.
"""

INTERRUPTED = 130

app = typer.Typer(
    add_completion=False,
    rich_markup_mode=None,  # help is plain text, quick to start and the same everywhere
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


@app.callback(invoke_without_command=True, help=HELP)
def start(context: typer.Context, version: Annotated[bool, typer.Option("--version", help="print the version")] = False) -> None:
    """What there is without a command: help, or the version."""
    if version:
        print(f"qmeter {__version__}")
        raise typer.Exit
    if context.invoked_subcommand is None:
        print(context.get_help())


app.command("replay", cls=ReplayCommand, short_help="measure saved recordings")(replay)


def main(arguments: Sequence[str] | None = None) -> int:
    """Run a command line (None: that of the process) and return its exit status: the only place where one is decided on."""
    try:
        app(args=arguments, prog_name="qmeter")
    except SystemExit as end:
        return end.code if isinstance(end.code, int) else 0 if end.code is None else 1
    except QmeterError as error:
        say(error.says)
        return error.exit_status
    except KeyboardInterrupt:
        return INTERRUPTED
    except BrokenPipeError:
        # whoever read our output has seen enough; keep the interpreter from failing again when it flushes
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:  # noqa: BLE001  the last resort: a sentence, not a traceback
        say_where(error)
        say(bug(error))
        return 1
    return 0
