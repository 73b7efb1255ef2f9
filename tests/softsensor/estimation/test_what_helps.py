"""What would help an estimate, against the textbook recursion cycle by cycle."""

from __future__ import annotations

import math
from dataclasses import replace
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from plant_models.second_instrument import with_second
from plant_models.simulators import reactor_model_path
from softsensor.estimation.observability import estimate_knowledge
from softsensor.estimation.what_helps import GROWTH_TIMES, prospects
from softsensor.unit_design import load_model

LIBRARY = Path(str(files("plant_models.library")))


def corrected(P: np.ndarray, C: np.ndarray, R: np.ndarray) -> np.ndarray:
    """Joseph's form."""
    K = P @ C.T @ np.linalg.inv(C @ P @ C.T + R)
    left = np.eye(len(P)) - K @ C
    return left @ P @ left.T + K @ R @ K.T


def by_recursion(model: PlantModel, sensors: list[int], every: int, cycles: int) -> np.ndarray:
    """sd of the first estimate after the readings of each cycle, before that cycle's laboratory result, if any."""
    part, spec = model.stochastic, model.spec
    rows, R = part.C[sensors], np.diag([spec.sensors[i].noise_sd ** 2 for i in sensors])
    row = part.C[len(spec.sensors)][None, :]
    lab = spec.estimates[0].lab
    assert lab is not None
    P, found = part.P0.copy(), []
    for k in range(cycles):
        P = corrected(P, rows, R)
        found.append(math.sqrt(float(row[0] @ P @ row[0])))
        if k % every == every - 1:
            P = corrected(P, row, np.array([[lab.sd**2]]))
        P = part.A @ P @ part.A.T + np.diag(part.q)
    return spec.estimates[0].interval_scale * np.array(found)


def with_offset() -> PlantModel:
    """Wood & Berry with an offset of the estimate that walks, and one reading each ten minutes."""
    spec = load_model(LIBRARY / "wood_berry.toml").spec
    (estimate,) = spec.estimates
    estimate = replace(estimate, bias_walk_sd=0.02, bias_initial_sd=0.05, interval_scale=1.3)
    return build_plant_model(replace(spec, estimates=(estimate,), sample_time=600.0))


def test_just_before_the_next_result_it_is_what_the_recursion_settles_at() -> None:
    model = with_offset()
    (item,) = prospects(model, lab_interval=4 * 3600.0)
    assert item.lab_interval == 4 * 3600.0
    settled = by_recursion(model, [0], 24, 24 * 60)
    assert item.sd == pytest.approx(settled[-1], rel=1e-6)
    changes = {change.what: change.sd for change in item.changes}
    assert set(changes) == {"AI4101 lost", "a second AI4101", "laboratory results twice as often"}
    more = by_recursion(model, [0], 12, 24 * 60)
    assert changes["laboratory results twice as often"] == pytest.approx(more[-1], rel=1e-6)
    assert changes["a second AI4101"] == pytest.approx(by_recursion(model, [0, 0], 24, 1440)[-1], rel=1e-6)
    assert changes["AI4101 lost"] == pytest.approx(by_recursion(model, [], 24, 1440)[-1], rel=1e-6)
    assert [change.sd for change in item.changes] == sorted(changes.values())


def test_after_one_result_the_sd_grows_back_to_the_settled_one() -> None:
    model = load_model(LIBRARY / "wood_berry.toml")
    (item,), (known,) = prospects(model), estimate_knowledge(model)
    sds = [sd for _, sd in item.after_result]
    assert tuple(time for time, _ in item.after_result) == GROWTH_TIMES
    assert known.lab is not None
    assert known.lab.sd < sds[0] < known.sd_with_sensors * (1.0 + 1e-9)
    assert sds == sorted(sds)
    assert sds[-1] == pytest.approx(known.sd_with_sensors, rel=1e-9)


def test_without_laboratory_results_the_settled_sd_is_compared() -> None:
    model = load_model(LIBRARY / "quadruple_tank.toml")
    for item, known in zip(prospects(model), estimate_knowledge(model), strict=True):
        assert item.lab_interval is None
        assert item.after_result == ()
        assert item.sd == pytest.approx(known.sd_with_sensors)
        changes = {change.what: change.sd for change in item.changes}
        assert {f"{tag} lost": sd for tag, sd in known.sd_without} == pytest.approx(
            {what: sd for what, sd in changes.items() if what.endswith(" lost")}
        )
        assert changes["a second LI6101"] < item.sd


def test_an_offset_that_only_the_laboratory_sees_is_helped_by_the_laboratory_alone() -> None:
    (item,) = prospects(load_model(reactor_model_path()))
    assert item.changes[0].what == "laboratory results twice as often"
    assert item.changes[0].sd < 0.8 * item.sd
    assert item.changes[1].sd > 0.99 * item.sd


def test_a_constant_offset_is_learnt_from_the_laboratory_in_the_end() -> None:
    """It never settles within any number of results: stretches of results are doubled until nothing changes."""
    model = with_offset()
    (estimate,) = model.spec.estimates
    constant = build_plant_model(
        replace(model.spec, estimates=(replace(estimate, bias_walk_sd=0.0, bias_initial_sd=0.3),))
    )
    without = build_plant_model(
        replace(model.spec, estimates=(replace(estimate, bias_walk_sd=0.0, bias_initial_sd=0.0),))
    )
    (learnt,), (never_there,) = prospects(constant), prospects(without)
    assert learnt.sd == pytest.approx(never_there.sd, rel=1e-5)


def test_a_second_instrument_has_an_offset_of_its_own() -> None:
    """Two that drift apart are worth more than one read twice."""
    spec = with_offset().spec
    drifting = replace(spec.sensors[0], bias_walk_sd=0.05, bias_initial_sd=0.1)
    model = build_plant_model(replace(spec, sensors=(drifting,)))
    (item,) = prospects(model, lab_interval=4 * 3600.0)
    changes = {change.what: change.sd for change in item.changes}
    larger = build_plant_model(with_second(model.spec, 0))
    (estimate,) = larger.spec.estimates
    row = larger.stochastic.C[2]
    assert estimate.lab is not None
    R, lab = np.diag([drifting.noise_sd**2] * 2), np.array([[estimate.lab.sd**2]])
    P = larger.stochastic.P0.copy()
    for k in range(24 * 60):
        P = corrected(P, larger.stochastic.C[:2], R)
        sd = estimate.interval_scale * math.sqrt(float(row @ P @ row))
        if k % 24 == 23:
            P = corrected(P, row[None, :], lab)
        P = larger.stochastic.A @ P @ larger.stochastic.A.T + np.diag(larger.stochastic.q)
    assert changes["a second AI4101"] == pytest.approx(sd, rel=1e-6)
    assert changes["a second AI4101"] < 0.99 * item.sd
