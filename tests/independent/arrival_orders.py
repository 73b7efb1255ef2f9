"""A small unit whose laboratory results come in any order, late and corrected: what to hand over, and what must come out."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from independent.recorded_runs import START, Run, record
from independent.replaying import Outcome, design_of, readings_of, replay_in_parts
from independent.small_unit import MODEL

from connectors.files import history_from_frame
from connectors.history import History, LateRows, TagSeries
from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.lab_results import LabArrival
from softsensor.service.assembly import assemble_with_late
from softsensor.service.replay import Replay, cut_parts, horizon_of

CYCLES = 70
"""More than a chunk of remembered states."""
STEP = 10_000_000
SAMPLES = (0.0, 10.5, 11.0, 48.0, 63.0, 64.0)
"""When samples are taken, in cycles from the start."""
BEGIN = START.value // 1000


@dataclass(frozen=True)
class Report:
    """A value of a sample, both times in cycles from the start, fractions allowed."""

    sampled: float
    reported: float
    value: float


@cache
def small_spec() -> UnitSpec:
    return parse_model_text(MODEL, "r1.toml")


@cache
def small_design() -> UnitDesign:
    return design_of(small_spec())


@cache
def small_run() -> Run:
    return record(small_spec(), CYCLES, 9, gaps=0.1)


def true_value(sampled: float) -> float:
    """The estimate's true value at the cycle that a sample counts at."""
    return float(small_run().truth[int(np.ceil(sampled)), 1])


def outcome_of(reports: list[Report], cuts: tuple[int, ...] = ()) -> Outcome:
    """The program's own replay with these reports."""
    return replay_in_parts(small_design(), readings_of(small_run()), _arrivals(reports), cuts)


@dataclass(frozen=True)
class Late:
    """The reading of a tag that belongs to a cycle, and when it came, in cycles from the start."""

    tag: str
    cycle: int
    arrived: float


@cache
def small_history() -> History:
    """The run's readings, each three seconds before its cycle."""
    whole = history_from_frame(small_run().history(), ("FI1", "TI1"))
    earlier = {tag: replace(part, times=part.times - 3_000_000) for tag, part in whole.series.items()}
    return replace(whole, series=earlier)


def there(tag: str) -> list[int]:
    """Cycles with a reading of a tag."""
    return ((small_history().series[tag].times + 3_000_000 - BEGIN) // STEP).tolist()


def with_late(late: Sequence[Late], reports: Sequence[Report] = (), spec: UnitSpec | None = None) -> Replay:
    """A replay in which these readings came late, not yet run."""
    history, places = small_history(), {"FI1": 0, "TI1": 1}
    series, rows = {}, []
    for tag, part in history.series.items():
        held_back = {item.cycle: item for item in late if item.tag == tag}
        cycles = ((part.times + 3_000_000 - BEGIN) // STEP).tolist()
        in_time = np.array([k not in held_back for k in cycles])
        series[tag] = TagSeries(part.times[in_time], part.values[in_time], part.qualities[in_time])
        for k, cycle in enumerate(cycles):
            if cycle in held_back:
                at = BEGIN + round(held_back[cycle].arrived * STEP)
                rows.append(
                    (at, int(part.times[k]), places[tag], float(part.values[k]), int(part.qualities[k]))
                )
    rows.sort(key=lambda row: row[0])
    columns = list(zip(*rows, strict=True)) if rows else [()] * 5
    whole = np.array(columns[0], dtype=np.int64), np.array(columns[1], dtype=np.int64)
    file = LateRows(
        "late",
        ("FI1", "TI1"),
        whole[1],
        whole[0],
        np.array(columns[2], dtype=np.int64),
        np.array(columns[3], dtype=np.float64),
        np.array(columns[4], dtype=np.int8),
    )
    design = small_design() if spec is None else design_of(spec)
    arrivals = _arrivals(reports)
    parts = cut_parts(assemble_with_late(design.model.spec, replace(history, series=series), file), arrivals)
    return Replay(design, parts, max(horizon_of(arrivals), file.longest + 10.0))


def _arrivals(reports: Sequence[Report]) -> list[LabArrival]:
    return [
        LabArrival(0, "AL1", BEGIN + round(r.sampled * STEP), BEGIN + round(r.reported * STEP), r.value)
        for r in reports
    ]


def in_order(reports: list[Report]) -> list[Report]:
    """The last value of each sample alone, reported as soon as it was taken."""
    last = {r.sampled: r for r in sorted(reports, key=lambda r: r.reported)}
    return [Report(r.sampled, r.sampled, r.value) for r in last.values()]


def assert_same_from_the_last_report_on(
    reports: list[Report], cuts: tuple[int, ...] = ()
) -> tuple[Outcome, Outcome]:
    """Late, shuffled and corrected: bit for bit what in-order processing of the last values gives; both outcomes."""
    late, ordered = outcome_of(reports, cuts), outcome_of(in_order(reports))
    first = int(np.ceil(max((r.reported for r in reports), default=0.0)))
    assert late.estimate[first:].tobytes() == ordered.estimate[first:].tobytes()
    assert late.sd[first:].tobytes() == ordered.sd[first:].tobytes()
    assert late.P.tobytes() == ordered.P.tobytes()
    return late, ordered


def random_reports(rng: np.random.Generator) -> list[Report]:
    """Each sample once, or corrected once or twice, at random times after its sampling."""
    reports = []
    for sampled in SAMPLES:
        count = int(rng.choice([1, 1, 2, 3]))
        times = np.sort(sampled + rng.random(count) * (CYCLES - 2 - sampled))
        values = true_value(sampled) + 0.02 * rng.standard_normal(count)
        reports += [Report(sampled, float(at), float(value)) for at, value in zip(times, values, strict=True)]
    return [reports[k] for k in rng.permutation(len(reports))]
