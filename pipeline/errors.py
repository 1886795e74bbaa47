"""Errors that a person is to read, each with the exit code of the command that meets it.

An error says what happened, where, and what to do. A refused record is not an error: it is a row (model/refusals.py).
"""

from __future__ import annotations


class CensusError(Exception):
    """Base of all errors that carry a message for the user and an exit code."""

    exit_code = 4


class UsageError(CensusError):
    """The command or a setting cannot be meant as it was given."""

    exit_code = 2


class StoreError(CensusError):
    """The store is in use, damaged, or written by a newer version."""

    exit_code = 3


class WorkError(CensusError):
    """The work failed; nothing is half-written and the message says how to go on."""

    exit_code = 4


class NumericsError(CensusError):
    """A result does not satisfy the predicate that defines it (a bug, or input outside the stated domain)."""
