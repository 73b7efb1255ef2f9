"""What smoothed estimates are and what they leave alone; their values are in tests/reference/test_smoothing_values.py."""

from __future__ import annotations

import sys
from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from independent.batch_conditioning import given_everything
from independent.random_models import random_unit
from independent.recorded_runs import Run, by_cycle, late_labs, record
from independent.replaying import arrival, design_of, readings_of
from independent.transfer_paths import Array

import softsensor
from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)
from softsensor.cli.main import main
from softsensor.errors import ReplayError
from softsensor.estimation.lab_results import LabArrival
from softsensor.readings_of_cycle import CycleReadings
from softsensor.recorded_data import ReplayResult
from softsensor.service.replay import Replay, gathered, parts_of
from softsensor.service.smoothed_run import Shelf, SmoothedRun

COLUMNS = ["time", "tag", "value", "sd", "lower", "upper"]
SPEC = random_unit(6)
"""Two estimates with laboratory results of both, dead times, disturbances that reach everything."""
CYCLES = 600
WIDE = (-1e6, 1e6)


@pytest.fixture(scope="module")
def run() -> Run:
    return record(SPEC, CYCLES, 21, gaps=0.2)


@pytest.fixture(scope="module")
def labs(run: Run) -> pd.DataFrame:
    return late_labs(run, 9, 3, latest=80)[0]


@pytest.fixture(scope="module")
def result(run: Run, labs: pd.DataFrame) -> ReplayResult:
    return softsensor.replay(build_plant_model(SPEC), run.history(), labs, smooth=True)


def table(result: ReplayResult) -> pd.DataFrame:
    assert result.smoothed is not None
    return result.smoothed


def tags_of(spec: UnitSpec) -> list[str]:
    return [item.tag for item in spec.estimates]


def smoothed_in_chunks(
    running: Replay, chunk: int, at_once: int = 100, folder: Path | None = None
) -> tuple[Array, Array]:
    """Smoothed estimates and sd of a replay, with a state kept every ``chunk`` cycles."""
    with SmoothedRun(running.design, folder, chunk) as smoothing:
        for _ in gathered(smoothing.keeping(running.stretches()), at_once):
            pass
        parts = list(smoothing.cycles(running))
    return np.concatenate([part.estimate for part in parts]), np.concatenate([part.sd for part in parts])


def test_it_is_not_there_unless_asked_for(run: Run) -> None:
    assert softsensor.replay(build_plant_model(SPEC), run.history()).smoothed is None


def test_it_has_a_row_for_every_row_of_the_estimates(result: ReplayResult) -> None:
    smoothed = table(result)
    assert list(smoothed.columns) == COLUMNS
    pd.testing.assert_frame_equal(smoothed[["time", "tag"]], result.estimates[["time", "tag"]])
    half = 1.959963984540054 * smoothed["sd"]
    np.testing.assert_array_equal(smoothed["lower"], smoothed["value"] - half)
    np.testing.assert_array_equal(smoothed["upper"], smoothed["value"] + half)


def test_it_leaves_everything_else_as_it_was(run: Run, labs: pd.DataFrame, result: ReplayResult) -> None:
    plain = softsensor.replay(build_plant_model(SPEC), run.history(), labs)
    assert result.summary == plain.summary
    for name in ("estimates", "innovations", "flags", "lab_results"):
        pd.testing.assert_frame_equal(getattr(result, name), getattr(plain, name), check_exact=True)


def test_the_last_cycle_has_what_the_filter_has_to_the_last_bit(result: ReplayResult) -> None:
    last = len(SPEC.estimates)
    for name in ("value", "sd"):
        ours, filtered = table(result)[name].to_numpy()[-last:], result.estimates[name].to_numpy()[-last:]
        assert ours.tobytes() == filtered.tobytes()


@pytest.mark.parametrize("seed", range(1, 9))
def test_the_sd_is_never_larger_than_the_filters(seed: int) -> None:
    spec = random_unit(seed)
    recorded = record(spec, 300, seed, gaps=0.3)
    found = softsensor.replay(
        build_plant_model(spec), recorded.history(), late_labs(recorded, 5, seed, 60)[0], smooth=True
    )
    filtered, smoothed = found.estimates["sd"].to_numpy(), table(found)["sd"].to_numpy()
    assert (smoothed <= filtered * (1.0 + 1e-12)).all()
    assert np.median(smoothed / filtered) < 0.99


@pytest.mark.parametrize("chunk", [1, 7, 64, CYCLES, 5000])
def test_where_states_are_kept_changes_no_bit(run: Run, chunk: int, result: ReplayResult) -> None:
    design, readings = design_of(SPEC), readings_of(run)
    _, rows = late_labs(run, 9, 3, latest=80)
    arrivals = [arrival(SPEC, row) for row in rows]

    def replayed(at: int, at_once: int) -> tuple[Array, Array]:
        return smoothed_in_chunks(Replay(design, parts_of([readings], arrivals)), at, at_once)

    expected, found = replayed(256, 8192), replayed(chunk, 13)
    assert found[0].tobytes() == expected[0].tobytes()
    assert found[1].tobytes() == expected[1].tobytes()
    np.testing.assert_allclose(found[1], by_cycle(table(result), "sd", tags_of(SPEC)), rtol=1e-12)


def test_a_replay_that_begins_at_a_later_cycle_number_gives_the_same(run: Run) -> None:
    """As a replay of records does that begins at a revision's first cycle."""
    design, readings = design_of(SPEC), readings_of(run)
    _, rows = late_labs(run, 9, 3, latest=80)
    arrivals = [arrival(SPEC, row) for row in rows]
    from_zero = smoothed_in_chunks(Replay(design, parts_of([readings], arrivals)), 50)
    later = Replay(design, parts_of([readings], arrivals), first_cycle=640)
    found = smoothed_in_chunks(later, 50)
    assert [lab.status for lab in later.totals.labs] == ["used"] * len(rows)
    assert found[0].tobytes() == from_zero[0].tobytes()
    assert found[1].tobytes() == from_zero[1].tobytes()


def test_results_older_than_what_a_unit_remembers_still_count() -> None:
    """A week is remembered at least; here a sample an hour, a result in the first days, and a fortnight after it."""
    spec = replace(random_unit(1), sample_time=3600.0)
    recorded = record(spec, 520, 5, gaps=0.1)
    frame, rows = late_labs(recorded, 20, 2, latest=30)
    assert min(row.cycle for row in rows) < 520 - 14 * 24
    found = softsensor.replay(build_plant_model(spec), recorded.history(), frame, smooth=True)
    assert set(found.lab_results["status"]) == {"used"}
    value, sd = given_everything(spec, recorded.u, recorded.y, recorded.uncertain, rows)
    np.testing.assert_allclose(by_cycle(table(found), "sd", tags_of(spec)), sd, rtol=1e-8)
    np.testing.assert_allclose(by_cycle(table(found), "value", tags_of(spec)), value, rtol=1e-7)


def test_a_result_that_waits_for_a_person_does_not_count(run: Run) -> None:
    lab = SPEC.estimates[0].lab
    assert lab is not None
    impossible = pd.DataFrame(
        {
            "sampled_at": run.times[[100]],
            "reported_at": run.times[[120]],
            "tag": [lab.tag],
            "value": [run.truth[100, len(SPEC.sensors)] + 1000.0],
        }
    )
    model = build_plant_model(SPEC)
    found = softsensor.replay(model, run.history(), impossible, smooth=True)
    assert list(found.lab_results["status"]) == ["waiting for a person"]
    pd.testing.assert_frame_equal(
        table(found), table(softsensor.replay(model, run.history(), smooth=True)), check_exact=True
    )


def three_thermometers() -> UnitSpec:
    """One disturbance, seen by three sensors alike; a sensor named alone as faulty is left out."""
    sensors = tuple(SensorSpec(f"TI{i}", "degC", 50.0, WIDE, 0.2, 0.8) for i in (1, 2, 3))
    tags = [*(item.tag for item in sensors), "AY1"]
    return UnitSpec(
        "U-3", "three thermometers", 10.0,
        (InputSpec("FI1", "m3/h", 10.0, WIDE),),
        sensors,
        (EstimateSpec("AY1", "mol/L", 1.0, WIDE),),
        (DisturbanceSpec("feed", sd=1.0, time_constant=1800.0),),
        tuple(PathSpec(source, tag, 1.0, (60.0,), dead_time=25.0) for source in ("FI1", "feed") for tag in tags),
        30.0 * 86400.0, leave_out_isolated=True,
    )  # fmt: skip


def test_a_sensor_that_is_left_out_is_left_out_from_its_onset_on() -> None:
    """What the fault had done to the estimate before it was named is gone too."""
    spec = three_thermometers()
    recorded = record(spec, 400, 1, move=0.3)
    y = recorded.y.copy()
    y[200:, 1] += 6.0
    recorded = replace(recorded, y=y)
    running = Replay(design_of(spec), parts_of([readings_of(recorded)], []))
    value, sd = smoothed_in_chunks(running, 64)
    (exclusion,) = running.run.state.book.exclusions
    assert (exclusion.sensor, exclusion.until) == (1, None)
    assert 190 <= exclusion.since <= 205
    y = y.copy()
    y[exclusion.since :, 1] = np.nan
    expected, spread = given_everything(spec, recorded.u, y, recorded.uncertain)
    np.testing.assert_allclose(sd, spread, rtol=1e-8)
    assert np.abs(value - expected).max() <= 1e-8 * np.abs(expected - 1.0).max()


def test_cycles_before_every_input_has_had_a_value_are_empty(run: Run) -> None:
    history = run.history()
    history.loc[:4, SPEC.inputs[0].tag] = np.nan
    smoothed = table(softsensor.replay(build_plant_model(SPEC), history, smooth=True))
    value = by_cycle(smoothed, "value", tags_of(SPEC))
    assert np.isnan(value[:5]).all()
    assert np.isfinite(value[5:]).all()
    later = run.history().iloc[5:]
    whole = table(softsensor.replay(build_plant_model(SPEC), later, smooth=True))
    assert by_cycle(whole, "value", tags_of(SPEC)).tobytes() == value[5:].tobytes()


def test_an_estimate_that_is_known_exactly_has_an_sd_of_zero() -> None:
    """Behind a washout with a dead time nothing of a walk's start arrives: no variance, and no failure by rounding."""
    spec = UnitSpec(
        "U-1", "an estimate behind a washout", 1.0,
        (InputSpec("FI1", "m3/h", 0.0, WIDE),),
        (SensorSpec("TI1", "degC", 0.0, WIDE, 0.1, 0.4),),
        (EstimateSpec("AY1", "mol/L", 0.0, WIDE),),
        (DisturbanceSpec("feed", walk_sd=1.0, initial_sd=0.5),),
        (
            PathSpec("FI1", "TI1", 1.0, (5.0,)),
            PathSpec("feed", "TI1", 1.0, (4.0,)),
            PathSpec("feed", "AY1", dead_time=2.6, numerator=(5.0, 0.0), denominator=(121.0, 11.0, 1.0)),
        ),
        30.0 * 86400.0,
    )  # fmt: skip
    recorded = record(spec, 300, 2, gaps=0.1)
    sd = table(softsensor.replay(build_plant_model(spec), recorded.history(), smooth=True))["sd"].to_numpy()
    assert (sd[:3] <= 1e-12).all()
    assert (sd[4:] > 0.0).all()


@pytest.fixture
def command(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Runs a command in this process, which must end well."""

    def run_command(*words: object) -> None:
        monkeypatch.setattr(sys, "argv", ["softsensor", *map(str, words)])
        with pytest.raises(SystemExit) as left:
            main()
        assert not left.value.code

    return run_command


def files_of(folder: Path, name: str = "wood_berry") -> tuple[Path, Path, Path, Run]:
    """Model, history and laboratory file of a published model."""
    model = published_model_path(name)
    spec = softsensor.load_model(str(model)).spec
    recorded = record(spec, 150, 4, gaps=0.1, move=0.03)
    history, lab = folder / "history.csv", folder / "lab.csv"
    recorded.history().to_csv(history, index=False)
    late_labs(recorded, 4, 6, latest=20)[0].to_csv(lab, index=False)
    return Path(str(model)), history, lab, recorded


def contents(folder: Path, but: Sequence[str] = ()) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.name not in but}


def test_the_command_writes_one_more_file_and_the_others_as_before(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: Callable[..., None]
) -> None:
    model, history, lab, _ = files_of(tmp_path)
    command("replay", model, history, "--lab", lab, "--out", tmp_path / "plain", "--json")
    command("replay", model, history, "--lab", lab, "--out", tmp_path / "more", "--json", "--smooth")
    assert len(set(capsys.readouterr().out.splitlines())) == 1
    assert contents(tmp_path / "more", ["smoothed.csv"]) == contents(tmp_path / "plain")
    smoothed = pd.read_csv(tmp_path / "more" / "smoothed.csv", dtype=str)
    result = softsensor.replay(
        softsensor.load_model(str(model)), pd.read_csv(history), pd.read_csv(lab), smooth=True
    )
    assert list(smoothed.columns) == COLUMNS
    for name in ("value", "sd", "lower", "upper"):
        np.testing.assert_array_equal(smoothed[name].map(float), table(result)[name])
    assert list(pd.to_datetime(smoothed["time"])) == list(table(result)["time"])
    assert list(smoothed["tag"]) == list(table(result)["tag"])


def test_parquet_holds_the_same_numbers(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: Callable[..., None]
) -> None:
    model, history, lab, _ = files_of(tmp_path)
    for kind in ("csv", "parquet"):
        command(
            "replay", model, history, "--lab", lab, "--out", tmp_path / "out", "--smooth", "--format", kind
        )
    capsys.readouterr()
    whole = pd.read_parquet(tmp_path / "out" / "smoothed.parquet")
    text = pd.read_csv(tmp_path / "out" / "smoothed.csv", dtype=str)
    assert list(whole.columns) == COLUMNS
    for name in ("value", "sd", "lower", "upper"):
        np.testing.assert_array_equal(whole[name], text[name].map(float))


def test_a_shelf_gives_back_what_was_put_also_from_disk(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 1000)
    shelf = Shelf(tmp_path)
    groups = [(np.arange(k, dtype=np.int64), np.full((k, 3), k / 7.0)) for k in range(1, 60)]
    for group in groups:
        shelf.put(group)
    for number in (58, 0, 31, 58):
        for found, expected in zip(shelf.get(number), groups[number], strict=True):
            assert found.dtype == expected.dtype
            np.testing.assert_array_equal(found, expected)
    shelf.close()
    assert list(tmp_path.iterdir()) == []


def test_smoothing_from_disk_gives_the_same_bits(
    run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    design, readings = design_of(SPEC), readings_of(run)
    in_memory = smoothed_in_chunks(Replay(design, [(readings, [])]), 64)
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 1000)
    on_disk = smoothed_in_chunks(Replay(design, [(readings, [])]), 64, folder=tmp_path)
    assert on_disk[0].tobytes() == in_memory[0].tobytes()
    assert on_disk[1].tobytes() == in_memory[1].tobytes()
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written_is_told_in_one_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 10)
    shelf = Shelf(tmp_path / "missing")
    with pytest.raises(ReplayError, match=r"temporary file of the smoother: "):
        shelf.put((np.zeros(100),))
    shelf.close()


def test_what_a_run_saw_is_not_changed(run: Run) -> None:
    readings: CycleReadings = readings_of(run)
    before = [readings.u.copy(), readings.y.copy(), readings.y_quality.copy()]
    arrivals: list[LabArrival] = []
    smoothed_in_chunks(Replay(design_of(SPEC), parts_of([readings], arrivals)), 64)
    for part, kept in zip((readings.u, readings.y, readings.y_quality), before, strict=True):
        assert part.tobytes() == kept.tobytes()
