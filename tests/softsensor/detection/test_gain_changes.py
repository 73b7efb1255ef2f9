"""Wrong gains: paths' courses against the independent response, and the Bayes factors against numpy."""

from __future__ import annotations

import numpy as np
import pytest
from independent.transfer_paths import continuous, response_to_held

from plant_models.library import published_model_path
from softsensor.detection.gain_changes import (
    concerned,
    evidence_of_all,
    normal_equations,
    path_course,
    path_hypotheses,
)
from softsensor.detection.signatures import Hypothesis
from softsensor.estimation.kernel import build_kernel
from softsensor.unit_design import load_model


@pytest.mark.parametrize("name", ["wood_berry", "heavy_oil_fractionator", "quadruple_tank"])
def test_a_path_s_course_is_its_response_to_the_inputs_as_they_moved(name: str) -> None:
    model = load_model(published_model_path(name))
    kernel, spec = build_kernel(model), model.spec
    random = np.random.default_rng(2)
    jumps = random.normal(size=(300, len(spec.inputs))) * (random.random((300, len(spec.inputs))) < 0.1)
    moves = np.cumsum(jumps, axis=0) + 0.5
    paths = {f"{path.source} -> {path.target}": path for path in spec.paths}
    inputs = [item.tag for item in spec.inputs]
    found = path_hypotheses(model, kernel)
    assert len(found) == sum(
        path.source in inputs and path.target in model.sensor_tags for path in spec.paths
    )
    for item in found:
        path = paths[item.name]
        wanted = response_to_held(continuous(path, spec.sample_time), moves[:, inputs.index(path.source)])
        assert np.allclose(path_course(kernel, item.index, moves), wanted, rtol=1e-9, atol=1e-9)


def test_all_gains_together_are_the_bayes_factor_of_a_linear_model() -> None:
    """COMPUTED with numpy: log N(eps; 0, I + p^2 V V') - log N(eps; 0, I), a cycle left out."""
    random, p = np.random.default_rng(3), 0.7
    V, eps, whole = random.normal(size=(4, 30)), random.normal(size=(10, 3)), np.ones(10, dtype=np.int64)
    whole[3] = 0
    kept = np.repeat(whole, 3) == 1
    A, e = V[:, kept].T, eps.ravel()[kept]
    S = np.eye(len(e)) + p * p * A @ A.T
    wanted = -0.5 * np.linalg.slogdet(S)[1] - 0.5 * e @ np.linalg.solve(S, e) + 0.5 * e @ e
    G, g = normal_equations(V, eps, whole)
    evidence, mean = evidence_of_all(G, g, p)
    assert np.isclose(evidence, wanted, rtol=1e-9)
    assert np.allclose(mean, np.linalg.solve(A.T @ A + np.eye(4) / p**2, A.T @ e), rtol=1e-9)


def test_the_paths_that_concern_an_instrument() -> None:
    model = load_model(published_model_path("heavy_oil_fractionator"))
    kernel = build_kernel(model)
    names = path_hypotheses(model, kernel)
    blocks = np.array([item.index for item in names], dtype=np.int64)

    def of(suspect: Hypothesis | None) -> set[str]:
        return {names[k].name for k in np.flatnonzero(concerned(kernel, blocks, suspect))}

    assert of(Hypothesis("sensor", 1, "TI5204", "step", 1.0)) == {
        f"{tag} -> TI5204" for tag in ("FI5201", "FI5202", "JI5203")
    }
    assert of(Hypothesis("input", 0, "FI5201", "ramp", 1.0)) == {
        f"FI5201 -> {tag}" for tag in model.sensor_tags
    }
    assert len(of(None)) == len(of(Hypothesis("disturbance", 0, "d", "step", 1.0))) == len(names)
