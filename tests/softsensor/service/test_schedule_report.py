"""What `check` says of models that change with an input: a line for each point, and numbers of the model at rest there."""

from __future__ import annotations

import numpy as np
import pytest
from independent.dense_filter import stochastic
from scipy.linalg import solve_discrete_are

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from softsensor.service.model_report import ModelReport, model_report
from softsensor.service.report_tables import knowledge_tables, paths_table

TEXT = """
[unit]
name = "E-301"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 10.0
range = [0.0, 20.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]

[[disturbance]]
name = "feed"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "feed"
to = "TI1"
dead_time = "25 s"
schedule = { tag = "FI1", at = [8, 12], gain = [20, 4], time_constants = [["6 min"], ["3 min"]] }

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.9
time_constants = ["6 min"]
"""
SPEC = parse_model_text(TEXT, "m.toml")


@pytest.fixture(scope="module")
def report() -> ModelReport:
    return model_report(build_plant_model(SPEC))


def settled_sd(value: float) -> float:
    """Of the estimate with the flow at rest, by scipy's Riccati equation on the dense model."""
    model = stochastic(SPEC, {"FI1": value})
    C, r = model.C[:1], np.array([[0.15**2]])
    P = solve_discrete_are(model.A.T, C.T, model.Q, r)
    after = P - P @ C.T @ np.linalg.solve(C @ P @ C.T + r, C @ P)
    return float(np.sqrt(model.C[1] @ after @ model.C[1]))


def test_along_the_schedule_the_sd_is_that_of_the_settled_filter(report: ModelReport) -> None:
    assert [(item.tag, item.value, item.estimate) for item in report.along_schedules] == [
        ("FI1", 8.0, "AY1"),
        ("FI1", 12.0, "AY1"),
    ]
    for item in report.along_schedules:
        assert item.sd_with_sensors == pytest.approx(settled_sd(item.value), rel=1e-8)
    assert report.estimates[0].sd_with_sensors == pytest.approx(settled_sd(10.0), rel=1e-8)
    low, high = (item.sd_with_sensors for item in report.along_schedules)
    assert low < report.estimates[0].sd_with_sensors < high


def test_each_point_has_a_line_and_the_operating_point_is_told(report: ModelReport) -> None:
    rows = [row[0] for row in paths_table(report).rows]
    assert rows == ["feed -> TI1 at FI1 = 8 m3/h", "feed -> TI1 at FI1 = 12 m3/h", "feed -> AY1"]
    assert any("are computed at FI1 = 10 m3/h" in warning for warning in report.warnings)
    titles = [table.title for table in knowledge_tables(report)]
    assert "Standard deviation of each estimate along the schedule" in titles


def test_a_model_without_schedules_has_nothing_of_it() -> None:
    text = TEXT.replace(
        'schedule = { tag = "FI1", at = [8, 12], gain = [20, 4], time_constants = [["6 min"], ["3 min"]] }',
        'gain = 12\ntime_constants = ["4.5 min"]',
    ).replace(TEXT[TEXT.index("[[input]]") : TEXT.index("[[sensor]]")], "")
    plain = model_report(build_plant_model(parse_model_text(text, "m.toml")))
    assert plain.along_schedules == ()
    assert all(not line.at for line in plain.paths)
    assert not any("computed at" in warning for warning in plain.warnings)
