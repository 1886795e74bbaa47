"""What a person is told of an error, and the exit code it has: what happened, where, and what to do."""

from __future__ import annotations

import errno
import logging
import os
import sys
from pathlib import Path

import typer

from lattice_census.errors import CensusError

AGAIN = "Nothing is half-written; the same command goes on where it was."
STOPPED = f"lattice-census: stopped. {AGAIN}"

# The class of every error in the words of a command. It is click's, of which typer carries a copy of its own.
_WRONG_WORDS: type[Exception] = typer.BadParameter.__bases__[0]

_FULL = (errno.ENOSPC, errno.EDQUOT, errno.EFBIG)
_DENIED = (errno.EACCES, errno.EPERM, errno.EROFS)
_FULL_WORDS = ("no space left on device", "file too large", "disk quota exceeded", os.strerror(errno.ENOSPC).lower())


def told(error: Exception) -> tuple[str, int]:
    """(message, exit code). With LATTICE_CENSUS_DEBUG set, an error that nobody foresaw is raised again."""
    if isinstance(error, CensusError):
        return f"lattice-census: {error}", error.exit_code
    if isinstance(error, _WRONG_WORDS):
        return _wrong_words(error), 2
    if isinstance(error, _duckdb_errors("IOException", "SerializationException", "FatalException")):
        line = str(error).splitlines()[0].rstrip(".!")
        if not any(words in line.lower() for words in _FULL_WORDS):
            what = "If it is damaged, put a sound copy in its place. Nothing was changed."
            return f"lattice-census: The store cannot be read or written: {line}. {what}", 3
    text = _foreseen(error)
    if text is not None:
        return f"lattice-census: {text} {AGAIN}", 4
    logging.getLogger("lattice_census").debug("", exc_info=error)
    if os.environ.get("LATTICE_CENSUS_DEBUG"):
        raise error
    return (
        f"lattice-census: failed with {type(error).__name__}: {error}\n{AGAIN} "
        "With LATTICE_CENSUS_DEBUG=1 in the environment the whole traceback is shown.",
        4,
    )


def _wrong_words(error: Exception) -> str:
    message = str(error.format_message())  # type: ignore[attr-defined]
    if type(error).__name__ == "NoArgsIsHelpError":
        return message
    context = getattr(error, "ctx", None)
    command = context.command_path if context is not None else "lattice-census"
    return f"lattice-census: {message.rstrip('.')}. `{command} --help` says what it takes."


def _foreseen(error: Exception) -> str | None:
    """A sentence about a full disk, a missing right, or short memory, wherever it was met; None for anything else."""
    if isinstance(error, MemoryError):
        return "Memory ran out. Give it fewer --workers, or a smaller chunk with --set chunk_records=500."
    if isinstance(error, OSError):
        where = f" ({error.filename})" if error.filename else ""
        if error.errno in _FULL:
            return f"No room is left where it was written{where}: {error.strerror}. Make room."
        if error.errno in _DENIED and error.filename:
            return f"{_short(error.filename)} cannot be opened: {error.strerror}."
        return None
    text = str(error)
    if isinstance(error, _duckdb_errors("Error")):
        if any(words in text.lower() for words in _FULL_WORDS):
            return f"No room is left where the store is written ({text.splitlines()[0]}). Make room."
        if isinstance(error, _duckdb_errors("OutOfMemoryException")):
            return f"Memory ran out in the store ({text.splitlines()[0]})."
    return None


def _duckdb_errors(*names: str) -> tuple[type[Exception], ...]:
    """Classes of errors of DuckDB; none where nothing has imported it, so that nothing can have raised one."""
    module = sys.modules.get("duckdb")
    return () if module is None else tuple(getattr(module, name) for name in names)


def _short(path: str | bytes | int) -> str:
    return str(Path(os.fsdecode(path))) if isinstance(path, str | bytes) else str(path)
