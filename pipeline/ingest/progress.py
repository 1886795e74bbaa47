"""How long work tells where it is, without knowing who listens."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol, TypeVar

R = TypeVar("R")


class Progress(Protocol):
    """Told by the stages; drawn by the commands."""

    def start(self, stage: str, total: int | None) -> None:
        """A stage begins; total in records where it is known."""
        ...

    def advance(self, records: int) -> None:
        """So many more records are done."""
        ...

    def note(self, message: str) -> None:
        """A sentence for the person who waits."""
        ...


class Silent:
    """Tells nobody."""

    def start(self, stage: str, total: int | None) -> None:
        """Nothing."""

    def advance(self, records: int) -> None:
        """Nothing."""

    def note(self, message: str) -> None:
        """Nothing."""


class Step(Protocol):
    """Runs one named coarse step of a run: directly, or as a task of an orchestrator."""

    def __call__(self, name: str, work: Callable[..., R], *arguments: Any) -> R:
        """work(*arguments)"""
        ...


def call_directly(name: str, work: Callable[..., R], *arguments: Any) -> R:
    """The step without an orchestrator."""
    return work(*arguments)
