"""Readings that come late end in the last bit where processing in order ends; the dense filter is the second computation."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from independent.arrival_orders import (
    CYCLES,
    Late,
    Report,
    in_order,
    outcome_of,
    random_reports,
    small_run,
    small_spec,
    there,
    with_late,
)
from independent.dense_filter import LabRow, filter_in_order
from independent.replaying import Outcome, outcome_of_replay
from independent.small_unit import MODEL, run_command

import softsensor
from softsensor.service.smoothed_run import SmoothedRun

ORDERS = 1000
TOO_OLD = 4
"""Cycles after which a reading no longer counts in the coming cycle."""


def outage(first: int, stop: int, back: float, tags: tuple[str, ...] = ("FI1", "TI1")) -> list[Late]:
    """All readings of cycles first to stop (exclusive) come together."""
    return [Late(tag, k, back) for tag in tags for k in range(first, stop) if k in there(tag)]


def assert_same(late: Outcome, ordered: Outcome, first: int) -> None:
    assert late.estimate[first:].tobytes() == ordered.estimate[first:].tobytes()
    assert late.sd[first:].tobytes() == ordered.sd[first:].tobytes()
    assert late.P.tobytes() == ordered.P.tobytes()


@pytest.mark.parametrize("tags", [("FI1",), ("TI1",), ("FI1", "TI1")])
@pytest.mark.parametrize(
    ("first", "stop", "back"), [(20, 30, 30.0), (1, 40, 50.5), (20, 66, 67.0), (60, 65, 69.0)]
)
def test_after_an_outage_the_present_is_that_of_processing_in_order(
    tags: tuple[str, ...], first: int, stop: int, back: float
) -> None:
    late = outcome_of_replay(with_late(outage(first, stop, back, tags)))
    ordered, run = outcome_of([]), small_run()
    at = int(np.ceil(back))
    assert_same(late, ordered, at)
    assert late.estimate[:first].tobytes() == ordered.estimate[:first].tobytes()
    if "TI1" in tags or np.ptp(run.u[first - 1 : stop]) > 0.0:
        assert late.estimate[first:at].tobytes() != ordered.estimate[first:at].tobytes()
    dense = filter_in_order(small_spec(), run.u, run.y, run.uncertain, [])
    np.testing.assert_allclose(late.estimate[at:], dense.estimate[at:], rtol=1e-8)
    np.testing.assert_allclose(late.sd[at:], dense.sd[at:], rtol=1e-8)


def test_a_thousand_random_orders_of_readings_and_results_end_in_the_same_bits() -> None:
    rng = np.random.default_rng(77)
    for _ in range(ORDERS):
        late = []
        for tag, first in (("FI1", 1), ("TI1", 0)):
            could = [k for k in there(tag) if first <= k < CYCLES - TOO_OLD - 1]
            for k in rng.choice(could, int(rng.integers(1, 5)), replace=False):
                late.append(Late(tag, int(k), float(rng.uniform(k + TOO_OLD, CYCLES - 1))))
        reports = random_reports(rng)
        found = outcome_of_replay(with_late(late, reports))
        last = max([item.arrived for item in late] + [item.reported for item in reports])
        assert_same(found, outcome_of(in_order(reports)), int(np.ceil(last)))


def test_the_newest_reading_counts_in_the_coming_cycle_while_it_is_not_too_old() -> None:
    """And in that one only: the estimate is that of a reading one cycle later."""
    k = next(k for k in there("TI1") if k > 20 and {k + 1, k + 2} <= set(there("TI1")))
    late = [Late("TI1", k, k + 1.5), Late("TI1", k + 1, k + 1.5), Late("TI1", k + 2, CYCLES - 1.0)]
    found, run = outcome_of_replay(with_late(late)), small_run()
    y, uncertain = run.y.copy(), run.uncertain.copy()
    y[k + 2], y[k + 1], uncertain[k + 2] = y[k + 1], np.nan, uncertain[k + 1]
    dense = filter_in_order(small_spec(), run.u, y, uncertain, [])
    np.testing.assert_allclose(
        found.estimate[k + 2 : CYCLES - 1], dense.estimate[k + 2 : CYCLES - 1], rtol=1e-8
    )


def test_what_lies_beyond_the_horizon_is_told_and_not_used() -> None:
    spec, run = replace(small_spec(), late_horizon=200.0), small_run()
    near, far = Late("TI1", there("TI1")[30], 50.0), Late("TI1", there("TI1")[5], 50.0)
    assert far.cycle + 20 < 50 <= near.cycle + 20
    running = with_late([near, far], spec=spec)
    found = outcome_of_replay(running)
    told, refused = [note.text for note in running.totals.notes if note.kind == "late readings"]
    assert told.startswith(f"late readings of TI1: the estimate has gone back {500 - 10 * near.cycle} s and")
    age = 500 - 10 * far.cycle + 3
    assert refused == (
        f"a late reading of TI1, up to {age} s old, not used: the estimate goes back 200 s at most"
    )
    y = run.y.copy()
    y[far.cycle] = np.nan
    dense = filter_in_order(spec, run.u, y, run.uncertain, [])
    np.testing.assert_allclose(found.estimate[50:], dense.estimate[50:], rtol=1e-8)


def test_smoothing_takes_late_readings_where_they_belong() -> None:
    smoothed = []
    for late in ([], outage(20, 40, 45.0)):
        running = with_late(late)
        with SmoothedRun(running.design) as smoothing:
            list(smoothing.keeping(running.stretches()))
            parts = list(smoothing.cycles(running))
        smoothed.append(np.concatenate([part.estimate for part in parts]))
    assert smoothed[0].tobytes() == smoothed[1].tobytes()


def test_a_laboratory_result_is_predicted_with_the_readings_that_came_with_it() -> None:
    run, value = small_run(), float(small_run().truth[25, 1])
    dense = filter_in_order(small_spec(), run.u, run.y, run.uncertain, [LabRow(25, 25, 0, value, 0.02)])
    found = outcome_of_replay(with_late(outage(20, 40, 40.0), [Report(25.0, 40.0, value)]))
    assert found.labs[0].predicted == pytest.approx(dense.lab_predicted[0], rel=1e-8)
    assert found.labs[0].sd == pytest.approx(dense.lab_sd[0], rel=1e-8)
    np.testing.assert_allclose(found.estimate[40:], dense.estimate[40:], rtol=1e-8)


def test_frames_and_the_command_take_late_readings(tmp_path: Path) -> None:
    """The library and ``replay --late`` give the digest of the parts above, and name what came after the end."""
    run, held_back = small_run(), range(20, 40)
    whole = run.history()
    history, rows = whole.copy(), []
    for k in held_back:
        if np.isfinite(run.y[k, 0]):
            quality = whole["TI1.quality"][k]
            rows.append((whole["time"][k], whole["time"][45], "TI1", run.y[k, 0], quality))
        history.loc[k, "TI1"] = np.nan
    rows.append((whole["time"][50], whole["time"][CYCLES - 1] + pd.Timedelta("1 s"), "TI1", 92.0, "Good"))
    late = pd.DataFrame(rows, columns=["time", "arrived_at", "tag", "value", "quality"])
    (tmp_path / "r1.toml").write_text(MODEL)
    model = softsensor.load_model(tmp_path / "r1.toml")
    result = softsensor.replay(model, history, late=late)
    value = result.estimates["value"].to_numpy()
    in_time = softsensor.replay(model, whole).estimates["value"].to_numpy()
    assert value[45:].tobytes() == in_time[45:].tobytes()
    assert value[25:45].tobytes() != in_time[25:45].tobytes()
    left_out = "late: left out, because they arrived after the last row of the history: 1 reading"
    assert left_out in result.summary["notes"]
    history.to_csv(tmp_path / "history.csv", index=False)
    late.to_csv(tmp_path / "late.csv", index=False)
    arguments = ["replay", tmp_path / "r1.toml", tmp_path / "history.csv", "--late", tmp_path / "late.csv"]
    done = run_command(*arguments, "--out", tmp_path / "out", "--json")
    assert (done.status, done.err) == (0, "")
    assert json.loads(done.out)["digest"] == result.summary["digest"]
