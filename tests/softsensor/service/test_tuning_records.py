"""Tuning from the records is tuning from a file of the same readings, without those that say nothing of the noise."""

from __future__ import annotations

import asyncio
import json
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from independent.recorded_runs import Run, record
from sqlalchemy import delete

from connectors.readings import Quality, Reading
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec
from softsensor.cli.main import main
from softsensor.cycle import UnitDesign
from softsensor.detection.flags import RestSpell
from softsensor.errors import ReplayError
from softsensor.readings_of_cycle import CycleQuality, CycleReadings
from softsensor.records import decisions
from softsensor.records.decisions import LeftOut
from softsensor.records.engine import open_database
from softsensor.records.happenings import Flag, clear_flag, open_flag
from softsensor.records.reader import find_unit, flags_of
from softsensor.records.rests import rests_of, store_rests
from softsensor.records.tables import cycles, results
from softsensor.service.tuning_records import on_the_grid
from softsensor.unit_design import design_unit

START, STEP, CYCLES, STOPPED, BACK = 1_796_083_200_000_000, 10_000_000, 1500, 1000, 1020
MODEL = """
[unit]
name = "C-1"
title = "A column"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "kg/h"
operating_point = 10.0
range = [0.0, 20.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 80.0
range = [0.0, 200.0]
noise_sd = 0.25
tolerance = 1.0

[[sensor]]
tag = "TI2"
unit = "degC"
operating_point = 60.0
range = [0.0, 200.0]
noise_sd = 0.25
tolerance = 1.0

[[estimate]]
tag = "AY1"
unit = "mol%"
operating_point = 5.0
range = [-100.0, 100.0]
lab = { tag = "AL1", sd = 0.1 }

[[disturbance]]
name = "feed"
sd = 0.6
time_constant = "8 min"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = 0.5
time_constants = ["50 s"]

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 1.0
time_constants = ["40 s"]

[[transfer_function]]
from = "feed"
to = "TI2"
gain = 0.7
time_constants = ["80 s"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.8
time_constants = ["60 s"]
"""
LEFT_OUT, FLAGGED, RESTED = (100, 140), (300, 350), (1200, 1230)
"""Cycles of what is put on record by hand: TI1 left out, TI2 flagged, all tests resting."""


@pytest.fixture(scope="module")
def own_design() -> UnitDesign:
    return design_unit(build_plant_model(parse_model_text(MODEL, "c1.toml")))


@pytest.fixture(scope="module")
def run(own_design: UnitDesign) -> Run:
    spec: UnitSpec = own_design.model.spec
    sensors = tuple(replace(item, noise_sd=0.2) for item in spec.sensors)
    return record(replace(spec, sensors=sensors), CYCLES, 3, gaps=0.01, move=0.2)


@pytest.fixture(scope="module")
def labs(run: Run) -> list[tuple[int, int, float]]:
    """Sampled in a cycle, reported in another, value."""
    error = np.random.default_rng(4).normal(0.0, 0.6, CYCLES)
    sampled = [k for k in range(15, CYCLES - 15, 9) if not STOPPED - 9 <= k < BACK]
    return [(k, k + 4, round(float(run.truth[k, 2] + error[k]), 6)) for k in sampled]


@pytest.fixture(scope="module")
def url(own_design: UnitDesign, run: Run, labs: Any, story: Any, new_bench: Any, new_url: Any) -> str:
    """The unit on record: a service that was started twice, and 20 cycles of which nothing is on record."""
    told = type(story)({})
    for k in range(CYCLES):
        before = START + k * STEP - 1_000_000
        told.add(k, Reading("FI1", float(run.u[k, 0]), before))
        for i, tag in enumerate(("TI1", "TI2")):
            if np.isfinite(run.y[k, i]):
                quality = Quality.UNCERTAIN if run.uncertain[k, i] else Quality.GOOD
                told.add(k, Reading(tag, float(run.y[k, i]), before, quality))
    for sampled, reported, value in labs:
        told.add(reported, Reading("AL1", value, START + sampled * STEP - 3_000_000))
    address: str = new_url()
    bench = new_bench(own_design, address)
    asyncio.run(bench.run(told, 0, 700, cut=False))
    asyncio.run(bench.run(told, 700, CYCLES, cut=False))
    on_record(address)
    return address


def time(cycle: int) -> int:
    return START + cycle * STEP


def on_record(url: str) -> None:
    with open_database(url) as database:
        unit = find_unit(database, "C-1").id
        assert flags_of(database, unit) == []
        with database.write() as connection:
            decisions.store_left_out(connection, unit, [LeftOut("TI1", *map(time, LEFT_OUT), True)])
            begin, end = map(time, RESTED)
            store_rests(connection, unit, [RestSpell("maintenance", "", begin, end, "by hand")])
            begin, end = map(time, FLAGGED)
            flag = Flag("by hand", "TI2", "bias", begin, begin + 5 * STEP, 1.0, 0.1, 0.9, ("TI2",))
            open_flag(connection, unit, flag)
            clear_flag(connection, "by hand", end, "by hand")
            for table in (results, cycles):
                stopped = (table.c.cycle >= STOPPED) & (table.c.cycle < BACK)
                connection.execute(delete(table).where(table.c.unit_id == unit, stopped))


def left_out(url: str) -> np.ndarray:
    """(cycles, 2) whose readings are to be left out, worked out cycle by cycle."""
    out = np.zeros((CYCLES, 2), dtype=bool)
    with open_database(url) as database:
        rests = rests_of(database, find_unit(database, "C-1").id)
    assert all(rest.tag == "" for rest in rests)
    for k in range(CYCLES):
        resting = any(
            rest.since_us <= time(k) and (rest.until_us is None or time(k) < rest.until_us) for rest in rests
        )
        out[k, 0] = resting or LEFT_OUT[0] <= k < LEFT_OUT[1] or STOPPED <= k < BACK
        out[k, 1] = resting or FLAGGED[0] <= k < FLAGGED[1] or STOPPED <= k < BACK
    assert out[slice(*RESTED)].all()
    return out


def moment(us: int) -> str:
    return str(pd.Timestamp(us, unit="us", tz="UTC").isoformat())


@pytest.fixture(scope="module")
def files(
    url: str, run: Run, labs: list[tuple[int, int, float]], tmp_path_factory: pytest.TempPathFactory
) -> Path:
    """Model, history and laboratory results of the same readings."""
    folder = tmp_path_factory.mktemp("files")
    out = left_out(url)
    stopped = np.isin(np.arange(CYCLES), np.arange(STOPPED, BACK))
    u = run.u[:, 0].copy()
    u[stopped] = u[STOPPED - 1]
    columns: dict[str, Any] = {
        "time": [moment(time(k)) for k in range(CYCLES)],
        "FI1": u,
        "FI1.quality": np.where(stopped, "Bad", "Good"),
    }
    for i, tag in enumerate(("TI1", "TI2")):
        columns[tag] = np.where(out[:, i], np.nan, run.y[:, i])
        columns[f"{tag}.quality"] = np.where(run.uncertain[:, i], "Uncertain", "Good")
    pd.DataFrame(columns).to_csv(folder / "history.csv", index=False)
    rows = [
        (moment(time(k) - 3_000_000), moment(time(at) - 500_000), "AL1", value)
        for k, at, value in labs
        if not out[k - 1].all()
    ]
    pd.DataFrame(rows, columns=["sampled_at", "reported_at", "tag", "value"]).to_csv(
        folder / "lab.csv", index=False
    )
    (folder / "c1.toml").write_text(MODEL, encoding="utf-8")
    return folder


@pytest.fixture
def command(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Any:
    def run(*arguments: object) -> tuple[int, str, str]:
        monkeypatch.setattr(sys, "argv", ["softsensor", *map(str, arguments)])
        with pytest.raises(SystemExit) as left:
            main()
        said = capsys.readouterr()
        return int(left.value.code or 0), said.out, said.err

    return run


SAME = ("unit", "accepted", "refusals", "from", "judged_from", "to", "cycles", "readings", "log_likelihood")
SAME += ("log_likelihood_judged", "numbers", "sensors", "intervals")


@pytest.mark.parametrize("only", [(), ("--interval-only",)])
def test_from_the_records_it_is_the_same_as_from_files(
    command: Any, files: Path, url: str, run: Run, tmp_path: Path, only: tuple[str, ...]
) -> None:
    model, one, two = files / "c1.toml", tmp_path / "one.toml", tmp_path / "two.toml"
    lab = ("--lab", files / "lab.csv")
    status, said, error = command("tune", model, files / "history.csv", *lab, "--out", one, "--json", *only)
    from_files = json.loads(said)
    assert (status, error, from_files["refusals"]) == (0, "", [])

    status, said, error = command("tune", model, url, "--out", two, "--json", *only)
    from_records = json.loads(said)

    assert (status, error) == (0, "")
    for name in SAME:
        assert from_records[name] == from_files[name], name
    assert one.read_text(encoding="utf-8") == two.read_text(encoding="utf-8")
    assert from_records["intervals"][0]["scale"] > 2.0
    assert from_records["history"] == "records of C-1"
    notes = " ".join(from_records["notes"])
    assert "20 cycles are not on record" in notes
    out, flagged = (
        int(np.isfinite(run.y[slice(*LEFT_OUT), 0]).sum()),
        np.isfinite(run.y[slice(*FLAGGED), 1]),
    )
    for part in (
        f"TI1: {out} readings left out: it was left out of the estimate",
        f"TI2: {int(flagged.sum())} readings left out: a flag was open on it or on its group",
        "readings left out: the tests rested",
        "laboratory results left out: sampled while the tests rested",
    ):
        assert part in notes


@pytest.mark.parametrize(
    "case", ["laboratory file", "away", "no unit", "no cycles", "no zone", "no address", "a file and a unit"]
)
def test_what_cannot_be_tuned_from_ends_with_2(
    command: Any, files: Path, url: str, tmp_path: Path, case: str
) -> None:
    away = f"sqlite:///{(tmp_path / 'none.db').as_posix()}"
    arguments, expected = {
        "laboratory file": ((url, "--lab", files / "lab.csv"), "--lab: the records hold"),
        "away": ((away,), "does not exist"),
        "no unit": ((url, "--unit", "C-2"), "holds no unit C-2; there are: C-1"),
        "no cycles": ((url, "--from", "2030-01-01T00:00:00Z"), "no cycle of C-1 is on record"),
        "no zone": ((url, "--to", "2026-12-01T00:00:00"), "names no time zone"),
        "no address": (("sqlite://",), "sqlite"),
        "a file and a unit": ((files / "history.csv", "--unit", "C-1"), "only with a database's address"),
    }[case]
    out = tmp_path / "out.toml"

    status, said, error = command("tune", files / "c1.toml", *arguments, "--out", out)

    assert (status, said) == (2, "")
    assert expected in error
    assert "Traceback" not in error
    assert not out.exists()


def test_a_model_that_never_ran_takes_the_readings_of_the_revision_that_ran_last(
    command: Any, files: Path, url: str, tmp_path: Path
) -> None:
    other, out = tmp_path / "other.toml", tmp_path / "out.toml"
    other.write_text(MODEL.replace("gain = 0.7", "gain = 0.6"), encoding="utf-8")

    _, said, _ = command("tune", other, url, "--out", out, "--json", "--to", "2026-12-01T03:00:00Z")

    document = json.loads(said)
    assert "this model file has not run in this period" in document["notes"][0]
    assert document["cycles"]["fitted"] + document["cycles"]["judged"] == 1080
    assert document["to"] == "2026-12-01T02:59:50Z"


def cycles_at(*numbers: int) -> CycleReadings:
    times = np.array([START + k * STEP for k in numbers], dtype=np.int64)
    good = np.zeros((len(numbers), 1), dtype=np.int8)
    values = np.array(numbers, dtype=float)[:, None]
    return CycleReadings(times, values, good, values + 100.0, good)


def test_cycles_that_are_not_on_record_are_put_in_as_missing() -> None:
    found, notes = on_the_grid([cycles_at(0, 1, 2), cycles_at(5, 6)], STEP)

    assert found.times.tolist() == [START + k * STEP for k in range(7)]
    assert found.u[:, 0].tolist() == [0.0, 1.0, 2.0, 2.0, 2.0, 5.0, 6.0]
    assert found.u_quality[:, 0].tolist() == [0, 0, 0, CycleQuality.STALE, CycleQuality.STALE, 0, 0]
    assert np.flatnonzero(np.isnan(found.y[:, 0])).tolist() == [3, 4]
    assert found.y_quality[3, 0] == CycleQuality.MISSING
    assert notes == ("2 cycles are not on record (service stopped); their readings are missing",)


def test_other_sample_times_and_mostly_missing_cycles_are_refused() -> None:
    with pytest.raises(ReplayError, match="not a whole number of sample times"):
        on_the_grid([cycles_at(0, 1, 2)], 2 * STEP)
    with pytest.raises(ReplayError, match="only 3 are on record"):
        on_the_grid([cycles_at(0, 1, 20)], STEP)
