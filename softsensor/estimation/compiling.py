"""How the functions of the loop are compiled.

numba counts references to arrays, with atomic instructions, each time one is taken from a named tuple, sliced or handed
on: most of a cycle's time in small models. Nothing is allocated inside the loop and no array leaves it, so nothing needs
counting; all arrays belong to the caller. A function compiled so that allocates is refused by numba when it is compiled;
what it calls is compiled so too, unless it says otherwise. No fastmath, no parallel loops: the same bits on every machine.

A named tuple of arrays goes to a function number by number, some hundreds of them, each time it is called: what the loop
calls in every cycle is compiled into it (:func:`inlined`). Statements written out side by side, such as the eight columns
of :mod:`softsensor.estimation.eight_states`, are packed into vectors (SLP): the same operations, and none reordered.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

import numba
from numba import njit

numba.config.SLP_VECTORIZE = 1  # type: ignore[attr-defined]
Function = TypeVar("Function", bound=Callable[..., Any])
UNCOUNTED: dict[str, Any] = {"cache": True, "_nrt": False, "no_cfunc_wrapper": True}
INNER: dict[str, Any] = {**UNCOUNTED, "no_cpython_wrapper": True}
COUNTED: dict[str, Any] = {"cache": True, "_nrt": True, "no_cfunc_wrapper": True}


def uncounted(function: Function) -> Function:
    """Compile a function that allocates nothing: it works in arrays that it is given."""
    return cast(Function, njit(**UNCOUNTED)(function))


def inner(function: Function) -> Function:
    """As :func:`uncounted`, for what only compiled functions call: a way in from Python takes longest to compile."""
    return cast(Function, njit(**INNER)(function))


def inlined(function: Function) -> Function:
    """As :func:`inner`, compiled into what calls it."""
    return cast(Function, njit(forceinline=True, **INNER)(function))


def allocating(function: Function) -> Function:
    """Compile a function that the loop calls now and then and that needs arrays of its own."""
    return cast(Function, njit(**COUNTED)(function))
