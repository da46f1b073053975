"""Functions that are compiled to machine code, once, and kept.

A function is compiled when it is first called with some types of arguments, which takes up to
a second. `keep_in` names a folder in which the outcome outlives the process; it has to be
called before the first call.
"""

import hashlib
import inspect
import sys
from collections.abc import Callable
from typing import Any, Final, TypeVar, cast

import numba
from numba.core.dispatcher import Dispatcher

Function = TypeVar("Function", bound=Callable[..., Any])

_COMPILED: Final[list[Dispatcher]] = []
_KEPT: Final[set[Dispatcher]] = set()


def compiled(function: Function) -> Function:
    """Compile a function over arrays and numbers.

    It lets other threads run meanwhile, divides as numpy does (no exception), and keeps to the
    order of operations as written, so that its figures are the same everywhere.
    """
    dispatcher = numba.njit(nogil=True, error_model="numpy", fastmath=False)(function)
    _COMPILED.append(dispatcher)
    return cast("Function", dispatcher)


def keep_in(folder: str) -> None:
    """Keep what is compiled in a folder, and take from there what was compiled before.

    The folder has to be one for `source_digest`: a function that calls another is not compiled
    anew when that other one changes. A function that is kept somewhere already stays there.
    """
    setattr(numba.config, "CACHE_DIR", folder)  # noqa: B010 - made at import, unknown to types
    for dispatcher in _COMPILED:
        if dispatcher not in _KEPT:
            dispatcher.enable_caching()
            _KEPT.add(dispatcher)


def source_digest() -> str:
    """Return a hash of the text of all modules with compiled functions."""
    names = sorted({dispatcher.py_func.__module__ for dispatcher in _COMPILED})
    text = "".join(inspect.getsource(sys.modules[name]) for name in names)
    return hashlib.sha256(text.encode()).hexdigest()[:16]


def compiled_versions() -> int:
    """Return how many versions of functions, by types of arguments, this process has."""
    return sum(len(dispatcher.signatures) for dispatcher in _COMPILED)
