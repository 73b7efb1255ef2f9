"""A unit whose tags have transforms, in service: the same bits live, interrupted and replayed, and what is shown of it.

The same story is told to a unit without transforms, in the scale of the transfer functions: all must agree.
"""

from __future__ import annotations

import asyncio
import json
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.model_scale import Variable, bias_in_unit, one_from_model, one_to_model, variables
from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.published import published_one
from softsensor.readings_of_cycle import CycleQuality
from softsensor.recorded_data import prepare_from_records
from softsensor.records import reader, series
from softsensor.records.engine import open_database
from softsensor.service.news import cycle_news
from softsensor.unit_design import design_unit

TABLE = "transform = [[0.0, 10.0], [85.0, 85.0], [100.0, 103.75], [200.0, 190.0]]"
KEYS = {
    "FI1": 'transform = "sqrt"',
    "TI1A": TABLE,
    "TI1B": TABLE,
    "TI2": 'transform = "sqrt"',
    "AY1": 'transform = "log"\nlimits = [0.1, inf]\nvalidated_range = [1.3, 4.0]',
}
END, UNMAPPED_INPUT, UNMAPPED_SENSOR, ODD_LAB = 330, 150, 160, 170


def transformed_text(text: str) -> str:
    """The file with transforms; gains that suit them."""
    for tag, keys in KEYS.items():
        text = text.replace(f'tag = "{tag}"\n', f'tag = "{tag}"\n{keys}\n')
    for gain, other in (("0.5", "0.03"), ("9.0", "0.5")):
        text = text.replace(f"gain = {gain}\n", f"gain = {other}\n")
    return text


@pytest.fixture(scope="module")
def model(model_text: str) -> PlantModel:
    return build_plant_model(parse_model_text(transformed_text(model_text), "r1.toml"))


@pytest.fixture(scope="module")
def transformed(model: PlantModel) -> UnitDesign:
    return design_unit(model)


@pytest.fixture(scope="module")
def plain(model: PlantModel) -> UnitDesign:
    """The same unit in the scale of its transfer functions."""
    wide = replace(
        model.scaled,
        inputs=tuple(replace(item, validated_range=None) for item in model.scaled.inputs),
        sensors=tuple(replace(item, range=(-1e3, 1e3)) for item in model.scaled.sensors),
        estimates=tuple(replace(item, limits=None, validated_range=None) for item in model.scaled.estimates),
    )
    return design_unit(build_plant_model(wide))


@pytest.fixture(scope="module")
def stories(plain: UnitDesign, model: PlantModel, request: pytest.FixtureRequest) -> tuple[Any, Any]:
    """In the scale of the transfer functions, and in engineering units with some values that cannot be transformed."""
    told = request.getfixturevalue("tell")(plain.model, END)
    items: dict[str, Variable] = {item.tag: item for item in variables(model.spec)}
    items |= {item.lab.tag: item for item in model.spec.estimates if item.lab is not None}
    carried = type(told)()
    for cycle, readings in told.arrivals.items():
        for reading in readings:
            carried.add(cycle, replace(reading, value=one_from_model(items[reading.tag], reading.value)))
    for tag, cycle in (("FI1", UNMAPPED_INPUT), ("TI2", UNMAPPED_SENSOR)):
        carried.arrivals[cycle] = [
            replace(item, value=-1.0) if item.tag == tag else item for item in carried.arrivals[cycle]
        ]
    sample = next(item for item in carried.arrivals[75] if item.tag == "AL1")
    carried.add(ODD_LAB, replace(sample, value=0.0, time=sample.time + 1_200_000_000))
    return told, carried


def run(bench: Any, story: Any, stops: tuple[int, ...] = ()) -> list[Any]:
    async def whole() -> None:
        first = 0
        for stop in (*stops, END):
            await bench.run(story, first, stop)
            first = stop

    asyncio.run(whole())
    return list(bench.steps)


def digests(url: str) -> list[str]:
    with open_database(url) as database:
        unit = reader.find_unit(database, "R-1").id
        return [
            item.hex()
            for block in series.published(database, unit, 0, END - 1)
            for item in block.results.digests
        ]


def test_stops_change_no_bit_and_a_replay_of_the_records_gives_the_digest(
    transformed: UnitDesign, stories: tuple[Any, Any], new_bench: Any, sqlite_url: str, new_url: Any
) -> None:
    _, story = stories
    run(new_bench(transformed, sqlite_url), story)
    other = new_url()
    stops = (37, 128, UNMAPPED_INPUT, UNMAPPED_INPUT + 1, UNMAPPED_SENSOR, UNMAPPED_SENSOR + 1, 201, 246)
    run(new_bench(transformed, other), story, stops)
    assert digests(other) == digests(sqlite_url)
    assert len(set(digests(sqlite_url))) == END
    running, _, _ = prepare_from_records(transformed.model, sqlite_url, "R-1", None, None)
    assert sum(len(stretch.results) for stretch in running.stretches()) == END
    assert running.digest == digests(sqlite_url)[-1]


@pytest.fixture(scope="module")
def both(
    transformed: UnitDesign, plain: UnitDesign, stories: tuple[Any, Any], new_bench: Any, new_url: Any
) -> tuple[list[Any], list[Any]]:
    """The steps of the unit with transforms, and of the one without; neither has values that cannot be transformed."""
    told, carried = stories
    cleaned = type(told)()
    items = {item.tag: item for item in variables(transformed.model.spec)}
    items |= {item.lab.tag: item for item in transformed.model.spec.estimates if item.lab is not None}
    for cycle, readings in told.arrivals.items():
        for reading in readings:
            cleaned.add(cycle, replace(reading, value=one_from_model(items[reading.tag], reading.value)))
    assert cleaned.arrivals.keys() == carried.arrivals.keys()
    return run(new_bench(transformed, new_url()), cleaned), run(new_bench(plain, new_url()), told)


def test_the_estimator_sees_what_the_unit_without_transforms_sees(both: tuple[list[Any], list[Any]]) -> None:
    for one, other in zip(*both, strict=True):
        for name in ("estimate", "sd", "predicted", "innovation", "innovation_sd", "high", "low", "beyond"):
            found, expected = getattr(one.results, name), getattr(other.results, name)
            np.testing.assert_allclose(found, expected, rtol=1e-7, atol=1e-9, err_msg=name)
        np.testing.assert_array_equal(one.results.used, other.results.used)


def test_flags_have_their_sizes_in_the_instruments_unit(
    both: tuple[list[Any], list[Any]], model: PlantModel
) -> None:
    found, expected = ([flag for step in steps for flag in step.results.flags] for steps in both)
    assert [(flag.tag, flag.kind, flag.onset) for flag in found] == [
        (flag.tag, flag.kind, flag.onset) for flag in expected
    ]
    flag, other = found[0], expected[0]
    assert (flag.tag, flag.kind) == ("TI1B", "bias")
    size, sd = bias_in_unit(model.spec.sensors[1], other.size, other.size_sd)
    np.testing.assert_allclose((flag.size, flag.size_sd), (size, sd), rtol=1e-6)
    assert abs(flag.size - other.size / 1.25) < 0.01 * other.size
    assert abs(other.size - 1.5) < 0.3


def test_late_results_are_judged_in_scale_and_told_in_the_unit(
    both: tuple[list[Any], list[Any]], model: PlantModel
) -> None:
    found, expected = ([lab for step in steps for lab in step.labs] for steps in both)
    item = model.spec.estimates[0]
    assert [lab.status for lab in found] == [lab.status for lab in expected]
    assert [lab.counted_cycle for lab in found] == [lab.counted_cycle for lab in expected]
    for lab, other in zip(found, expected, strict=True):
        np.testing.assert_allclose(lab.predicted, one_from_model(item, other.predicted), rtol=1e-9)
        np.testing.assert_allclose((lab.innovation, lab.sd), (other.innovation, other.sd), rtol=1e-7)
        np.testing.assert_allclose(one_to_model(item, lab.arrival.value), other.arrival.value, rtol=1e-12)


def test_news_are_in_engineering_units(both: tuple[list[Any], list[Any]], transformed: UnitDesign) -> None:
    step = both[0][50]
    news = cycle_news(transformed, step).body
    item = transformed.model.spec.estimates[0]
    mean, sd = float(step.results.estimate[0, 0]), float(step.results.sd[0, 0])
    shown = news["estimates"]["AY1"]
    found = [shown[name] for name in ("value", "sd", "lower", "upper")]
    assert found == list(published_one(item, mean, sd))
    assert 0.8 < shown["lower"] < shown["value"] < shown["upper"] < 2.0
    sensor = news["sensors"]["TI1A"]
    assert abs(sensor["reading"] - sensor["predicted"]) < 2.0
    assert 80.0 < sensor["predicted"] < 105.0


def test_values_without_a_transformed_one_are_no_readings_and_the_reason_is_told(
    transformed: UnitDesign, stories: tuple[Any, Any], new_bench: Any, sqlite_url: str
) -> None:
    steps = run(new_bench(transformed, sqlite_url), stories[1])
    with open_database(sqlite_url) as database:
        unit = reader.find_unit(database, "R-1").id
        reasons = [r for block in series.published(database, unit, 0, END - 1) for r in block.results.reasons]
        labs = reader.lab_results_of(database, unit)
    at = steps[UNMAPPED_INPUT]
    assert at.readings.u_quality[0, 0] == CycleQuality.UNMAPPED
    assert at.readings.u[0, 0] == steps[UNMAPPED_INPUT - 1].readings.u[0, 0]
    said = json.loads(reasons[UNMAPPED_INPUT])["AY1"]
    assert "FI1 is outside what its transform can take, its last value is held" in said
    at = steps[UNMAPPED_SENSOR]
    assert at.readings.y_quality[0, 2] == CycleQuality.UNMAPPED
    assert np.isnan(at.results.reading[0, 2])
    assert at.results.used[0].tolist() == [1, 1, 0]
    odd = [lab for lab in labs if lab.value == 0.0]
    assert [(lab.status, lab.reason, lab.predicted) for lab in odd] == [
        ("left out", "log: expected a value above zero", None)
    ]


def test_a_validated_range_is_in_the_engineering_unit(
    both: tuple[list[Any], list[Any]], transformed: UnitDesign
) -> None:
    outside = 0
    for step in both[0]:
        value = cycle_news(transformed, step).body["estimates"]["AY1"]
        beyond = value["value"] < 1.3
        assert beyond == ("AY1 is outside its validated range" in value["reason"])
        assert not beyond or value["status"] == "Uncertain"
        outside += beyond
    assert 0 < outside < END
