"""What sensors and laboratory tell, against the plain recursion cycle by cycle and closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from plant_models.plant_model import PlantModel, StochasticPart
from plant_models.specification import DisturbanceSpec, EstimateSpec, LabSpec, SensorSpec, UnitSpec
from softsensor.estimation.observability import disturbance_knowledge, estimate_knowledge, lab_help, owners
from softsensor.estimation.steady_state import Rows, measured_rows, settle, steady_state

Matrix = NDArray[np.float64]
CYCLE = 10.0


def model(
    A: list[list[float]],
    q: list[float],
    C: list[list[float]],
    noise: list[float],
    lab_sd: float | None = None,
    disturbances: tuple[int, ...] = (0,),
    interval_scale: float = 1.0,
) -> PlantModel:
    """Sensors with the given noise first; the rows after them are estimates."""
    names = tuple(f"d{i}" if i in disturbances else f"offset {i}" for i in range(len(q)))
    part = StochasticPart(
        np.array(A), np.array(q), np.array(C), np.zeros((len(q), len(q))), names, disturbances
    )
    lab = None if lab_sd is None else LabSpec("AL", lab_sd)
    spec = UnitSpec(
        name="U",
        title="",
        sample_time=CYCLE,
        inputs=(),
        sensors=tuple(
            SensorSpec(f"S{i}", "degC", 0.0, (-1.0, 1.0), sd, 4.0 * sd) for i, sd in enumerate(noise)
        ),
        estimates=tuple(
            EstimateSpec(f"E{i}", "mol/L", 0.0, (-1.0, 1.0), lab=lab, interval_scale=interval_scale)
            for i in range(len(C) - len(noise))
        ),
        disturbances=tuple(DisturbanceSpec(f"d{i}", sd=1.0, time_constant=1.0) for i in disturbances),
        paths=(),
        false_flag_interval=2.592e6,
    )
    return PlantModel(spec, (), part, "", spec)


def correct(P: Matrix, rows: Rows) -> Matrix:
    S = rows.C @ P @ rows.C.T + np.diag(rows.r)
    return np.asarray(P - P @ rows.C.T @ np.linalg.inv(S) @ rows.C @ P)


def plain_lab(system: PlantModel, lab_sd: float, start: Matrix) -> tuple[float, list[float]]:
    """Variance of the first estimate just after a result, and in the cycles after it, by the plain
    recursion.
    """
    part, rows = system.stochastic, measured_rows(system)
    row = part.C[len(system.spec.sensors)]
    P = correct(correct(start, rows), Rows(row[None, :], np.array([lab_sd**2])))
    first, later = float(row @ P @ row), []
    for _ in range(4000):
        P = correct(part.A @ P @ part.A.T + np.diag(part.q), rows)
        later.append(float(row @ P @ row))
    return first, later


COUPLED = model([[0.99, 0.0], [0.02, 0.98]], [0.0199, 0.001], [[0.0, 1.0], [1.0, 0.3]], [0.5], lab_sd=0.1)


def test_sds_without_with_and_after_losing_the_sensor() -> None:
    (found,) = estimate_knowledge(COUPLED)
    part, row = COUPLED.stochastic, COUPLED.stochastic.C[1]
    P = np.zeros((2, 2))
    for _ in range(5000):
        P = part.A @ P @ part.A.T + np.diag(part.q)
    assert found.sd_without_sensors == pytest.approx(math.sqrt(row @ P @ row), rel=1e-9)
    for _ in range(5000):
        P = part.A @ correct(P, measured_rows(COUPLED)) @ part.A.T + np.diag(part.q)
    after = correct(P, measured_rows(COUPLED))
    assert found.sd_with_sensors == pytest.approx(math.sqrt(row @ after @ row), rel=1e-9)
    ((lost, sd),) = found.sd_without
    assert lost == "S0"
    assert sd == pytest.approx(found.sd_without_sensors, rel=1e-12)
    assert found.sensors_help


def test_a_lab_result_helps_as_long_as_the_recursion_says() -> None:
    (found,) = estimate_knowledge(COUPLED)
    assert found.lab is not None
    first, later = plain_lab(COUPLED, 0.1, steady_state(COUPLED).P_prior)
    assert found.lab.sd == pytest.approx(math.sqrt(first), rel=1e-9)
    halfway = 0.5 * (first + found.sd_with_sensors**2)
    cycles = next(i for i, variance in enumerate(later, start=1) if variance >= halfway)
    assert cycles > 5
    assert found.lab.lasting == pytest.approx(cycles * CYCLE)
    assert not found.lab.growing


def test_a_walking_offset_is_left_out_of_the_sds_and_bounded_by_the_lab() -> None:
    q = 1e-4
    system = model(
        [[0.95, 0.0], [0.0, 1.0]],
        [0.1, q],
        [[1.0, 0.0], [1.0, 1.0]],
        [0.3],
        lab_sd=0.05,
    )
    (found,) = estimate_knowledge(system)
    alone = settle(
        StochasticPart(
            np.array([[0.95]]), np.array([0.1]), np.array([[1.0]]), np.zeros((1, 1)), ("d0",), (0,)
        ),
        Rows(np.array([[1.0]]), np.array([0.09])),
    )
    assert found.own_offset
    assert found.sd_with_sensors == pytest.approx(math.sqrt(alone.P_posterior[0, 0]), rel=1e-10)
    assert found.sensors_help
    assert found.lab is not None
    assert found.lab.growing
    assert found.lab.sd == pytest.approx(0.05, rel=1e-9)
    # the second computation: a start so uncertain about the offset that the result alone decides
    start = steady_state(system).P_prior + np.diag([0.0, 1e7])
    first, later = plain_lab(system, 0.05, start)
    assert first == pytest.approx(0.05**2, rel=1e-6)
    cycles = next(i for i, variance in enumerate(later, start=1) if variance >= 4.0 * first)
    assert found.lab.lasting == pytest.approx(cycles * CYCLE)
    assert dict(found.sd_from) == {"d0": pytest.approx(math.sqrt(0.1 / (1 - 0.95**2))), "offset 1": math.inf}


def test_nothing_ties_the_estimate_to_the_sensor() -> None:
    system = model(
        [[0.9, 0.0], [0.0, 0.95]], [0.1, 0.1], [[1.0, 0.0], [0.0, 1.0]], [0.1], disturbances=(0, 1)
    )
    (found,) = estimate_knowledge(system)
    assert not found.sensors_help
    assert found.lab is None
    seen, unseen = disturbance_knowledge(system)
    assert seen.observable
    assert not unseen.observable
    assert unseen.sd_with_sensors == pytest.approx(math.sqrt(0.1 / (1 - 0.95**2)), rel=1e-12)


def test_a_walk_that_is_seen_is_bounded_and_one_that_is_not_is_not() -> None:
    seen = model([[1.0]], [0.01], [[1.0], [2.0]], [0.2])
    (found,) = estimate_knowledge(seen)
    assert math.isinf(found.sd_without_sensors)
    assert found.sd_with_sensors == pytest.approx(2.0 * math.sqrt(steady_state(seen).P_posterior[0, 0]))
    assert found.sensors_help
    unseen = model([[1.0]], [0.01], [[0.0], [2.0]], [0.2])
    (found,) = estimate_knowledge(unseen)
    assert math.isinf(found.sd_with_sensors)
    assert not found.sensors_help
    assert not disturbance_knowledge(unseen)[0].observable


def test_interval_scale_multiplies_every_sd() -> None:
    plain = COUPLED
    part = plain.stochastic
    scaled = model(part.A.tolist(), part.q.tolist(), part.C.tolist(), [0.5], lab_sd=0.1, interval_scale=1.5)
    (one,), (other,) = estimate_knowledge(plain), estimate_knowledge(scaled)
    assert other.sd_with_sensors == pytest.approx(1.5 * one.sd_with_sensors)
    assert one.lab is not None
    assert other.lab is not None
    assert other.lab.sd == pytest.approx(1.5 * one.lab.sd)
    assert other.lab.lasting == one.lab.lasting


def test_a_result_no_better_than_the_sensors_changes_next_to_nothing() -> None:
    part = COUPLED.stochastic
    state = steady_state(COUPLED)
    helped = lab_help(part, state, part.C[1], 1e6, CYCLE)
    assert helped.sd == pytest.approx(math.sqrt(state.variance(part.C[1])), rel=1e-9)
    assert helped.lasting == 0.0


def test_states_belong_to_what_drives_them() -> None:
    system = model(
        [[0.9, 0.0, 0.0], [0.5, 0.5, 0.0], [0.0, 0.0, 1.0]], [0.1, 0.0, 0.1], [[0.0, 1.0, 1.0]], [0.1]
    )
    assert owners(system.stochastic) == ("d0", "d0", "offset 2")
