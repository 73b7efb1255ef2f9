"""What the likelihood sees of cycles: readings less what the known inputs explain, and which of them to leave out."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numba import njit
from numpy.typing import NDArray

from plant_models.plant_model import PlantModel
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kernel import EstimatorState, Floats, Ints, Kernel, build_kernel, initial_state
from softsensor.estimation.noise_tuning.courses import Course, course
from softsensor.estimation.schedules import follow_schedules, private


class Deviations(NamedTuple):
    """z (N, m): readings less the input-driven part, nan where there is none; scale (N, m) on the noise variance; how A and
    C move.
    """

    z: Floats
    scale: Floats
    course: Course

    def between(self, first: int, stop: int) -> Deviations:
        """The cycles from first to stop (exclusive)."""
        return Deviations(self.z[first:stop], self.scale[first:stop], self.course.between(first, stop))


@njit(cache=True)
def _explained(kernel: Kernel, state: EstimatorState, u: Floats, out: Floats, work: Floats) -> None:
    for k in range(u.shape[0]):
        follow_schedules(kernel, u[k])
        accept_inputs(kernel, state, u[k])
        input_driven_outputs(kernel, state, out[k])
        advance_input_driven(kernel, state, work)


def deviations(model: PlantModel, u: Floats, y: Floats, scale: Floats, doubtful: Ints) -> Deviations:
    """Deviations of readings ``y`` (N, m) under inputs ``u`` (N, n_inputs), all finite.

    :param scale: (N, m) factor on each reading's noise variance.
    :param doubtful: (N,) not zero where an input is missing: what it did is unknown, so readings then, and for twice as
        long afterwards, are left out.
    """
    kernel = private(build_kernel(model))
    outputs = np.zeros((len(u), kernel.n_sensors + kernel.n_estimates))
    _explained(
        kernel,
        initial_state(model, kernel),
        np.ascontiguousarray(u),
        outputs,
        np.zeros(len(kernel.steady) + 1),
    )
    z = np.ascontiguousarray(y - outputs[:, : kernel.n_sensors])
    z[_unsettled(doubtful)] = np.nan
    return Deviations(z, np.ascontiguousarray(scale), course(model, kernel, u))


@njit(cache=True)
def _unsettled(doubtful: Ints) -> NDArray[np.bool_]:
    out = np.zeros(len(doubtful), dtype=np.bool_)
    length, left = 0, 0
    for k in range(len(doubtful)):
        if doubtful[k] != 0:
            length += 1
            left = 2 * length
            out[k] = True
        else:
            length = 0
            out[k] = left > 0
            left -= 1 if left > 0 else 0
    return out
