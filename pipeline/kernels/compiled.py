"""The one way in which kernels are compiled: without the interpreter lock, in strict floating point.

`kernel` is for functions that Python calls, `inner` for those that only other kernels call. Two things keep the time of
compilation in bounds: inner functions get no entry from Python and no cache file of their own, and a constant
argument does not make numba build the function anew (it would, for each value).
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any, ParamSpec, TypeVar, cast

# numba makes an error for every overload that does not fit, and throws it away; colouring them takes 1/25 of the time.
os.environ.setdefault("NUMBA_DISABLE_ERROR_MESSAGE_HIGHLIGHTING", "1")

import numba
from numba.core.types import unliteral

from .cache import folder

P = ParamSpec("P")
T = TypeVar("T")

# No fastmath and no threads: results feed keys. Division by zero follows NumPy; kernels exclude it themselves.
_STRICT: dict[str, Any] = {"nogil": True, "fastmath": False, "error_model": "numpy"}
_INNER: dict[str, Any] = {**_STRICT, "no_cpython_wrapper": True, "no_cfunc_wrapper": True}
_config: Any = numba.config
_widen: Callable[[Any], Any] = unliteral


def _without_constants(dispatcher: Any) -> Any:
    """Let calls from other kernels see constant arguments as plain numbers.

    numba asks the dispatcher for the version that fits a call; the types of the arguments are widened before it does.
    """
    choose = dispatcher.get_call_template

    def choose_widened(args: tuple[Any, ...], kws: dict[str, Any]) -> Any:
        return choose(tuple(_widen(a) for a in args), {k: _widen(v) for k, v in kws.items()})

    dispatcher.get_call_template = choose_widened
    return dispatcher


def kernel(function: Callable[P, T]) -> Callable[P, T]:
    """Compile a function for Python on its first call, and keep the code between runs.

    The plain function stays reachable as `.py_func`.
    """
    # numba asks for the folder of the cache when it decorates.
    before = _config.CACHE_DIR
    _config.CACHE_DIR = str(folder(Path(function.__code__.co_filename)))
    try:
        return cast(Callable[P, T], _without_constants(numba.njit(cache=True, **_STRICT)(function)))
    finally:
        _config.CACHE_DIR = before


def inner(function: Callable[P, T]) -> Callable[P, T]:
    """Compile a function into each kernel that calls it. From Python (in tests), call `.py_func`."""
    return cast(Callable[P, T], _without_constants(numba.njit(**_INNER)(function)))
