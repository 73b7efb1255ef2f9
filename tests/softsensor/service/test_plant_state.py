"""States of the plant from tags and limits: when they begin and end, live as recorded, and what a limit means."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from connectors.history import TagSeries
from connectors.readings import Quality, Reading
from softsensor.detection.plant_states import StateChange
from softsensor.service.plant_state import PlantStates, StateRule, recorded_changes

S = 1_000_000
OFF = StateRule("off", "FI1", below=2.0, unit="m3/h")


def changes(rule: StateRule, readings: list[tuple[int, float]], stop: int = 200) -> list[tuple[int, bool]]:
    """Seconds of the cycles (every 10 s) at which the state begins and ends."""
    times = np.array([time * S for time, _ in readings], dtype=np.int64)
    values = np.array([value for _, value in readings])
    series = {rule.tag: TagSeries(times, values, np.zeros(len(times), dtype=np.int8))}
    cycles = np.arange(0, stop, 10, dtype=np.int64) * S
    return [(time // S, change.begins) for time, change in recorded_changes([rule], series, cycles)]


def test_a_state_holds_from_the_first_cycle_that_sees_its_limit_passed_to_the_first_that_does_not() -> None:
    assert changes(OFF, [(0, 11.0), (33, 1.0), (95, 11.0)]) == [(40, True), (100, False)]


def test_a_state_waits_until_its_condition_has_held_long_enough() -> None:
    rule = StateRule("off", "FI1", below=2.0, lasting=60 * S)
    readings = [(0, 11.0), (13, 1.0), (40, 1.5), (41, 11.0), (45, 1.0), (104, 0.5), (150, 5.0)]
    assert changes(rule, readings) == [(110, True), (150, False)]


def test_between_two_cycles_a_return_restarts_the_time_that_the_condition_must_hold() -> None:
    rule = StateRule("off", "FI1", below=2.0, lasting=20 * S)
    assert changes(rule, [(0, 1.0), (51, 11.0), (52, 1.0), (150, 9.0)]) == [
        (20, True),
        (60, False),
        (80, True),
        (150, False),
    ]


def test_what_is_bad_or_no_number_leaves_the_state_as_it_was() -> None:
    times = np.array([0, 20, 40, 60], dtype=np.int64) * S
    values = np.array([1.0, 11.0, np.nan, 11.0])
    qualities = np.array([0, int(Quality.BAD), 0, int(Quality.UNCERTAIN)], dtype=np.int8)
    cycles = np.arange(0, 100, 10, dtype=np.int64) * S
    found = list(recorded_changes([OFF], {"FI1": TagSeries(times, values, qualities)}, cycles))
    assert [(time // S, change.begins) for time, change in found] == [(0, True), (60, False)]
    assert found[1][1].value == 11.0


@pytest.mark.parametrize(
    ("limits", "condition", "met"),
    [
        ({"below": 2.0}, "FI1 below 2", [True, False, False, False]),
        ({"above": 5.0}, "FI1 above 5", [False, False, False, True]),
        ({"equals": 3.0}, "FI1 at 3", [False, False, True, False]),
        ({"above": 1.5, "below": 4.0}, "FI1 above 1.5 and below 4", [False, True, True, False]),
        ({"above": 4.0, "below": 1.5}, "FI1 above 4 or below 1.5", [True, False, False, True]),
    ],
)
def test_limits(limits: dict[str, float], condition: str, met: list[bool]) -> None:
    rule = StateRule("off", "FI1", **limits)  # type: ignore[arg-type]
    assert rule.condition == condition
    assert rule.met(np.array([1.0, 2.0, 3.0, 6.0])).tolist() == met


def by_the_book(rule: StateRule, readings: list[tuple[int, float]], cycles: list[int]) -> list[bool]:
    """Whether the state holds at each cycle, from the rule's words and nothing else."""
    held = []
    for cycle in cycles:
        seen = [(time, value) for time, value in readings if time <= cycle]
        since = None
        for time, value in seen:
            if not value < 2.0:
                since = None
            elif since is None:
                since = time
        held.append(since is not None and cycle - since >= rule.lasting)
    return held


@given(
    st.lists(st.tuples(st.integers(0, 300), st.sampled_from([1.0, 1.9, 2.0, 9.0])), unique_by=lambda r: r[0]),
    st.integers(0, 70),
    st.integers(1, 29),
)
def test_live_one_cycle_at_a_time_is_recorded_all_at_once_is_the_rule_in_words(
    pairs: list[tuple[int, float]], lasting: int, every: int
) -> None:
    readings = sorted(pairs)
    rule = StateRule("off", "FI1", below=2.0, lasting=lasting)
    cycles = list(range(0, 300, every))
    live, states, fed, held = [], PlantStates([rule]), 0, False
    expected = by_the_book(rule, readings, cycles)
    for cycle, holds in zip(cycles, expected, strict=True):
        while fed < len(readings) and readings[fed][0] <= cycle + 3:  # some arrive before their cycle
            states.accept(Reading("FI1", readings[fed][1], readings[fed][0]))
            fed += 1
        found = states.changes_at(cycle)
        assert [change.begins for change in found] == ([holds] if holds != held else [])
        held = holds
        live += [(cycle, change) for change in found]
    times = np.array([time for time, _ in readings], dtype=np.int64)
    values = np.array([value for _, value in readings], dtype=np.float64)
    series = {"FI1": TagSeries(times, values, np.zeros(len(times), dtype=np.int8))}
    recorded = list(recorded_changes([rule], series, np.array(cycles, dtype=np.int64)))
    assert _plain(recorded) == _plain(live)


def _plain(found: list[tuple[int, StateChange]]) -> list[tuple[int, bool, int, str]]:
    return [(time, change.begins, change.since, repr(change.value)) for time, change in found]


def test_after_a_restart_a_state_holds_on_until_a_reading_says_otherwise() -> None:
    states = PlantStates([StateRule("off", "FI1", below=2.0, lasting=60 * S)])
    states.resume([("off: FI1 below 2", "")], 100 * S)
    assert states.changes_at(110 * S) == []
    states.accept(Reading("FI1", 1.0, 50 * S))  # the server shows it again with its own time
    assert states.changes_at(120 * S) == []
    states.accept(Reading("FI1", 9.0, 125 * S))
    assert [change.begins for change in states.changes_at(130 * S)] == [False]


def test_a_state_that_is_no_longer_asked_for_ends_with_the_next_cycle() -> None:
    states = PlantStates([OFF])
    states.resume([("cleaning: HS1 at 1", "TI1")], 100 * S)
    (change,) = states.changes_at(110 * S)
    assert (change.key, change.sensor, change.begins) == ("cleaning: HS1 at 1", "TI1", False)
    assert states.changes_at(120 * S) == []
