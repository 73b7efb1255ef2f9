"""Estimates given all readings at once: one joint Gaussian of every output at every cycle, and its conditional.

No recursion over readings, no gain, no adjoint: covariances of outputs at two times from products of the model's
matrices, one system of equations in all readings. Only for short runs.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from independent.dense_filter import LabRow, StateSpace, course, input_driven
from independent.transfer_paths import Array, Mask

from plant_models.specification import UnitSpec


def joint_covariance(systems: Sequence[StateSpace]) -> Array:
    """(count, p, count, p): covariance of output i at cycle j and output l at cycle k, from x(0) ~ N(0, P0)."""
    count, p = len(systems), len(systems[0].C)
    joint = np.zeros((count, p, count, p))
    S = systems[0].P0
    for k, model in enumerate(systems):
        G = S @ model.C.T
        for j in range(k, count):
            joint[j, :, k, :] = systems[j].C @ G
            joint[k, :, j, :] = joint[j, :, k, :].T
            G = systems[j].A @ G
        S = model.A @ S @ model.A.T + model.Q
    return joint


def given_everything(
    spec: UnitSpec, u: Array, y: Array, uncertain: Mask, labs: Sequence[LabRow] = ()
) -> tuple[Array, Array]:
    """Every estimate at every cycle and its sd (N, n_estimates), given all of ``y`` (nan for gaps) and ``labs``."""
    count, n_sensors = y.shape
    mean = input_driven(spec, u)
    p = mean.shape[1]
    joint = joint_covariance(course(spec, u)).reshape(count * p, count * p)
    noise = np.array([item.noise_sd for item in spec.sensors]) * np.where(uncertain, 3.0, 1.0)
    seen = np.argwhere(np.isfinite(y))
    at = [*(seen[:, 0] * p + seen[:, 1]), *(lab.cycle * p + n_sensors + lab.estimate for lab in labs)]
    values = np.array([*y[seen[:, 0], seen[:, 1]], *(lab.value for lab in labs)])
    sds = np.array([*noise[seen[:, 0], seen[:, 1]], *(lab.sd for lab in labs)])
    wanted = (np.arange(count)[:, None] * p + np.arange(n_sensors, p)).ravel()
    among = joint[np.ix_(at, at)] + np.diag(sds**2)
    across = joint[np.ix_(wanted, at)]
    weights = np.linalg.solve(among, across.T).T
    value = mean.ravel()[wanted] + weights @ (values - mean.ravel()[at])
    variance = joint[wanted, wanted] - np.einsum("ij,ij->i", weights, across)
    scale = np.array([item.interval_scale for item in spec.estimates])
    return value.reshape(count, -1), np.sqrt(variance).reshape(count, -1) * scale
