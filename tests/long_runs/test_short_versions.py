"""Short versions of the long runs; the long ones have commands of their own, and their results stand in the handbook."""

from __future__ import annotations

import pytest
from long_runs.calibration import SUPPOSED, moments, share_true, together
from long_runs.models import COLUMN, design_named
from long_runs.naming import outcomes
from long_runs.promise import without_fault
from long_runs.schedules import SPEC, judged, simulated
from long_runs.slow_drift import patient_reactor, run_one
from scipy.stats import binom


def test_the_promise_is_kept_without_a_fault() -> None:
    """Three years of the column: no more alarms than the promise allows, but for chance, and not many fewer."""
    (row,) = without_fault(design_named(COLUMN), 3.0, seed=3)
    low, high = row.interval()
    assert high > row.promised
    assert low < 2.0 * row.promised
    assert row.flags + row.others <= row.alarms


@pytest.mark.parametrize(("kind", "outcome"), [("step", "named right"), ("ramp", "named right")])
def test_a_sensor_s_fault_is_named(kind: str, outcome: str) -> None:
    counted, _ = outcomes(kind, 15)
    assert counted[outcome] >= binom.ppf(0.01, 15, 0.97)
    assert counted["a sensor named wrongly"] <= 1


def test_a_disturbance_s_step_names_no_sensor() -> None:
    counted, _ = outcomes("disturbance", 10)
    assert counted["named right"] + counted["a sensor named wrongly"] == 0


def test_a_flow_meter_s_error_is_the_flow_meter_s() -> None:
    counted, _ = outcomes("flow meter", 15)
    assert counted["named right"] + counted["group with it"] >= binom.ppf(0.01, 15, 0.9)


def test_wrong_gains_are_the_model_s() -> None:
    counted, _ = outcomes("gain", 10)
    assert counted["a sensor named wrongly"] <= binom.ppf(0.99, 10, 0.05)
    assert counted["model"] + counted["group with it"] >= 8


def test_what_is_called_probable_is_mostly_so() -> None:
    """The two ends; how often a probability in between is right needs the long run."""
    design = design_named(COLUMN)
    found = together([moments(design, 20, kind) for kind in SUPPOSED])
    assert share_true(found, 0.95, 1.0) > 0.9
    assert share_true(found, 0.0, 0.05) < 0.02


def test_a_drift_that_the_filter_follows_is_found_by_the_patient_pair_alone() -> None:
    """0.3 K a day for a day, a thirtieth of what the usual pair is likely to find so soon; one seeded plant."""
    run = run_one(patient_reactor(), 0.3, 1, days=1.0)
    assert run.counts
    assert run.found(run.bank) is not None
    assert run.found(run.usual) is None


def test_a_schedule_keeps_the_interval_s_promise_where_the_flow_wanders() -> None:
    """Fourteen hours: the error stays correlated for half an hour, so the share scatters by a few percent."""
    found = judged(simulated(5000, 1), SPEC)
    assert 0.90 < found.coverage < 0.99
    assert 0.94 < found.nis < 1.06
    assert found.flags == 0
