"""What cannot be told apart, against the diagnosis itself on the same noise."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from softsensor.detection.diagnosis import judge, likelihoods, onset_ages
from softsensor.detection.isolability import DRAWS, SEED, Diagnostician, SensorFault
from softsensor.unit_design import design_unit, load_model

LIBRARY = Path(str(files("plant_models.library")))


def test_it_is_the_diagnosis_that_is_asked() -> None:
    """Probabilities of the first draws, from the diagnosis's own functions on innovations made from the same noise."""
    design = design_unit(load_model(LIBRARY / "heavy_oil_fractionator.toml")).detection
    fault = SensorFault(0, "step", 0.03, 125)
    logs = Diagnostician(design).log_weights(fault)
    assert logs.shape[0] == DRAWS
    use = np.ones(design.kernel.n_sensors, dtype=np.int64)
    steady, table = design.table(use)
    step = next(
        table[h]
        for h, suspect in enumerate(design.suspects)
        if (suspect.source, suspect.index, suspect.shape) == ("sensor", 0, "step")
    )
    rng = np.random.default_rng(SEED)
    names = Diagnostician(design).names
    prior_sd = np.array([suspect.prior_sd for suspect in design.suspects])
    for draw in range(4):
        rows = rng.standard_normal((design.window, design.kernel.n_sensors))
        rows[-fault.age :] += fault.size * step[: fault.age]
        ring = np.ascontiguousarray(rows @ np.linalg.inv(steady.whitening).T)
        found = likelihoods(
            table, prior_sd, ring, design.window - 1, steady.whitening, use, onset_ages(design.window)
        )
        verdict = judge(design.suspects, found)
        weights = np.exp(logs[draw] - logs[draw].max())
        mine = dict(zip(names, weights / weights.sum(), strict=True))
        for name, probability in zip(verdict.names, verdict.probabilities, strict=True):
            assert mine[name] == pytest.approx(probability, abs=1e-6)


def test_a_large_fault_among_five_thermometers_is_named() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "heavy_oil_fractionator.toml")).detection)
    answer = asking.ask(SensorFault(2, "step", 0.1, 100))
    assert answer.named > 0.99
    assert answer.alike == ()
    assert asking.ask(SensorFault(2, "step", 0.1, 100)) == answer


def test_the_only_sensor_cannot_be_told_from_the_disturbance_that_it_alone_sees() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "wood_berry.toml")).detection)
    answer = asking.ask(SensorFault(0, "step", 0.3, 64))
    assert answer.named < 0.05
    assert answer.alike[0][0] == "feed flow"


def test_a_fault_of_nothing_is_taken_for_nothing() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "wood_berry.toml")).detection)
    answer = asking.ask(SensorFault(0, "ramp", 0.0, 3000))
    assert answer.named == 0.0
    assert dict(answer.alike)["nothing"] > 0.5
