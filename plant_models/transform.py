"""Between a tag's engineering unit and the scale in which its transfer functions hold: log, square root, or a table.

Three functions of one strictly monotone map T: ``forward`` is T, nan outside its domain; ``back`` is its inverse on all
numbers, continued where T has no value: a square root below zero as -x^2, a table beyond its ends along its first and its
last piece; ``slope`` is T', and ``back_slope`` the derivative of ``back``. Elementwise +, -, *, / and square roots only, so
that results are the same on every machine.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from plant_models.elementary_arrays import Floats, exponential, logarithm

Kind = Literal["log", "sqrt", "table"]


@dataclass(frozen=True, slots=True)
class Transform:
    """One map. ``points``: of a table, at least two (raw, model), raw ascending, model strictly monotone; else none."""

    kind: Kind
    points: tuple[tuple[float, float], ...] = ()

    def forward(self, raw: Floats) -> Floats:
        """T(raw); nan where raw lies outside the domain.

        >>> Transform("table", ((0.0, 0.0), (50.0, 20.0), (100.0, 100.0))).forward(np.array([25.0, 75.0, 101.0])).tolist()
        [10.0, 60.0, nan]
        """
        if self.kind == "log":
            return logarithm(raw)
        if self.kind == "sqrt":
            return np.where(raw >= 0.0, np.sqrt(np.where(raw >= 0.0, raw, 0.0)), np.nan)
        x, y = self._columns()
        inside = (raw >= x[0]) & (raw <= x[-1])
        return np.where(inside, _along(x, y, np.where(inside, raw, x[0])), np.nan)

    def back(self, model: Floats) -> Floats:
        """The raw value of a model value.

        >>> Transform("table", ((0.0, 5.0), (100.0, 3.0))).back(np.array([3.5, 2.0])).tolist()
        [75.0, 150.0]
        """
        if self.kind == "log":
            return exponential(model)
        if self.kind == "sqrt":
            return model * np.abs(model)
        x, y = self._rising()
        return _along(y, x, model)

    def slope(self, raw: float) -> float:
        """T'(raw) for raw within the domain; at a point of a table the mean of both sides."""
        if self.kind == "log":
            return 1.0 / raw
        if self.kind == "sqrt":
            return 0.5 / float(np.sqrt(raw))
        x, y = self._columns()
        slopes = np.diff(y) / np.diff(x)
        left = int(np.clip(np.searchsorted(x, raw, side="left") - 1, 0, len(slopes) - 1))
        right = int(np.clip(np.searchsorted(x, raw, side="right") - 1, 0, len(slopes) - 1))
        return 0.5 * float(slopes[left] + slopes[right])

    def slopes(self, raw: Floats) -> Floats:
        """T' at raw values within the domain; at a point of a table that of the piece above it."""
        if self.kind == "log":
            return 1.0 / raw
        if self.kind == "sqrt":
            with np.errstate(divide="ignore"):
                return np.asarray(0.5 / np.sqrt(raw))
        x, y = self._columns()
        return (np.diff(y) / np.diff(x))[_piece(x, raw)]

    def back_slope(self, model: Floats) -> Floats:
        """How fast the raw value moves with the model value; at a point of a table that of the piece above it."""
        if self.kind == "log":
            return exponential(model)
        if self.kind == "sqrt":
            return 2.0 * np.abs(model)
        x, y = self._rising()
        place = _piece(y, model)
        return np.where(np.isnan(model), np.nan, (np.diff(x) / np.diff(y))[place])

    @property
    def rising(self) -> bool:
        """Does the model value grow with the raw value?"""
        return self.kind != "table" or self.points[-1][1] > self.points[0][1]

    @property
    def domain(self) -> tuple[float, float]:
        """Lowest and highest raw value; of a log the lowest does not belong to it."""
        return (self.points[0][0], self.points[-1][0]) if self.kind == "table" else (0.0, np.inf)

    def holds(self, raw: Floats) -> NDArray[np.bool_]:
        """Which raw values lie within the domain; nan does not."""
        low, high = self.domain
        return (raw > low if self.kind == "log" else raw >= low) & (raw <= high)

    def limits(self, low: float, high: float) -> tuple[float, float]:
        """The model values, the lower first, between which lie all raw values from ``low`` to ``high`` of the domain.

        >>> Transform("log").limits(-1.0, 1.0)
        (-inf, 0.0)
        """
        first, last = self.domain
        low, high = max(low, first), min(high, last)
        ends = [self._end(low), self._end(high)]
        return min(ends), max(ends)

    def _end(self, raw: float) -> float:
        if self.kind == "log" and raw <= 0.0:
            return -np.inf
        return float(raw) if np.isinf(raw) else float(self.forward(np.array([raw]))[0])

    @property
    def text(self) -> str:
        """In a few words."""
        return {"log": "log", "sqrt": "square root", "table": f"table of {len(self.points)} points"}[
            self.kind
        ]

    @property
    def expected(self) -> str:
        """What a reading must be, to complete "expected ..."."""
        if self.kind == "table":
            return f"a value within its table, {self.domain[0]:g} to {self.domain[1]:g}"
        return "a value above zero" if self.kind == "log" else "a value not below zero"

    def _columns(self) -> tuple[Floats, Floats]:
        x, y = np.array(self.points).T
        return x, y

    def _rising(self) -> tuple[Floats, Floats]:
        """The columns, with the model value ascending."""
        x, y = self._columns()
        return (x, y) if y[-1] > y[0] else (x[::-1], y[::-1])


def _piece(x: Floats, at: Floats) -> NDArray[np.intp]:
    """Index of the piece between two of ``x`` (ascending) on which each value lies, the first and the last continued."""
    return np.clip(np.searchsorted(x, at, side="right") - 1, 0, len(x) - 2)


def _along(x: Floats, y: Floats, at: Floats) -> Floats:
    """The broken line through (x, y), continued at both ends; its own points exactly."""
    place = _piece(x, at)
    low = y[place] + (at - x[place]) * ((y[place + 1] - y[place]) / (x[place + 1] - x[place]))
    return np.where(at == x[place + 1], y[place + 1], low)
