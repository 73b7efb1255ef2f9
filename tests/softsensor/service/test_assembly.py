"""What cycles see, case by case; the rules as a whole are in tests/properties/test_assembly_properties.py."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from connectors.history import History, TagSeries
from connectors.readings import Quality, Reading
from plant_models.specification import InputSpec, SensorSpec, UnitSpec
from softsensor.errors import ReplayError
from softsensor.readings_of_cycle import CycleQuality
from softsensor.service.assembly import LiveAssembly, assemble_blocks, assemble_history
from softsensor.service.reading_rules import NEVER

SECOND = 1_000_000
GOOD, UNCERTAIN, BAD = Quality.GOOD, Quality.UNCERTAIN, Quality.BAD
NAN = float("nan")


def unit(
    sample_time: float = 10.0,
    on_change: bool = False,
    max_age: float | None = None,
    input_age: float | None = None,
) -> UnitSpec:
    inputs = (InputSpec("FI1", "m3/h", 1.0, (0.0, 2.0), max_age=input_age),)
    sensors = (SensorSpec("TI1", "degC", 1.0, (0.0, 2.0), 0.1, 0.4, on_change=on_change, max_age=max_age),)
    return UnitSpec("R-1", "", sample_time, inputs, sensors, (), (), (), 1e6)


def series(*readings: tuple[float, float, Quality]) -> TagSeries:
    """Readings as (second, value, quality)."""
    return TagSeries(
        np.array([round(second * SECOND) for second, _, _ in readings], dtype=np.int64),
        np.array([value for _, value, _ in readings], dtype=np.float64),
        np.array([quality for _, _, quality in readings], dtype=np.int8),
    )


def history(ti: TagSeries, fi: TagSeries | None = None, last: float = 60.0) -> History:
    held = series((0.0, 1.5, GOOD)) if fi is None else fi
    return History("history", {"FI1": held, "TI1": ti}, 0, round(last * SECOND))


def sensor(spec: UnitSpec, *readings: tuple[float, float, Quality]) -> tuple[list[str], list[float]]:
    seen = assemble_history(spec, history(series(*readings)))
    return [CycleQuality(code).name for code in seen.y_quality[:, 0]], seen.y[:, 0].tolist()


def test_a_reading_counts_once_and_is_then_missing_and_at_last_too_old() -> None:
    names, values = sensor(unit(), (3.0, 92.4, GOOD))
    # cycles at 0, 10, ..., 60 s; three sample times are 30 s, so that at 30 s the reading is 27 s old
    assert names == ["MISSING", "GOOD", "MISSING", "MISSING", "STALE", "STALE", "STALE"]
    np.testing.assert_array_equal(values, [NAN, 92.4, NAN, NAN, NAN, NAN, NAN])


def test_three_sample_times_are_not_yet_too_old() -> None:
    names, _ = sensor(unit(), (0.0, 92.4, GOOD))
    assert names == ["GOOD", "MISSING", "MISSING", "MISSING", "STALE", "STALE", "STALE"]


def test_the_newest_of_several_counts_even_where_it_is_bad() -> None:
    names, values = sensor(unit(), (1.0, 92.1, GOOD), (9.0, 92.4, GOOD), (12.0, 92.6, GOOD), (19.0, NAN, BAD))
    assert names[:4] == ["MISSING", "GOOD", "BAD", "MISSING"]
    assert values[1] == 92.4


def test_uncertain_is_a_reading_and_says_so() -> None:
    names, values = sensor(unit(), (10.0, 92.4, UNCERTAIN))
    assert names[1] == "UNCERTAIN"
    assert values[1] == 92.4


@pytest.mark.parametrize("value", [NAN, float("inf"), float("-inf")])
def test_a_good_value_that_is_no_number_is_bad(value: float) -> None:
    names, values = sensor(unit(), (10.0, value, GOOD))
    assert names[1] == "BAD"
    assert np.isnan(values[1])


def test_on_change_gives_the_value_again_without_end() -> None:
    names, values = sensor(unit(on_change=True), (3.0, 92.4, GOOD), (41.0, 92.9, UNCERTAIN))
    assert names == ["MISSING", "GOOD", "GOOD", "GOOD", "GOOD", "UNCERTAIN", "UNCERTAIN"]
    assert values[1:] == [92.4, 92.4, 92.4, 92.4, 92.9, 92.9]


def test_on_change_with_an_age_of_its_own_ends() -> None:
    names, _ = sensor(unit(on_change=True, max_age=25.0), (5.0, 92.4, GOOD))
    assert names == ["MISSING", "GOOD", "GOOD", "GOOD", "STALE", "STALE", "STALE"]


def test_on_change_stays_bad_while_bad_is_the_news() -> None:
    names, _ = sensor(unit(on_change=True), (5.0, 92.4, GOOD), (15.0, NAN, BAD))
    assert names[:4] == ["MISSING", "GOOD", "BAD", "BAD"]


def test_an_own_age_replaces_three_sample_times() -> None:
    names, _ = sensor(unit(max_age=1.0), (8.5, 92.4, GOOD), (19.5, 92.5, GOOD))
    assert names[:4] == ["MISSING", "STALE", "GOOD", "STALE"]


def held(spec: UnitSpec, *readings: tuple[float, float, Quality]) -> tuple[list[str], list[float]]:
    seen = assemble_history(spec, history(series(), series(*readings)))
    return [CycleQuality(code).name for code in seen.u_quality[:, 0]], seen.u[:, 0].tolist()


def test_an_input_holds_its_last_value_beyond_its_age() -> None:
    names, values = held(unit(), (5.0, 11.5, GOOD))
    assert names == ["MISSING", "GOOD", "GOOD", "GOOD", "STALE", "STALE", "STALE"]
    np.testing.assert_array_equal(values, [NAN] + [11.5] * 6)


def test_an_input_holds_what_was_usable_through_bad() -> None:
    names, values = held(
        unit(), (0.0, 11.5, UNCERTAIN), (8.0, 0.0, BAD), (18.0, NAN, GOOD), (58.0, 12.0, GOOD)
    )
    assert names == ["UNCERTAIN", "BAD", "BAD", "BAD", "STALE", "STALE", "GOOD"]
    assert values == [11.5] * 6 + [12.0]


def test_an_input_that_was_only_bad_never_had_a_value() -> None:
    names, values = held(unit(), (0.0, 11.5, BAD))
    assert names == ["MISSING"] * 7
    assert np.isnan(values).all()


def test_an_input_has_an_age_of_its_own_too() -> None:
    names, _ = held(unit(input_age=50.0), (0.0, 11.5, GOOD))
    assert names == ["GOOD"] * 6 + ["STALE"]


def test_arrays_are_contiguous_and_typed() -> None:
    seen = assemble_history(unit(), history(series((3.0, 92.4, GOOD))))
    arrays: list[NDArray[Any]] = [seen.times, seen.u, seen.y, seen.u_quality, seen.y_quality]
    assert [array.dtype for array in arrays] == [np.int64, np.float64, np.float64, np.int8, np.int8]
    assert all(array.flags.c_contiguous and len(array) == len(seen) == 7 for array in arrays)


def test_a_grid_that_no_day_holds_starts_at_the_first_row() -> None:
    early = History("history", {"FI1": series(), "TI1": series()}, 3 * SECOND, 20 * SECOND)
    assert assemble_history(unit(7.0), early).times.tolist() == [3 * SECOND, 10 * SECOND, 17 * SECOND]
    assert assemble_history(unit(10.0), early).times.tolist() == [10 * SECOND, 20 * SECOND]


def test_a_history_shorter_than_to_the_first_cycle_has_none() -> None:
    short = History("history", {"FI1": series(), "TI1": series()}, 3 * SECOND, 9 * SECOND)
    assert len(assemble_history(unit(), short)) == 0
    assert list(assemble_blocks(unit(), short)) == []


def test_a_sample_time_between_microseconds_is_refused() -> None:
    with pytest.raises(ReplayError, match="sample_time"):
        LiveAssembly(unit(1.0 / 3.0))


def reading(tag: str, value: float, second: float, quality: Quality = GOOD) -> Reading:
    return Reading(tag, value, round(second * SECOND), quality)


def test_live_a_late_reading_counts_in_the_next_cycle_if_it_is_newer_than_what_was_used() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("TI1", 92.1, 4.0))
    assert live.readings_at(10 * SECOND).y[0, 0] == 92.1
    live.accept(reading("TI1", 92.2, 3.0))
    assert live.readings_at(20 * SECOND).y_quality[0, 0] == CycleQuality.MISSING
    live.accept(reading("TI1", 92.3, 9.0))
    assert live.readings_at(30 * SECOND).y[0, 0] == 92.3


def test_live_a_late_input_value_is_held_where_the_newest_is_bad() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("FI1", 11.5, 1.0))
    live.accept(reading("FI1", NAN, 9.0, BAD))
    assert live.readings_at(10 * SECOND).u[0, 0] == 11.5
    live.accept(reading("FI1", 11.8, 8.0))
    seen = live.readings_at(20 * SECOND)
    assert seen.u[0, 0] == 11.8
    assert seen.u_quality[0, 0] == CycleQuality.BAD


def test_live_a_late_input_value_does_not_replace_a_newer_one() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("FI1", 11.5, 9.0))
    live.readings_at(10 * SECOND)
    live.accept(reading("FI1", 11.8, 8.0))
    assert live.readings_at(20 * SECOND).u[0, 0] == 11.5


def test_live_of_two_values_of_one_time_the_later_arrival_counts() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("TI1", 92.1, 4.0))
    live.accept(reading("TI1", 92.2, 4.0))
    assert live.waiting == 1
    assert live.readings_at(10 * SECOND).y[0, 0] == 92.2
    live.accept(reading("TI1", 92.3, 4.0))
    assert live.readings_at(20 * SECOND).y_quality[0, 0] == CycleQuality.MISSING


def test_live_forgets_what_cycles_have_seen_and_keeps_what_is_ahead() -> None:
    live = LiveAssembly(unit())
    for second in range(10):
        live.accept(reading("TI1", 92.0 + second, float(second)))
    live.accept(reading("TI1", 93.5, 15.0))
    live.accept(reading("PI9", 1.0, 5.0))
    assert live.readings_at(10 * SECOND).y[0, 0] == 101.0
    assert live.waiting == 1
    assert live.readings_at(20 * SECOND).y[0, 0] == 93.5
    assert live.waiting == 0


def test_live_is_complete_to_the_slowest_tag_that_reports_by_time() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("TI1", 92.0, 10.0))
    assert live.complete_to() == NEVER
    live.accept(reading("FI1", 11.5, 8.0))
    assert live.complete_to() == 8 * SECOND
    live.readings_at(10 * SECOND)
    assert live.complete_to() == 8 * SECOND
    live.accept(reading("FI1", 11.5, 20.0))
    assert live.complete_to() == 10 * SECOND


def test_live_does_not_wait_for_a_tag_that_reports_on_change() -> None:
    live = LiveAssembly(unit(on_change=True))
    live.accept(reading("FI1", 11.5, 8.0))
    assert live.complete_to() == 8 * SECOND


def test_live_goes_on_from_an_earlier_state() -> None:
    live = LiveAssembly(unit())
    live.accept(reading("TI1", 92.0, 9.0))
    live.accept(reading("FI1", 11.5, 9.0))
    live.readings_at(10 * SECOND)
    again = LiveAssembly(unit(), live.state)
    assert again.complete_to() == 9 * SECOND
    seen = again.readings_at(20 * SECOND)
    assert seen.u[0, 0] == 11.5
    assert seen.y_quality[0, 0] == CycleQuality.MISSING


def test_live_refuses_a_cycle_that_is_not_later() -> None:
    live = LiveAssembly(unit())
    live.readings_at(10 * SECOND)
    with pytest.raises(ValueError, match="not later"):
        live.readings_at(10 * SECOND)
