"""The command `lattice-census`: one word a command, results on stdout, log and progress on stderr.

Commands import what they need when they run, so that `--help` and commands that only read start fast.
"""

from __future__ import annotations

import logging
import os
import sys
from typing import Annotated

import typer

from lattice_census import __version__

from . import asking, comparing, curating, proving, reading, reporting, scheduling, writing
from .failures import STOPPED, told

app = typer.Typer(
    name="lattice-census",
    help="Survey the lattices in a collection of crystal structures and find the records that are the same crystal.",
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["--help", "-h"]},
)


def _version(asked: bool) -> None:
    if asked:
        typer.echo(f"lattice-census {__version__}")
        raise typer.Exit


@app.callback()
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version and leave.")
    ] = False,
) -> None:
    """Survey the lattices in a collection of crystal structures and find the records that are the same crystal."""


writing.register(app)
scheduling.register(app)
curating.register(app)
comparing.register(app)
reading.register(app)
asking.register(app)
proving.register(app)
reporting.register(app)


def main() -> None:
    """Entry point: runs a command and turns every error into its message and exit code."""
    logging.basicConfig(stream=sys.stderr, level=logging.INFO, format="%(message)s")
    for noisy in ("prefect", "httpx", "numba", "asyncio"):
        logging.getLogger(noisy).setLevel(logging.ERROR)
    sys.exit(_run())


_INTERRUPTED = 130
"""What typer makes of Ctrl-C; no command returns it."""


def _run() -> int:
    try:
        result = app(prog_name="lattice-census", standalone_mode=False)
        sys.stdout.flush()
    except typer.Exit as error:
        return error.exit_code
    except (KeyboardInterrupt, typer.Abort):
        return _stopped()
    except BrokenPipeError:
        return _nobody_reads()
    except SystemExit as error:
        # typer ends the process where a pipe is closed, and otherwise only after a shell completion.
        if type(sys.stdout).__name__ == "PacifyFlushWrapper":
            return _nobody_reads()
        return error.code if isinstance(error.code, int) else 0
    except Exception as error:
        message, code = told(error)
        print(message, file=sys.stderr)
        return code
    if result == _INTERRUPTED:
        return _stopped()
    return result if isinstance(result, int) else 0


def _stopped() -> int:
    print(f"\n{STOPPED}", file=sys.stderr)
    return 4


def _nobody_reads() -> int:
    """The reader of stdout has gone, as `head` does: no error, and nothing more to say there."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    return 0
