"""The command line. Only this package and `terminal` print and choose exit codes; nobody imports it.

Exit status: 0 done, 1 an internal fault, 2 bad input (one line on standard error), 3 nothing in the brief's range
meets it. Heavy libraries load inside the commands, so that `--help` is quick.
"""

from __future__ import annotations

import importlib
import os
import signal
import sys
from collections.abc import Sequence
from typing import Annotated

import typer

from homog import __version__
from homog.cli.options import app
from homog.errors import HomogError
from homog.terminal import Stopped

for _commands in ("library", "cells", "screens", "design"):  # they register themselves, in the order of the help
    importlib.import_module(f"homog.cli.{_commands}")

STOPPED = "homog: stopped; nothing was written"


@app.callback(invoke_without_command=True)
def _root(
    version: Annotated[bool, typer.Option("--version", help="Print the version and stop.")] = False,
) -> None:
    if version:
        print(f"homog-cells {__version__}")
        raise typer.Exit(0)


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line on `argv` (the process's own arguments if None) and return the exit status."""
    try:
        status = app(args=list(sys.argv[1:] if argv is None else argv), prog_name="homog", standalone_mode=False)
        if status == 130:  # what the parser makes of an interrupt, or else an Abort
            print(STOPPED, file=sys.stderr)
        return int(status or 0)
    except Stopped as stop:
        print(f"homog: {stop}", file=sys.stderr)
        return stop.status
    except HomogError as error:
        print(f"homog: {' '.join(str(error).split())}", file=sys.stderr)
        return 2
    except SystemExit as stop:  # the parser's answer to a reader that stopped reading, which is no fault
        if not isinstance(stop.__context__, BrokenPipeError):
            raise
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        if hasattr(error, "format_message"):  # the option parser's own complaints
            message = " ".join(str(error.format_message()).split())
            if not message:
                return 0
            command = getattr(getattr(error, "ctx", None), "command_path", "homog")
            print(f"homog: {message.rstrip('.')}; try '{command} --help'", file=sys.stderr)
            return 2
        if type(error).__name__ == "Abort":
            print(STOPPED, file=sys.stderr)
            return 130
        import traceback

        traceback.print_exc()
        fault = f"{type(error).__name__}: {error}"
        print(f"homog: internal fault: {fault}; please report it with the command", file=sys.stderr)
        return 1


def entry() -> None:
    """Run as the installed command; being told to stop leaves nothing half-written."""
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
    sys.exit(main())
