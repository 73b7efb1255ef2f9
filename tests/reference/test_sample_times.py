"""A cycle of a second and of an hour: the dense filter's numbers, live equal to replay, restarts and late arrivals."""

from __future__ import annotations

import asyncio
from pathlib import Path

import numpy as np
import pytest
from independent.dense_filter import LabRow, filter_in_order
from independent.recorded_runs import START, by_cycle, late_labs, record
from independent.replaying import design_of
from independent.small_unit import MODEL

import softsensor
from connectors.readings import Quality, Reading
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec
from softsensor.recorded_data import prepare_from_records
from softsensor.records import reader, series
from softsensor.records.engine import open_database
from softsensor.records.plant import Deed, Revision, register_revision, register_unit
from softsensor.records.upgrade import upgrade_database
from softsensor.records.writer import RecordsWriter
from softsensor.service.unit_service import UnitIdentity, UnitService

TIMES = {"1 s": 1_000_000, "1 h": 3_600_000_000}
CYCLES = 140
BEGIN = START.value // 1000


def spec_of(sample_time: str) -> UnitSpec:
    return parse_model_text(
        MODEL.replace('sample_time = "10 s"', f'sample_time = "{sample_time}"'), "r1.toml"
    )


@pytest.mark.parametrize("sample_time", TIMES)
def test_a_replay_gives_the_dense_filter_s_numbers(sample_time: str) -> None:
    spec, step = spec_of(sample_time), TIMES[sample_time]
    run = record(spec, CYCLES, 12, gaps=0.2)
    frame, rows = late_labs(run, 8, 3, latest=60)
    result = softsensor.replay(build_plant_model(spec), run.history(), frame)
    moments = result.estimates["time"].dt.tz_convert("UTC").dt.tz_localize(None).to_numpy()
    assert set(np.diff(moments.astype("datetime64[us]").astype(np.int64))) == {step}
    assert len(moments) == CYCLES
    dense = filter_in_order(spec, run.u, run.y, run.uncertain, rows)
    arrived = max(row.known_from for row in rows)
    for column, expected in (("value", dense.estimate), ("sd", dense.sd)):
        found = by_cycle(result.estimates, column, ["AY1"])
        np.testing.assert_allclose(found[arrived:], expected[arrived:], rtol=1e-8)
    assert list(result.lab_results["status"]) == ["used"] * 8


async def serve(url: str, spec: UnitSpec, step: int, cycles: range) -> None:
    """The service from its records on; TI1 of cycles 60 to 69 comes at cycle 75, a result of cycle 50 at cycle 80."""
    run, design = record(spec, CYCLES, 12), design_of(spec)
    with open_database(url) as database, RecordsWriter(database) as writer:
        with database.write() as connection:
            unit = register_unit(connection, spec.name, spec.title, BEGIN)
            revision = Revision(design.model.digest, spec.source_text, b"")
            number = register_revision(connection, unit, revision, Deed("someone", "first", BEGIN))
        service = UnitService(design, UnitIdentity(unit, number), database, writer)
        service.resume()
        for k in cycles:
            late = range(60, 70) if k == 75 else range(0)
            for at in (*late, *(() if k in range(60, 70) else (k,))):
                service.accept(Reading("TI1", float(run.y[at, 0]), BEGIN + at * step), BEGIN + k * step)
            service.accept(
                Reading("FI1", float(run.u[k, 0]), BEGIN + k * step, Quality.GOOD), BEGIN + k * step
            )
            if k == 80:
                service.accept(Reading("AL1", float(run.truth[50, 1]), BEGIN + 50 * step), BEGIN + k * step)
            await service.run_cycle(BEGIN + k * step)


@pytest.mark.parametrize("sample_time", TIMES)
def test_live_with_a_restart_gives_the_dense_filter_s_numbers_and_the_replay_s_digest(
    tmp_path: Path, sample_time: str
) -> None:
    spec, step = spec_of(sample_time), TIMES[sample_time]
    url = f"sqlite:///{(tmp_path / 'records.db').as_posix()}"
    upgrade_database(url)
    for cycles in (range(90), range(90, CYCLES)):
        asyncio.run(serve(url, spec, step, cycles))
    with open_database(url) as database:
        (block,) = series.published(database, 1, 0, CYCLES - 1)
        labs = reader.lab_results_of(database, 1)
        events = [item.event.kind for item in reader.events_since(database)]
    assert set(np.diff(block.times)) == {step}
    assert [(lab.status, lab.counted_cycle) for lab in labs] == [("used", 50)]
    assert events.count("late readings") == 1
    run = record(spec, CYCLES, 12)
    rows = [LabRow(50, 80, 0, float(run.truth[50, 1]), 0.02)]
    dense = filter_in_order(spec, run.u, run.y, np.zeros_like(run.uncertain), rows)
    np.testing.assert_allclose(block.results.estimate[80:], dense.estimate[80:], rtol=1e-8)
    np.testing.assert_allclose(block.results.sd[80:], dense.sd[80:], rtol=1e-8)
    running, _, count = prepare_from_records(build_plant_model(spec), url, spec.name, None, None)
    assert sum(len(stretch.results) for stretch in running.stretches()) == count == CYCLES
    assert running.digest == block.results.digests[-1].hex()
