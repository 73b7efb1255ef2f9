"""What the charts draw: the recorded values, gaps as gaps, extremes kept however much is thinned."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from browser.recorded_unit import CYCLES, HOUR, MINUTE, NOW, STEP, UNIT, course
from hypothesis import given, settings
from hypothesis import strategies as st

from softsensor.records import happenings
from softsensor.records.engine import Database
from softsensor.web.chart_data import Track, Window, estimate_band, thinned, with_gaps

DATA = f"/units/{UNIT}/chart-data.json?tag="


def ms(us: int) -> float:
    return us / 1000.0


def test_the_estimate_is_drawn_as_recorded(asker: Any) -> None:
    columns = asker.get(f"{DATA}AY2101&hours=1").json()["columns"]["estimate"]
    made, last = course(), slice(CYCLES - 361, CYCLES)
    assert columns["x"] == [ms(int(time)) for time in made.times[last]]
    assert columns["value"] == made.estimate[last, 0].tolist()
    half = 1.959963984540054 * made.sd[last, 0]
    assert columns["lower"] == pytest.approx((made.estimate[last, 0] - half).tolist(), rel=1e-14)
    assert columns["upper"] == pytest.approx((made.estimate[last, 0] + half).tolist(), rel=1e-14)


def test_a_stretch_without_cycles_is_a_gap(asker: Any) -> None:
    columns = asker.get(f"{DATA}AY2101&hours=2.5").json()["columns"]["estimate"]
    (gap,) = [k for k, x in enumerate(columns["x"]) if x is None]
    assert columns["value"][gap] is None
    assert columns["x"][gap + 1] - columns["x"][gap - 1] == ms(61 * STEP)


def test_a_whole_day_is_thinned_and_keeps_the_extremes(asker: Any) -> None:
    columns = asker.get(f"{DATA}AY2101&hours=24").json()["columns"]["estimate"]
    made = course()
    there = np.r_[0 : CYCLES - 732, CYCLES - 672 : CYCLES]
    values = [value for value in columns["value"] if value is not None]
    assert len(values) <= 2000
    assert (min(values), max(values)) == (made.estimate[there].min(), made.estimate[there].max())
    upper = made.estimate[there, 0] + 1.959963984540054 * made.sd[there, 0]
    assert max(value for value in columns["upper"] if value is not None) == pytest.approx(
        upper.max(), rel=1e-14
    )


def test_laboratory_results_lie_at_their_sampling_times_by_status(asker: Any) -> None:
    columns = asker.get(f"{DATA}AY2101&hours=24").json()["columns"]
    assert sorted(columns["lab used"]["x"]) == [ms(NOW - h * HOUR) for h in (7, 6, 4, 3, 1)]
    assert columns["lab waiting"]["x"] == [ms(NOW - 2 * HOUR)]
    assert columns["lab left out"]["x"] == [ms(NOW - 5 * HOUR)]
    assert "45 min earlier" in columns["lab waiting"]["text"][0]


def test_revised_values_stand_beside_what_was_published(asker: Any) -> None:
    columns = asker.get(f"{DATA}AY2101&hours=24").json()["columns"]
    made, revised = course(), columns["revised"]
    published = dict(zip(made.times / 1000.0, made.estimate[:, 0], strict=True))
    assert min(revised["x"]) >= ms(int(made.times[1080]))
    assert max(revised["x"]) <= ms(int(made.times[2099]))
    moved = [value - published[x] for x, value in zip(revised["x"], revised["value"], strict=True)]
    assert max(map(abs, moved)) == pytest.approx(0.012, rel=1e-3)


def test_flagged_periods_touching_the_window_are_marked(asker: Any) -> None:
    flags = asker.get(f"{DATA}AY2101&hours=8").json()["columns"]["flags"]
    assert flags["text"] == ["TI2105 spike", "TI2101B drift"]
    assert flags["left"] == [ms(NOW - 288 * MINUTE), ms(NOW - 60 * MINUTE)]
    assert flags["right"][0] == ms(NOW - 280 * MINUTE)
    assert flags["right"][1] > ms(NOW)
    assert asker.get(f"{DATA}AY2101&hours=1").json()["columns"]["flags"]["text"] == ["TI2101B drift"]


def test_local_time_is_drawn_by_the_offset(asker: Any) -> None:
    here = asker.get(f"{DATA}AY2101&hours=1&offset=0").json()
    there = asker.get(f"{DATA}AY2101&hours=1&offset=-210").json()
    assert there["window"]["end"] - here["window"]["end"] == -210 * 60_000
    assert there["columns"]["estimate"]["x"][0] - here["columns"]["estimate"]["x"][0] == -210 * 60_000
    chart = asker.get(f"/units/{UNIT}/chart.json?tag=AY2101&offset=-210").text
    assert "time, UTC-03:30" in chart


def test_a_sensor_is_drawn_with_prediction_sums_and_interval(asker: Any) -> None:
    columns = asker.get(f"{DATA}TI2101B&hours=1").json()["columns"]
    made, last = course(), slice(CYCLES - 361, CYCLES)
    assert columns["reading"]["value"] == pytest.approx(made.readings.y[last, 1].tolist(), rel=1e-12)
    assert columns["predicted"]["value"] == made.predicted[last, 1].tolist()
    assert columns["high"]["value"] == made.sums[last, 1].tolist()
    assert columns["low"]["value"] == made.sums[last, 4].tolist()
    item = asker.get(f"/units/{UNIT}/chart.json?tag=TI2101B&hours=1").json()["item"]
    spans = [found for found in walk(item) if found.get("name") == "Span"]
    assert len(spans) == 1
    assert spans[0]["attributes"]["location"] == 1.0


def walk(value: Any) -> Any:
    """Every object inside a JSON value."""
    if isinstance(value, dict):
        yield value
        for inner in value.values():
            yield from walk(inner)
    elif isinstance(value, list):
        for inner in value:
            yield from walk(inner)


def test_charts_carry_no_script(asker: Any) -> None:
    for tag in ("AY2101", "TI2101A"):
        item = asker.get(f"/units/{UNIT}/chart.json?tag={tag}").json()["item"]
        assert not [found for found in walk(item) if "CustomJS" in str(found.get("name"))]


def test_a_tag_of_odd_signs_is_drawn_and_hovered(recorded: Database, asker: Any) -> None:
    flag = happenings.Flag("odd", "a -> <b>", "model", NOW - 9, NOW, math.nan, math.nan, 0.6, ("a -> <b>",))
    with recorded.write() as connection:
        happenings.open_flag(connection, 1, flag)
    assert "a -> <b> model" in asker.get(f"{DATA}AY2101").json()["columns"]["flags"]["text"]


values = st.lists(st.one_of(st.floats(-1e6, 1e6), st.just(math.nan)), min_size=1, max_size=400)


@settings(max_examples=60, deadline=None)
@given(values, st.integers(1, 30), st.integers(0, 2**32))
def test_thinning_keeps_each_stretch_s_smallest_and_largest_value(
    numbers: list[float], buckets: int, seed: int
) -> None:
    series = np.array(numbers)
    steps = np.random.default_rng(seed).integers(1, 50, len(series))
    times = np.cumsum(steps).astype(np.int64)
    chosen = thinned(times, series, buckets)
    there = np.flatnonzero(np.isfinite(series))
    if len(there) <= 2 * buckets:
        assert chosen.tolist() == there.tolist()
        return
    assert len(chosen) <= 2 * buckets
    start, span = int(times[there[0]]), int(times[there[-1]] - times[there[0]])
    groups: dict[int, list[int]] = {}
    for k in there:
        groups.setdefault(min((int(times[k]) - start) * buckets // max(span, 1), buckets - 1), []).append(
            int(k)
        )
    for group in groups.values():
        kept = series[[k for k in group if k in set(chosen.tolist())]]
        assert (kept.min(), kept.max()) == (series[group].min(), series[group].max())


def test_lines_break_where_values_or_cycles_are_missing() -> None:
    times = np.array([0, 10, 20, 30, 40, 90, 100], dtype=np.int64)
    present = np.array([True, True, False, True, True, True, True])
    chosen = np.flatnonzero(present)
    assert with_gaps(times, present, chosen, 10.0).tolist() == [0, 1, -1, 3, 4, -1, 5, 6]


def test_a_thinned_band_covers_every_interval() -> None:
    n = 9000
    rng = np.random.default_rng(3)
    value, sd = rng.normal(size=n).cumsum(), rng.uniform(0.1, 3.0, n)
    times = NOW + np.arange(n, dtype=np.int64) * STEP
    half = 1.959963984540054 * sd
    track = Track(times, np.arange(n), value, value - half, value + half, np.empty((n, 2)))
    columns = estimate_band(track, Window(NOW, NOW + n * STEP), STEP)
    x, lower, upper = (np.array(columns[name]) for name in ("x", "lower", "upper"))
    assert len(x) <= 2000
    bucket = np.minimum((times - times[0]) * 1000 // int(times[-1] - times[0]), 999)
    for k, drawn in enumerate(x):
        own = bucket == bucket[round((drawn * 1000.0 - NOW) / STEP)]
        assert lower[k] == pytest.approx((value[own] - half[own]).min(), rel=1e-12)
        assert upper[k] == pytest.approx((value[own] + half[own]).max(), rel=1e-12)
