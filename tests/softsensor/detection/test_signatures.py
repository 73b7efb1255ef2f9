"""What a fault leaves in the innovations: against two runs of the filter that differ by the fault, and closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.model_file import parse_model_text, read_model_file
from plant_models.plant_model import PlantModel
from softsensor.detection.signatures import (
    Hypothesis,
    filter_response,
    hypotheses,
    inverse_cholesky,
    signatures,
    steady_filter,
)
from softsensor.estimation.input_driven import accept_inputs, advance_input_driven, input_driven_outputs
from softsensor.estimation.kalman import correct, predict, row_mean
from softsensor.estimation.kernel import EstimatorState, Kernel, build_kernel, initial_state

Array = NDArray[np.float64]
SETTLE, SEEN = 20_000, 150


def innovations(
    kernel: Kernel, start: EstimatorState, use: NDArray[np.int64], u: Array, y: Array
) -> tuple[Array, EstimatorState]:
    """Innovations (N, n_sensors) of the kernel's own recursion from a state, and the state after them."""
    state = start.copy()
    n, m = len(kernel.q), kernel.n_sensors
    v, K, M, base = np.zeros(n), np.zeros(n), np.zeros((n, n)), np.zeros(m + kernel.n_estimates)
    work, out = np.zeros(len(kernel.steady) + 1), np.zeros_like(y)
    for k in range(len(u)):
        accept_inputs(kernel, state, u[k])
        input_driven_outputs(kernel, state, base)
        for i in range(m):
            out[k, i] = y[k, i] - base[i] - row_mean(kernel, state.x, i)
        for i in range(m):
            if use[i]:
                correct(kernel, state.x, state.P, i, y[k, i] - base[i], kernel.r[i], v, K)
        advance_input_driven(kernel, state, work)
        predict(kernel, state.x, state.P, v, M)
    return out, state


@pytest.fixture(scope="module")
def model() -> PlantModel:
    """The quadruple tank: two levels measured, two inputs, disturbances of its own."""
    return build_plant_model(read_model_file(published_model_path("quadruple_tank")))


def left_by(model: PlantModel, use: NDArray[np.int64], settled: EstimatorState, suspect: Hypothesis) -> Array:
    """The difference that a unit fault makes to a filter that has settled."""
    kernel = build_kernel(model)
    u = np.tile(kernel.operating_u, (SEEN, 1))
    y = np.tile(kernel.operating_y[: kernel.n_sensors], (SEEN, 1))
    changed_u, changed_y = u.copy(), y.copy()
    shape = np.ones(SEEN) if suspect.shape == "step" else np.arange(1.0, SEEN + 1.0)
    if suspect.source == "sensor":
        changed_y[:, suspect.index] += shape
    elif suspect.source == "input":
        changed_u[:, suspect.index] += shape
    else:
        part, x = model.stochastic, np.zeros(len(kernel.q))
        for k in range(SEEN):
            if suspect.shape == "ramp" or k == 0:
                x[part.disturbance_index[suspect.index]] += 1.0
            changed_y[k] += (part.C @ x)[: kernel.n_sensors]
            x = part.A @ x
    one, _ = innovations(kernel, settled, use, u, y)
    other, _ = innovations(kernel, settled, use, changed_u, changed_y)
    return other - one


@pytest.mark.parametrize("left_out", [False, True])
def test_signatures_are_the_difference_between_a_run_with_and_one_without(
    model: PlantModel, left_out: bool
) -> None:
    kernel = build_kernel(model)
    use = np.ones(kernel.n_sensors, dtype=np.int64)
    if left_out:
        use[0] = 0
    steady = steady_filter(model, kernel, use)
    assert steady.settled
    suspects = hypotheses(model, SEEN)
    steady_u = np.tile(kernel.operating_u, (SETTLE, 1))
    steady_y = np.tile(kernel.operating_y[: kernel.n_sensors], (SETTLE, 1))
    _, settled = innovations(kernel, initial_state(model, kernel), use, steady_u, steady_y)
    table = signatures(model, kernel, suspects, steady, use, SEEN)
    for h in range(len(suspects)):
        raw = left_by(model, use, settled, suspects[h])
        if suspects[h].source == "sensor" and use[suspects[h].index] == 0:
            assert not np.any(table[h])
            continue
        raw[:, use == 0] = 0.0
        expected = raw @ steady.whitening.T
        assert np.allclose(table[h], expected, rtol=1e-6, atol=1e-6 * max(1.0, np.abs(expected).max())), (
            suspects[h]
        )


def test_whitening_makes_the_innovations_covariance_one() -> None:
    random = np.random.default_rng(2)
    for used in ([1, 1, 1, 1], [1, 0, 1, 1], [0, 0, 1, 0]):
        root = random.standard_normal((4, 4))
        S, use = root @ root.T + np.eye(4), np.array(used, dtype=np.int64)
        W = inverse_cholesky(S, use)
        kept = np.flatnonzero(use)
        assert np.allclose(W @ S @ W.T, np.diag(use.astype(float)), atol=1e-12)
        assert np.allclose(
            W[np.ix_(kept, kept)], np.linalg.inv(np.linalg.cholesky(S[np.ix_(kept, kept)])), atol=1e-12
        )


SCALAR = """
[unit]
name = "S"
title = "One state"
sample_time = "10 s"
[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 0.0
range = [-100.0, 100.0]
noise_sd = 1.0
[[estimate]]
tag = "AY1"
unit = "-"
operating_point = 0.0
range = [-100.0, 100.0]
[[disturbance]]
name = "d"
{disturbance}
[[transfer_function]]
from = "d"
to = "TI1"
gain = 1.0
[[transfer_function]]
from = "d"
to = "AY1"
gain = 1.0
"""


def scalar_response(a: float, q: float, cycles: int) -> Array:
    """Innovations that a unit bias leaves with x+ = a x + w(q), y = x + v(1)."""
    if a == 1.0:
        disturbance = f"walk_sd = {math.sqrt(q * 360.0)!r}"
    else:
        disturbance = f'sd = {math.sqrt(q / (1 - a * a))!r}\ntime_constant = "{-10.0 / math.log(a)!r} s"'
    model = build_plant_model(parse_model_text(SCALAR.format(disturbance=disturbance), "s.toml"))
    kernel, use = build_kernel(model), np.ones(1, dtype=np.int64)
    steady = steady_filter(model, kernel, use)
    return filter_response(kernel, steady.gains, use, np.ones((cycles, 1)))[:, 0]


# references.md 2.5, COMPUTED: unit step bias through the scalar steady filter; settles at (1 - a)/(1 - a (1 - K))
@pytest.mark.parametrize(
    ("a", "q", "first", "last"),
    [
        (1.0, 0.1, [1.0, 0.72984, 0.53267, 0.38877, 0.28374], 0.0),
        (0.8, 0.36, [1.0, 0.7, 0.55, 0.475, 0.4375], 0.4),
        (0.95, 0.1, [1.0], 0.179259),
        (0.9, 0.1, [1.0], 0.340376),
    ],
)
def test_a_bias_fades_as_the_closed_form_says(a: float, q: float, first: list[float], last: float) -> None:
    seen = scalar_response(a, q, 400)
    assert np.allclose(seen[: len(first)], first, atol=6e-6)
    assert abs(seen[-1] - last) < 6e-7
    b = q + a * a - 1.0
    before = (b + math.sqrt(b * b + 4.0 * q)) / 2.0  # references.md 2.2, r = 1
    K = before / (before + 1.0)
    # innovation after k cycles: e(k+1) = 1 - xi(k+1), xi(k+1) = a (xi(k) + K e(k))
    xi, expected = 0.0, []
    for _ in range(400):
        expected.append(1.0 - xi)
        xi = a * (xi + K * (1.0 - xi))
    assert np.allclose(seen, expected, atol=1e-9)


def test_every_instrument_and_disturbance_is_a_suspect_in_both_shapes(model: PlantModel) -> None:
    found = hypotheses(model, 100)
    names = [*model.sensor_tags, *model.input_tags, *(item.name for item in model.spec.disturbances)]
    assert [(item.name, item.shape) for item in found] == [(n, s) for n in names for s in ("step", "ramp")]
    assert all(item.prior_sd > 0.0 for item in found)
