"""Estimates of a unit with transforms and limits, as pages, charts and our own OPC UA server show them."""

from __future__ import annotations

import asyncio
import socket
from typing import Any

import numpy as np
import pytest
from asyncua import Client

from connectors.opcua.publisher import NAMESPACE_URI, Publisher
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.model_scale import one_from_model, variables
from softsensor.cycle import UnitDesign
from softsensor.opcua_sink import OpcUaSink, published_units
from softsensor.published import published, published_one
from softsensor.records import reader
from softsensor.records.engine import open_database
from softsensor.records.writer import RecordsWriter
from softsensor.unit_design import design_unit
from softsensor.web.chart_data import Window, estimate_columns, sensor_columns
from softsensor.web.models_in_service import ModelsInService
from softsensor.web.rows import estimate_rows, latest_cycle, sensor_rows

START, STEP, END = 1_796_083_200_000_000, 10_000_000, 80


@pytest.fixture(scope="module")
def unit(model_text: str) -> UnitDesign:
    """The thermometer TI2 is transformed by a square root, the estimate by a logarithm with a limit near its value."""
    text = model_text.replace('tag = "TI2"\n', 'tag = "TI2"\ntransform = "sqrt"\n')
    text = text.replace('tag = "AY1"\n', 'tag = "AY1"\ntransform = "log"\nlimits = [1.3, inf]\n')
    text = text.replace("gain = 0.5\n", "gain = 0.03\n").replace("gain = 9.0\n", "gain = 0.5\n")
    return design_unit(build_plant_model(parse_model_text(text, "r1.toml")))


@pytest.fixture(scope="module")
def story(unit: UnitDesign, tell: Any, model_text: str) -> Any:
    """The usual story, with readings of a likely size."""
    told = tell(build_plant_model(parse_model_text(model_text, "r1.toml")), END)
    assert {item.tag for item in variables(unit.model.spec)} >= {"FI1", "TI2", "AY1"}
    return told


def test_pages_and_charts_carry_back_what_is_on_record(
    unit: UnitDesign, story: Any, new_bench: Any, sqlite_url: str
) -> None:
    bench = new_bench(unit, sqlite_url)
    asyncio.run(bench.run(story, 0, END))
    steps, item, spec = bench.steps, unit.model.spec.estimates[0], unit.model.spec
    mean = np.array([step.results.estimate[0, 0] for step in steps])
    sd = np.array([step.results.sd[0, 0] for step in steps])
    shown = published(item, mean, sd)
    with open_database(sqlite_url) as database:
        found, models = reader.find_unit(database, "R-1"), ModelsInService(database)
        window = Window(START, START + END * STEP)
        line = estimate_columns(database, models, found, item, window)["estimate"]
        for name in ("value", "lower", "upper"):
            np.testing.assert_allclose(line[name], getattr(shown, name), rtol=1e-12)
        assert min(line["lower"]) >= 1.3
        latest, seen = latest_cycle(database, found, models.revision_of(found))
        (row,) = estimate_rows(spec, latest)
        last = published_one(item, float(mean[-1]), float(sd[-1]))
        assert (row.value, row.sd, row.lower, row.upper) == last
        sensor, i = sensor_rows(spec, latest, seen, [])[2], 2
        results = steps[-1].results
        assert sensor.predicted == one_from_model(spec.sensors[i], float(results.predicted[0, i]))
        assert abs(sensor.predicted - 80.0) < 3.0
        assert sensor.reading == results.reading[0, i]
        columns = sensor_columns(database, models, found, "TI2", window)
        readings = [value for value in columns["reading"]["value"] if value is not None]
        expected = [step.results.reading[0, i] for step in steps]
        np.testing.assert_allclose(readings, [value for value in expected if np.isfinite(value)], rtol=1e-12)


def test_our_opc_ua_server_shows_the_carried_back_interval(
    unit: UnitDesign, story: Any, new_bench: Any, sqlite_url: str
) -> None:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        endpoint = f"opc.tcp://127.0.0.1:{probe.getsockname()[1]}"

    async def scenario() -> tuple[dict[str, float], Any]:
        bench = new_bench(unit, sqlite_url)
        seen: dict[str, float] = {}
        async with Publisher(endpoint, published_units([unit.model])) as publisher:
            with open_database(sqlite_url) as database, RecordsWriter(database) as writer:
                service = bench.service(database, writer)
                service.resume()
                service.coming_cycle(START)
                for number in range(10):
                    for step in await bench.cycle(service, story, number):
                        await OpcUaSink(publisher).publish(service, step)
            async with Client(endpoint) as client:
                index = await client.get_namespace_index(NAMESPACE_URI)
                path = [f"{index}:{name}" for name in ("R-1", "Estimates", "AY1")]
                node = await client.nodes.objects.get_child(path)
                seen["value"] = await node.read_value()
                for item in await node.get_properties():
                    seen[(await item.read_browse_name()).Name] = await item.read_value()
        return seen, step

    seen, step = asyncio.run(scenario())
    item = unit.model.spec.estimates[0]
    expected = published_one(item, float(step.results.estimate[0, 0]), float(step.results.sd[0, 0]))
    names = ("value", "StandardDeviation", "Lower95", "Upper95")
    assert tuple(seen[name] for name in names) == expected
    assert 1.3 <= seen["Lower95"] < seen["value"] < seen["Upper95"] < 2.0
    assert seen["Upper95"] - seen["value"] > 1.2 * (seen["value"] - seen["Lower95"])
