"""What cannot be told apart, against the diagnosis itself on the same noise."""

from __future__ import annotations

from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from softsensor.detection.diagnosis import judge, likelihoods, onset_ages
from softsensor.detection.follow_up import PATIENCE
from softsensor.detection.isolability import DRAWS, LOOKS, SEED, Diagnostician, InstrumentFault
from softsensor.unit_design import design_unit, load_model

LIBRARY = Path(str(files("plant_models.library")))


def test_it_is_the_diagnosis_that_is_asked() -> None:
    """Probabilities of the first draws, from the diagnosis's own functions on innovations made from the same noise."""
    design = design_unit(load_model(LIBRARY / "heavy_oil_fractionator.toml")).detection
    fault = InstrumentFault(("sensor", 0), "step", 0.03, 125)
    look = 3
    logs = Diagnostician(design).log_weights(fault, look)
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
        rows = rng.standard_normal((design.window + PATIENCE, design.kernel.n_sensors))
        rows = rows[LOOKS[look] : LOOKS[look] + design.window]
        age = fault.age + LOOKS[look]
        rows[-age:] += fault.size * step[:age]
        ring = np.ascontiguousarray(rows @ np.linalg.inv(steady.whitening).T)
        found = likelihoods(
            table,
            prior_sd,
            ring,
            design.window - 1,
            steady.whitening,
            use,
            onset_ages(design.window),
            design.window,
            np.zeros(len(table), dtype=np.int64),
        )
        verdict = judge(design.suspects, found)
        weights = np.exp(logs[draw] - logs[draw].max())
        mine = dict(zip(names, weights / weights.sum(), strict=True))
        for name, probability in zip(verdict.names, verdict.probabilities, strict=True):
            assert mine[name] == pytest.approx(probability, abs=1e-6)


def test_a_large_fault_among_five_thermometers_is_named() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "heavy_oil_fractionator.toml")).detection)
    answer = asking.ask(InstrumentFault(("sensor", 2), "step", 0.1, 100))
    assert answer.named > 0.99
    assert answer.alike == ()
    assert asking.ask(InstrumentFault(("sensor", 2), "step", 0.1, 100)) == answer


def test_a_drift_of_the_only_sensor_cannot_be_told_from_what_else_drives_it() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "wood_berry.toml")).detection)
    answer = asking.ask(InstrumentFault(("sensor", 0), "ramp", 1.4 / 1440.0, 1300))
    assert answer.named < 0.05
    assert {"FI4101", "FI4102"} <= {name for name, _ in answer.alike}


def test_a_fault_of_nothing_is_taken_for_nothing() -> None:
    asking = Diagnostician(design_unit(load_model(LIBRARY / "wood_berry.toml")).detection)
    answer = asking.ask(InstrumentFault(("sensor", 0), "ramp", 0.0, 3000))
    assert answer.named == 0.0
    assert dict(answer.alike)["nothing"] > 0.5
