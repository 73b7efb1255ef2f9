"""A Kalman soft sensor for chemical plants. Advisory only: it never writes to the control system.

>>> import softsensor
>>> model = softsensor.load_model("r210.toml")              # doctest: +SKIP
>>> result = softsensor.replay(model, history, lab=None)    # doctest: +SKIP
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from softsensor.recorded_data import replay
    from softsensor.unit_design import load_model

__all__ = ["load_model", "replay"]
__version__ = "0.1.0"

_HOMES = {"load_model": "softsensor.unit_design", "replay": "softsensor.recorded_data"}


def __getattr__(name: str) -> Any:
    """Import the two public functions when they are first asked for: commands that need neither start at once."""
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
