"""How the functions of the loop are compiled.

numba counts references to arrays, with atomic instructions, each time one is taken from a named tuple, sliced or handed
on: most of a cycle's time in small models. Nothing is allocated inside the loop and no array leaves it, so nothing needs
counting; all arrays belong to the caller. A function compiled so that allocates is refused by numba when it is compiled;
what it calls is compiled so too, unless it says otherwise. No fastmath, no parallel loops: the same bits on every machine.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, TypeVar, cast

from numba import njit

Function = TypeVar("Function", bound=Callable[..., Any])
UNCOUNTED: dict[str, Any] = {"cache": True, "_nrt": False}
COUNTED: dict[str, Any] = {"cache": True, "_nrt": True}


def uncounted(function: Function) -> Function:
    """Compile a function that allocates nothing: it works in arrays that it is given."""
    return cast(Function, njit(**UNCOUNTED)(function))


def allocating(function: Function) -> Function:
    """Compile a function that the loop calls now and then and that needs arrays of its own."""
    return cast(Function, njit(**COUNTED)(function))
