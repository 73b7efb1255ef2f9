"""The committed reactor model is what its script finds, and what the reactor's own linearisation says."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.identification.reactor_model_text import model_text
from plant_models.identification.reactor_step_tests import SOURCES, PlanOfTests, identify, misfit_rows
from plant_models.identification.step_response import Structure
from plant_models.model_file import parse_model_text, read_model_file
from plant_models.plant_model import PlantModel
from plant_models.simulators.scenario import HOUR
from plant_models.simulators.stirred_tank import (
    TankInputs,
    TankParameters,
    inputs_holding,
    jacobians,
    steady_states,
)
from plant_models.specification import PathSpec

COMMITTED = Path(str(files("plant_models") / "simulators" / "jacketed_reactor.toml"))
PARAMETERS = TankParameters()
DESIGN = inputs_holding(PARAMETERS, TankInputs(), 92.4)


@pytest.fixture(scope="module")
def model() -> PlantModel:
    return build_plant_model(read_model_file(COMMITTED))


def gain(path: PathSpec) -> float:
    if path.numerator is not None and path.denominator is not None:
        return path.numerator[-1] / path.denominator[-1]
    assert path.gain is not None
    return path.gain


def linear_gains() -> dict[tuple[str, str], float]:
    """Steady gains from the balances' Jacobians: -C A^-1 B."""
    (state,) = steady_states(PARAMETERS, DESIGN)
    by_state, by_input = jacobians(PARAMETERS, state, DESIGN)
    gains = -np.linalg.solve(by_state, by_input)
    rows = {"TI2101A": 2, "TI2101B": 2, "TI2102": 3, "AY2101": 1}
    columns = {"FI2103": 0, "TI2105": 1, "feed concentration": 2, "FI2104": 3, "heat transfer": 5}
    scale = {"heat transfer": 0.01}
    return {
        (source, target): scale.get(source, 1.0) * float(gains[row, column])
        for source, column in columns.items()
        for target, row in rows.items()
    }


def test_gains_agree_with_the_linearisation(model: PlantModel) -> None:
    """Finite steps on a nonlinear plant, in noise: within a tenth, or 0.001 mol/L for the least gains of AY2101."""
    expected = linear_gains()
    assert {(path.source, path.target) for path in model.spec.paths} == set(expected)
    for path in model.spec.paths:
        assert gain(path) == pytest.approx(expected[path.source, path.target], rel=0.1, abs=1e-3)


def test_operating_point_is_the_plants_steady_state(model: PlantModel) -> None:
    (state,) = steady_states(PARAMETERS, DESIGN)
    points = {
        i.tag: i.operating_point for i in (*model.spec.inputs, *model.spec.sensors, *model.spec.estimates)
    }
    expected = {
        "FI2103": DESIGN.feed_flow,
        "TI2105": DESIGN.feed_temperature,
        "FI2104": DESIGN.coolant_flow,
        "TI2101A": state.temperature,
        "TI2101B": state.temperature,
        "TI2102": state.jacket,
        "AY2101": state.product,
    }
    assert points == pytest.approx(expected, rel=1e-4)


def test_both_thermocouples_share_their_paths(model: PlantModel) -> None:
    """Their difference is then free of every disturbance: the third opinion comes from the rest of the model."""
    difference = model.stochastic.C[0] - model.stochastic.C[1]
    moved = difference @ model.stochastic.P0 @ difference
    assert moved < 1e-12 * (model.stochastic.C[0] @ model.stochastic.P0 @ model.stochastic.C[0])


def test_a_quick_rerun_of_the_script_finds_the_committed_responses() -> None:
    """One source, shorter holds, other noise: step responses within a twentieth of the gain of the committed ones."""
    plan = PlanOfTests(hold=2.5 * HOUR, interval=30.0, seed=77)
    pairs = identify(plan, SOURCES[3:4], (Structure(2), Structure(3, 1)))
    committed = committed_responses("feed concentration", np.arange(0.0, 7200.0, 60.0))
    time = np.arange(-60.0, 7200.0, 60.0)
    for pair in pairs:
        fitted = pair.path.response(time, (time >= 0.0) * 1.0)[1:]
        target = pair.target.split(" and ")[0]
        assert np.abs(fitted - committed[target]).max() < 0.05 * abs(committed[target][-1])
    rows = misfit_rows(pairs)
    assert [row["to"] for row in rows] == ["TI2101A and TI2101B", "TI2102", "AY2101"]
    assert all(80.0 < float(row["misfit_percent_of_noise"]) < 130.0 for row in rows)


def committed_responses(source: str, time: np.ndarray) -> dict[str, np.ndarray]:
    """Step responses of the committed file's paths by scipy, dead time as a shift of the time axis."""
    from scipy import signal

    found = {}
    for path in read_model_file(COMMITTED).paths:
        if path.source != source:
            continue
        if path.numerator is None:
            numerator, denominator = np.array([path.gain]), np.array([1.0])
            for lead in path.lead_times:
                numerator = np.polymul(numerator, [lead, 1.0])
            for lag in path.time_constants:
                denominator = np.polymul(denominator, [lag, 1.0])
        else:
            numerator, denominator = np.array(path.numerator), np.array(path.denominator)
        fine = np.arange(0.0, time[-1] + 1.0, 1.0)
        _, response = signal.step((numerator, denominator), T=fine)
        found[path.target] = np.interp(time - path.dead_time, fine, response, left=0.0)
    return found


def test_the_text_around_the_paths_is_the_scripts(model: PlantModel) -> None:
    """Everything but the fits follows from the script alone: the committed file begins with what it writes today."""
    written = model_text((), DESIGN)
    assert COMMITTED.read_text(encoding="utf-8").startswith(written.rstrip("\n"))


def test_written_text_reads_back_as_fitted() -> None:
    plan = PlanOfTests(hold=1.5 * HOUR, interval=60.0)
    pairs = identify(plan, SOURCES, (Structure(2),))
    spec = parse_model_text(model_text(pairs, DESIGN), "jacketed_reactor.toml")
    fitted = {(pair.source, target): pair.path for pair in pairs for target in pair.target.split(" and ")}
    assert len(spec.paths) == len(fitted) == 20
    for path in spec.paths:
        source = fitted[path.source, path.target]
        assert gain(path) == pytest.approx(source.gain, rel=1e-4)
        assert path.dead_time == pytest.approx(source.dead_time, abs=0.06)
        constants = source.time_constants
        if constants is not None:
            assert path.time_constants == pytest.approx(constants, rel=1e-3)
        else:
            assert path.denominator is not None
            ratio = np.array(path.denominator) / path.denominator[-1]
            assert ratio == pytest.approx(source.denominator, rel=1e-3)
