"""A unit's model, discretised: what the estimator runs on. Frozen arrays, tags, a digest."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plant_models.specification import PathSpec, UnitSpec

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]


@dataclass(frozen=True)
class DiscretePath:
    """One path from an input, held over each sample, with its dead time exact to the fraction of a sample.

    With dead time = (whole_delays + fraction) sample times, 0 <= fraction < 1::

        x(k+1) = phi x(k) + gamma_recent u(k - whole_delays) + gamma_older u(k - whole_delays - 1)
        y(k)   = c x(k) + d v(k),   v(k) = u(k - whole_delays) if fraction == 0 else u(k - whole_delays - 1)

    ``gamma_older`` is zero when ``fraction`` is zero. ``steady`` (n,) is the state that a constant unit input leads to,
    with integrating states zero. Shapes: phi (n, n); gamma_recent, gamma_older, c, steady (n,). n may be zero.
    """

    source: int
    """Index among the inputs (input-driven part) or the disturbances (stochastic part)."""
    row: int
    """Index among the outputs: sensors first, then estimates."""
    phi: Matrix
    gamma_recent: Vector
    gamma_older: Vector
    c: Vector
    d: float
    steady: Vector
    whole_delays: int
    fraction: float
    integrating: bool


@dataclass(frozen=True)
class StochasticPart:
    """The disturbances and all that they drive, as one linear system with diagonal process noise.

    ::

        x(k+1) = A x(k) + w(k),  w ~ N(0, diag(q))        x(0) ~ N(0, P0)
        z(k)   = C x(k)          deviation of sensors (first) and estimates (after them) from the input-driven part

    State order: per disturbance its value now, then its past values (newest first, as many as its dead times need),
    then the states of its paths in file order; after all disturbances the offsets of sensors and estimates.
    Shapes: A, P0 (n, n); q (n,); C (n_sensors + n_estimates, n).
    """

    A: Matrix
    q: Vector
    C: Matrix
    P0: Matrix
    state_names: tuple[str, ...]
    disturbance_index: tuple[int, ...]
    """State index of each disturbance's present value."""


@dataclass(frozen=True)
class ScheduledStates:
    """A path from a disturbance that changes with an input, and its place in the stochastic part: its first state, the
    state that is the disturbance behind its whole samples of dead time, the fraction of one, the output's row.
    """

    path: PathSpec
    row: int
    state: int
    newest: int
    fraction: float


@dataclass(frozen=True)
class PlantModel:
    """What the estimator runs on: the specification, the input-driven paths, the stochastic part, and a digest."""

    spec: UnitSpec
    paths: tuple[DiscretePath, ...]
    stochastic: StochasticPart
    digest: str
    """SHA-256 over every discretised array and every limit that the estimator uses."""
    scaled: UnitSpec
    """The specification in the scale of the transfer functions, ``spec`` itself where no tag has a transform: what the
    estimator and the tests compute with. Paths hold between values in that scale.
    """
    scheduled: tuple[tuple[int, PathSpec], ...] = ()
    """Index among ``paths`` of each path with a schedule, and its specification; ``paths`` holds it as it is at the
    operating point of its schedule's tag."""
    scheduled_states: tuple[ScheduledStates, ...] = ()
    """The same of ``stochastic``; its ``P0`` belongs to the operating point too."""

    @property
    def input_tags(self) -> tuple[str, ...]:
        return tuple(item.tag for item in self.spec.inputs)

    @property
    def sensor_tags(self) -> tuple[str, ...]:
        return tuple(item.tag for item in self.spec.sensors)

    @property
    def estimate_tags(self) -> tuple[str, ...]:
        return tuple(item.tag for item in self.spec.estimates)
