"""The published models: valid files whose numbers are the published ones."""

from __future__ import annotations

import math

import numpy as np
import pytest
from numpy.typing import NDArray

from plant_models.errors import Problem
from plant_models.library import published_model_path, published_models
from plant_models.model_file import read_model_file
from plant_models.specification import PathSpec, UnitSpec

# Wood & Berry, Chem. Eng. Sci. 28 (1973) 1707-1717: gain, time constant, dead time
# in minutes. READ (second-hand).
WOOD_BERRY = {
    ("FI4101", "AI4101"): (12.8, 16.7, 1.0),
    ("FI4102", "AI4101"): (-18.9, 21.0, 3.0),
    ("feed flow", "AI4101"): (3.8, 14.9, 8.1),
    ("FI4101", "AY4102"): (6.6, 10.9, 7.0),
    ("FI4102", "AY4102"): (-19.4, 14.4, 3.0),
    ("feed flow", "AY4102"): (4.9, 13.2, 3.4),
}

# Prett & Morari (eds.), The Shell Process Control Workshop, 1987: columns u1 u2 u3
# d1 d2, minutes. READ (second-hand).
FRACTIONATOR_SOURCES = ("FI5201", "FI5202", "JI5203", "upper reflux duty", "intermediate reflux duty")
FRACTIONATOR = {
    "AY5201": ((4.05, 1.77, 5.88, 1.20, 1.44), (50, 60, 50, 45, 40), (27, 28, 27, 27, 27)),
    "AY5202": ((5.39, 5.72, 6.90, 1.52, 1.83), (50, 60, 40, 25, 20), (18, 14, 15, 15, 15)),
    "TI5203": ((3.66, 1.65, 5.53, 1.16, 1.27), (9, 30, 40, 11, 6), (2, 20, 2, 0, 0)),
    "TI5204": ((5.92, 2.54, 8.10, 1.73, 1.79), (12, 27, 20, 5, 19), (11, 12, 2, 0, 0)),
    "TI5205": ((4.13, 2.38, 6.23, 1.31, 1.26), (8, 19, 10, 2, 22), (5, 7, 2, 0, 0)),
    "TI5206": ((4.06, 4.18, 6.53, 1.19, 1.17), (13, 33, 9, 19, 24), (8, 4, 1, 0, 0)),
    "TI5207": ((4.38, 4.42, 7.20, 1.14, 1.26), (33, 44, 19, 27, 32), (20, 22, 0, 0, 0)),
}


def model(name: str) -> UnitSpec:
    return read_model_file(published_model_path(name))


def paths_of(name: str) -> dict[tuple[str, str], PathSpec]:
    return {(path.source, path.target): path for path in model(name).paths}


def gains(name: str, targets: list[str], sources: list[str]) -> NDArray[np.float64]:
    paths = paths_of(name)
    return np.array(
        [[paths[source, target].gain for source in sources] for target in targets], dtype=np.float64
    )


def relative_gains(matrix: NDArray[np.float64]) -> NDArray[np.float64]:
    """Bristol's array: the gains times the transposed inverse, element by element."""
    return matrix * np.linalg.inv(matrix).T


def test_there_are_three_models_and_each_is_a_sound_file() -> None:
    assert published_models() == ("heavy_oil_fractionator", "quadruple_tank", "wood_berry")
    shapes = {name: model(name) for name in published_models()}
    assert {
        name: (len(m.inputs), len(m.sensors), len(m.estimates), len(m.paths)) for name, m in shapes.items()
    } == {
        "heavy_oil_fractionator": (3, 5, 2, 35),
        "quadruple_tank": (2, 2, 2, 6),
        "wood_berry": (2, 1, 1, 6),
    }


def test_every_model_lets_its_sensors_tell_about_its_estimates() -> None:
    """In each, some disturbance reaches a sensor and an estimate; without one there is no soft sensor."""
    for name in published_models():
        spec = model(name)
        for estimate in spec.estimates:
            shared = [
                disturbance.name
                for disturbance in spec.disturbances
                if estimate.tag in reached(spec, disturbance.name, disturbance.at_input)
                and reached(spec, disturbance.name, disturbance.at_input)
                & {sensor.tag for sensor in spec.sensors}
            ]
            assert shared, (name, estimate.tag)


def reached(spec: UnitSpec, name: str, at_input: str | None) -> set[str]:
    return {path.target for path in spec.paths if path.source in (name, at_input)}


def test_an_unknown_model_is_refused_with_the_known_ones() -> None:
    with pytest.raises(Problem, match=r"one of heavy_oil_fractionator, .* did you mean 'wood_berry'\?"):
        published_model_path("woodberry")


def test_every_model_has_its_provenance_and_marks_what_is_not_published() -> None:
    provenance = published_model_path("wood_berry").with_name("PROVENANCE.md").read_text(encoding="utf-8")
    for name in published_models():
        assert f"\n## {name}\n" in provenance
        text = published_model_path(name).read_text(encoding="utf-8")
        unpublished = [
            line for line in text.splitlines() if line.startswith(("noise_sd", "sd =", "sample_time"))
        ]
        assert unpublished
        assert all(line.endswith("# own choice") for line in unpublished)


def test_wood_berry_has_the_published_numbers() -> None:
    found = {
        pair: (path.gain, path.time_constants[0] / 60.0, path.dead_time / 60.0)
        for pair, path in paths_of("wood_berry").items()
    }
    assert found == {pair: pytest.approx(numbers, rel=1e-15) for pair, numbers in WOOD_BERRY.items()}
    spec = model("wood_berry")
    assert [item.operating_point for item in spec.inputs] == [1.95, 1.71]  # READ
    assert (spec.sensors[0].operating_point, spec.estimates[0].operating_point) == (96.25, 0.50)  # READ


def test_wood_berry_gains_have_the_known_determinant_and_relative_gain() -> None:
    """COMPUTED from the published gains: -123.58 and 2.0094."""
    matrix = gains("wood_berry", ["AI4101", "AY4102"], ["FI4101", "FI4102"])
    assert np.linalg.det(matrix) == pytest.approx(-123.58, abs=0.005)
    assert relative_gains(matrix)[0, 0] == pytest.approx(2.0094, abs=5e-5)


def test_the_fractionator_has_the_published_numbers() -> None:
    paths = paths_of("heavy_oil_fractionator")
    for target, (gain, lag, dead) in FRACTIONATOR.items():
        for column, source in enumerate(FRACTIONATOR_SOURCES):
            path = paths[source, target]
            assert (path.gain, path.time_constants) == (gain[column], (lag[column] * 60.0,))
            assert path.dead_time == dead[column] * 60.0
    assert len(paths) == 35
    assert {item.range for item in model("heavy_oil_fractionator").inputs} == {(-0.5, 0.5)}  # READ


def test_the_fractionator_has_the_known_determinant_and_relative_gains() -> None:
    """READ and COMPUTED for y1, y2, y7 by u1, u2, u3: determinant 20.85 and the array below."""
    matrix = gains("heavy_oil_fractionator", ["AY5201", "AY5202", "TI5207"], ["FI5201", "FI5202", "JI5203"])
    assert np.linalg.det(matrix) == pytest.approx(20.850, abs=5e-4)
    known = [[2.076, -0.729, -0.347], [3.424, 0.934, -3.358], [-4.500, 0.795, 4.705]]
    assert relative_gains(matrix) == pytest.approx(np.array(known), abs=5e-4)


# Johansson, IEEE Trans. Control Syst. Technol. 8 (2000) 456-465, minimum-phase point. READ (second-hand).
AREA = np.array([28.0, 32.0, 28.0, 32.0])
HOLE = np.array([0.071, 0.057, 0.071, 0.057])
PUMP = np.array([3.33, 3.35])
VALVE = np.array([0.70, 0.60])
GRAVITY = 981.0
VOLTAGE = np.array([3.0, 3.0])


def tank_balance(level: NDArray[np.float64], voltage: NDArray[np.float64]) -> NDArray[np.float64]:
    """Rates of the four levels, cm/s: Torricelli's outflow, tank 3 above 1 and 4 above 2."""
    out = HOLE * np.sqrt(2.0 * GRAVITY * level)
    pumped = PUMP * voltage
    flow_in = np.array(
        [
            VALVE[0] * pumped[0] + out[2],
            VALVE[1] * pumped[1] + out[3],
            (1.0 - VALVE[1]) * pumped[1],
            (1.0 - VALVE[0]) * pumped[0],
        ]
    )
    rates: NDArray[np.float64] = (flow_in - out) / AREA
    return rates


def equilibrium() -> NDArray[np.float64]:
    """Newton's method with a numerical Jacobian, from the published, rounded levels."""
    level = np.array([12.4, 12.7, 1.8, 1.4])
    for _ in range(30):
        step = np.linalg.solve(jacobian_by_level(level), tank_balance(level, VOLTAGE))
        level = level - step
    assert np.abs(tank_balance(level, VOLTAGE)).max() < 1e-12
    return level


def jacobian_by_level(level: NDArray[np.float64]) -> NDArray[np.float64]:
    columns = []
    for shift in np.eye(4) * 1e-5:
        columns.append((tank_balance(level + shift, VOLTAGE) - tank_balance(level - shift, VOLTAGE)) / 2e-5)
    return np.array(columns).T


def test_quadruple_tank_stands_at_the_solved_equilibrium() -> None:
    spec = model("quadruple_tank")
    found = [sensor.operating_point for sensor in spec.sensors]
    found += [estimate.operating_point for estimate in spec.estimates]
    assert found == pytest.approx(list(equilibrium()), rel=5e-6)
    # COMPUTED independently, from the publication's parameters, to the digits given there.
    assert found == pytest.approx([12.263, 12.783, 1.634, 1.409], abs=5e-4)


def test_quadruple_tank_has_the_time_constants_of_the_linearised_balance() -> None:
    """T = (A/a) sqrt(2 h / g). COMPUTED 62.4 90.6 22.8 30.1; the paper prints 62 90 23 30."""
    lags = AREA / HOLE * np.sqrt(2.0 * equilibrium() / GRAVITY)
    assert list(lags) == pytest.approx([62.4, 90.6, 22.8, 30.1], abs=0.05)
    expected = {
        ("EI6101", "LI6101"): [lags[0]],
        ("EI6102", "LI6101"): [lags[2], lags[0]],
        ("EI6101", "LI6102"): [lags[3], lags[1]],
        ("EI6102", "LI6102"): [lags[1]],
        ("EI6102", "LY6103"): [lags[2]],
        ("EI6101", "LY6104"): [lags[3]],
    }
    found = {pair: list(path.time_constants) for pair, path in paths_of("quadruple_tank").items()}
    assert found == {pair: pytest.approx(values, rel=5e-6) for pair, values in expected.items()}


def response_of(path: PathSpec, s: complex) -> complex:
    assert path.gain is not None
    return path.gain / math.prod(1.0 + s * lag for lag in path.time_constants)


def test_quadruple_tank_responds_like_its_numerically_linearised_balance() -> None:
    """G(s) = C (sI - A)^-1 B by numerical Jacobians, at four frequencies, against the file."""
    level = equilibrium()
    by_level = jacobian_by_level(level)
    by_voltage = np.array(
        [
            (tank_balance(level, VOLTAGE + shift) - tank_balance(level, VOLTAGE - shift)) / 2e-5
            for shift in np.eye(2) * 1e-5
        ]
    ).T
    paths = paths_of("quadruple_tank")
    for s in (0.0, 0.003j, 0.02j, 0.3j):
        response = np.linalg.solve(s * np.eye(4) - by_level, by_voltage.astype(np.complex128))
        for row, target in enumerate(("LI6101", "LI6102", "LY6103", "LY6104")):
            for column, source in enumerate(("EI6101", "EI6102")):
                path = paths.get((source, target))
                found = 0.0 if path is None else response_of(path, s)
                assert found == pytest.approx(response[row, column], rel=2e-5, abs=1e-9)


def test_quadruple_tank_is_at_its_minimum_phase_point() -> None:
    """Relative gain 1.40 COMPUTED; zeros -0.060 and -0.018 MEMORY of the paper, both in the left half plane.

    COMPUTED -0.0597 and -0.0175 at the paper's rounded levels, so only roughly those at the equilibrium.
    """
    matrix = gains("quadruple_tank", ["LI6101", "LI6102"], ["EI6101", "EI6102"])
    assert relative_gains(matrix)[0, 0] == pytest.approx(1.40, abs=0.005)
    lags = {pair: path.time_constants for pair, path in paths_of("quadruple_tank").items()}
    (t3, _), (t4, _) = lags["EI6102", "LI6101"], lags["EI6101", "LI6102"]
    ratio = matrix[0, 1] * matrix[1, 0] / (matrix[0, 0] * matrix[1, 1])
    zeros = sorted(np.roots([t3 * t4, t3 + t4, 1.0 - ratio]))
    assert zeros == pytest.approx([-0.060, -0.0175], abs=0.002)
