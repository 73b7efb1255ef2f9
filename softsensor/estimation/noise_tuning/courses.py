"""How A and C of the likelihood move where paths from disturbances change with an input."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit

from plant_models.plant_model import PlantModel
from softsensor.estimation.kernel import Floats, Ints, Kernel, compressed_rows
from softsensor.estimation.noise_tuning.parameters import seen_states
from softsensor.estimation.schedule_tables import Mask, scheduled_entries
from softsensor.estimation.schedules import follow_schedules


class Course(NamedTuple):
    """Entries of the likelihood's A and C that schedules write: their places in a_val and c_val, and their values in every
    cycle (N, places); no places where no disturbance goes through a schedule.
    """

    a_to: Ints
    a_val: Floats
    c_to: Ints
    c_val: Floats

    def between(self, first: int, stop: int) -> Course:
        """The cycles from first to stop (exclusive)."""
        return self._replace(a_val=self.a_val[first:stop], c_val=self.c_val[first:stop])


def unchanging(cycles: int) -> Course:
    """No entry changes."""
    nowhere, nothing = np.zeros(0, dtype=np.int64), np.zeros((cycles, 0))
    return Course(nowhere, nothing, nowhere, nothing)


def course(model: PlantModel, kernel: Kernel, u: Floats) -> Course:
    """The entries in every cycle of inputs ``u`` (N, n_inputs), in the scale of the model.

    :param kernel: a private one of the model.
    """
    if not model.scheduled_states:
        return unchanging(len(u))
    entries, part, sensors = scheduled_entries(model), model.stochastic, kernel.n_sensors
    states = seen_states(model.spec, part)
    among = np.ix_(states, states)
    a_to = _places(part.A[among], entries.A[among])
    c_to = _places(part.C[:sensors, states], entries.C[:sensors, states])
    seen_rows = np.zeros_like(entries.A)
    seen_rows[states] = entries.A[states]
    sensor_rows = np.zeros_like(entries.C)
    sensor_rows[:sensors] = entries.C[:sensors]
    a_from = _places(part.A, entries.A, seen_rows)
    c_from = _places(part.C, entries.C, sensor_rows)
    a_val, c_val = np.zeros((len(u), len(a_to))), np.zeros((len(u), len(c_to)))
    _follow(kernel, np.ascontiguousarray(u), a_from, a_val, c_from, c_val)
    return Course(a_to, a_val, c_to, c_val)


def _places(matrix: Floats, kept: Mask, wanted: Mask | None = None) -> Ints:
    """Where entries lie among the values of the compressed rows of ``matrix`` with ``kept`` in them."""
    pointers, columns, _ = compressed_rows(matrix, kept)
    rows = np.repeat(np.arange(len(matrix)), np.diff(pointers))
    return np.flatnonzero((kept if wanted is None else wanted)[rows, columns]).astype(np.int64)


@njit(cache=True)
def _follow(kernel: Kernel, u: Floats, a_from: Ints, a_val: Floats, c_from: Ints, c_val: Floats) -> None:
    for k in range(u.shape[0]):
        follow_schedules(kernel, u[k])
        for e in range(len(a_from)):
            a_val[k, e] = kernel.a_val[a_from[e]]
        for e in range(len(c_from)):
            c_val[k, e] = kernel.c_val[c_from[e]]
