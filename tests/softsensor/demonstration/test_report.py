"""The demonstration's report on flags: in order of time, each held against what the simulator knows."""

from __future__ import annotations

from dataclasses import replace

import pytest

from plant_models.simulators.scenario import DemoScenario
from softsensor.demonstration.report import Report, Score, report_lines
from softsensor.records.audit import AuditReport
from softsensor.records.reader import StoredFlag

BEGAN = 1_796_083_200_000_000
HOUR = 3_600_000_000
STORY = DemoScenario(drift_tag="TI2101A", drift_start=4.0 * 3600.0, drift_rate=0.7, drift_limit=1.9)
FLAG = StoredFlag(
    id="F",
    unit_id=1,
    tag="TI2101A",
    kind="drift",
    onset_us=BEGAN + 4 * HOUR + HOUR // 60,
    detected_us=BEGAN + 4 * HOUR + HOUR // 4,
    cleared_us=None,
    size=0.2,
    size_sd=0.02,
    probability=0.98,
    group=("TI2101A",),
    state="open",
    acknowledged_us=None,
    acknowledged_by=None,
    finding=None,
    finding_us=None,
    finding_by=None,
    as_found=None,
    as_left=None,
)


def flag_lines(*flags: StoredFlag, story: DemoScenario = STORY) -> list[str]:
    score = Score(2880, 0.007, 0.058, 0.043, 0.965)
    trail = AuditReport(True, 7, None, "", "0" * 64, True)
    report = Report("mol/L", score, flags, (), trail, "ab", 0)
    return [line for line in report_lines(report, story, BEGAN) if line.startswith("Flag")]


def test_the_drift_that_was_found() -> None:
    # 0.7 K/h for a quarter of an hour
    (line,) = flag_lines(FLAG)
    assert line.startswith("Flag after 255 min: TI2101A drift, probability 0.980, group: TI2101A; true: ")
    assert line.endswith("its onset is 1 min late; found 15 min after it began, at an error of 0.17 K")


def test_the_error_is_never_beyond_where_the_drift_ends() -> None:
    (line,) = flag_lines(replace(FLAG, detected_us=BEGAN + 8 * HOUR))
    assert line.endswith("found 240 min after it began, at an error of 1.90 K")


def test_flags_come_in_order_of_time() -> None:
    times = (5, 3, 7)
    lines = flag_lines(*(replace(FLAG, id=str(k), detected_us=BEGAN + k * HOUR) for k in times))
    assert [line.split(":")[0] for line in lines] == [f"Flag after {k * 60} min" for k in (3, 5, 7)]


@pytest.mark.parametrize(
    ("flag", "said"),
    [
        (replace(FLAG, detected_us=BEGAN + HOUR), "a FALSE flag: the simulator knows of no such fault"),
        (replace(FLAG, kind="stuck"), "a FALSE flag"),
        (
            replace(FLAG, tag="TI2102", group=("TI2102",)),
            "a FALSE name: the simulator's fault is a drift of TI2101A, not",
        ),
        (replace(FLAG, tag="TI2101B", group=("TI2101B", "TI2101A")), "a drift of TI2101A, in its group"),
        (replace(FLAG, kind="lost"), "readings that did not arrive"),
    ],
)
def test_what_the_simulator_knows_nothing_of(flag: StoredFlag, said: str) -> None:
    (line,) = flag_lines(flag)
    assert said in line
    assert "true:" not in line


def test_a_story_without_a_drift_has_false_flags_only() -> None:
    (line,) = flag_lines(FLAG, story=replace(STORY, drift_rate=0.0))
    assert "a FALSE flag" in line
