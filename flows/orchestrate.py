"""Prefect around the steps: one flow a command, one coarse task a step, nothing that Prefect would have to store.

Prefect's own record is a convenience: what is done is what the store says is done.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from contextvars import ContextVar
from pathlib import Path
from typing import Any, TypeVar

R = TypeVar("R")

# A temporary server needs longer than the default on a loaded machine, and nobody asked for analytics or log lines.
for _name, _value in {
    "PREFECT_SERVER_ANALYTICS_ENABLED": "false",
    "PREFECT_SERVER_EPHEMERAL_STARTUP_TIMEOUT_SECONDS": "60",
    "PREFECT_LOGGING_LEVEL": "CRITICAL",
    "PREFECT_SERVER_LOGGING_LEVEL": "ERROR",
}.items():
    os.environ.setdefault(_name, _value)


def decorated(decorator: Callable[..., Any], work: Callable[[], R]) -> R:
    """Call the work under a decorator of Prefect, whose overloads lose the type of what comes back."""
    result: R = decorator(work)()
    return result


def task_step(name: str, work: Callable[..., R], *arguments: Any) -> R:
    """The step as a Prefect task. The arguments stay in a closure: an open store is not for Prefect to copy."""
    from prefect import task
    from prefect.cache_policies import NO_CACHE

    return decorated(task(name=name, cache_policy=NO_CACHE, persist_result=False), lambda: work(*arguments))


def run_as_flow(name: str, body: Callable[[], R]) -> R:
    """body() inside a Prefect flow of this name; its steps are the flow's tasks."""
    from prefect import flow

    token = _BODY.set(body)
    try:
        result: R = decorated(flow(name=name, persist_result=False, validate_parameters=False), run_body)
        return result
    finally:
        _BODY.reset(token)


_BODY: ContextVar[Callable[[], Any]] = ContextVar("body of the flow")


def run_body() -> Any:
    """What a flow does, in this process. Tasks elsewhere are told of their flow by this name: the body stays here, with
    all that is open in it."""
    return _BODY.get()()


def shown(name: str, store: Path, counts: dict[str, Any]) -> dict[str, Any]:
    """The counts, after Prefect was shown them."""
    from .artifacts import show_counts

    show_counts(name, store, counts)
    return counts
