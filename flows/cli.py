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
from lattice_census.errors import CensusError

from . import asking, comparing, curating, proving, reading, reporting, scheduling, writing

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


# The class of every error in the words of a command. It is click's, of which typer carries a copy of its own.
_WRONG_WORDS: type[Exception] = typer.BadParameter.__bases__[0]

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


def _run() -> int:
    try:
        result = app(standalone_mode=False)
    except typer.Exit as error:
        return error.exit_code
    except (KeyboardInterrupt, typer.Abort):
        print("Stopped. Nothing is half-written; the same command goes on where it was.", file=sys.stderr)
        return 4
    except CensusError as error:
        print(f"lattice-census: {error}", file=sys.stderr)
        return error.exit_code
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except Exception as error:
        if isinstance(error, _WRONG_WORDS):
            error.show()  # type: ignore[attr-defined]
            return 2
        logging.getLogger("lattice_census").debug("", exc_info=True)
        if os.environ.get("LATTICE_CENSUS_DEBUG"):
            raise
        print(
            f"lattice-census: failed with {type(error).__name__}: {error}\n"
            "Nothing is half-written; the same command goes on where it was. "
            "With LATTICE_CENSUS_DEBUG=1 in the environment the whole traceback is shown.",
            file=sys.stderr,
        )
        return 4
    return result if isinstance(result, int) else 0
