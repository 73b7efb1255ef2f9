"""Estimates, sensors, inputs and states of a unit as rows for the templates."""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass

from sqlalchemy import select

from plant_models.model_scale import one_from_model
from plant_models.specification import EstimateSpec, SensorSpec, UnitSpec
from softsensor.alarms.sensor_status import SensorStatus, most_severe, status_of
from softsensor.estimation.kernel import Floats
from softsensor.published import published_one
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import series
from softsensor.records.decisions import LeftOut
from softsensor.records.engine import Database
from softsensor.records.reader import StoredEvent, StoredFlag, StoredLab, Unit
from softsensor.records.tables import lab_results
from softsensor.web.wording import QUALITY_WORDS, STATUS_WORDS, decimals_for, difference_unit, duration

LATE_CYCLES, LATE_SECONDS = 10.0, 120.0
"""A newest cycle older than both is said to be late."""


NONE_NEW = "none new"
NO_READING = ("beyond its range", "beyond its range", "Bad", NONE_NEW, "too old", "outside its transform")
"""Why a cycle has no reading of a sensor, by its :class:`softsensor.readings_of_cycle.CycleQuality`."""


@dataclass(frozen=True)
class EstimateRow:
    """An estimate's latest value; None where there is none."""

    tag: str
    unit: str
    decimals: int
    value: float | None
    sd: float | None
    lower: float | None
    upper: float | None
    status: str
    reason: str
    lab_tag: str | None


@dataclass(frozen=True)
class SensorRow:
    """A sensor's latest reading against its prediction."""

    tag: str
    unit: str
    difference_unit: str
    decimals: int
    reading: float | None
    predicted: float | None
    deviations: float | None
    beyond: float | None
    """Probability that the bias lies beyond the tolerance."""
    health: SensorStatus
    use: str

    @property
    def abnormal(self) -> bool:
        """The reading does not count, and not only because none is due."""
        return self.use not in ("in use", f"no reading: {NONE_NEW}")


@dataclass(frozen=True)
class InputRow:
    """An input's value as the latest cycle used it."""

    tag: str
    unit: str
    decimals: int
    value: float | None
    quality: str
    validated: tuple[float, float] | None
    outside: bool
    health: SensorStatus


@dataclass(frozen=True)
class State:
    """A word on how something stands, and whether it is as it should be."""

    text: str
    normal: bool


def estimate_decimals(item: EstimateSpec) -> int:
    """From the laboratory's sd where there is one, else from the range."""
    span = item.range[1] - item.range[0]
    return decimals_for(item.lab.sd if item.lab is not None else span / 200.0)


def tag_units(spec: UnitSpec) -> dict[str, str]:
    """The unit of every tag of a model file; a laboratory tag has its estimate's."""
    units = {item.tag: item.unit for item in spec.inputs}
    units |= {item.tag: item.unit for item in spec.sensors}
    units |= {item.tag: item.unit for item in spec.estimates}
    units |= {item.lab.tag: item.unit for item in spec.estimates if item.lab is not None}
    return units


def tag_decimals(spec: UnitSpec) -> dict[str, int]:
    """How many decimals each tag's values are shown with."""
    found = {item.tag: decimals_for((item.range[1] - item.range[0]) / 200.0) for item in spec.inputs}
    found |= {item.tag: decimals_for(item.noise_sd) for item in spec.sensors}
    for item in spec.estimates:
        found[item.tag] = estimate_decimals(item)
        if item.lab is not None:
            found[item.lab.tag] = estimate_decimals(item)
    return found


def health_of(tag: str, flags: Sequence[StoredFlag], left_out: LeftOut | None = None) -> SensorStatus:
    """The most severe status that the open flags and its use give a tag."""
    found = [
        status_of(flag.kind, flag.probability or 0.0, flag.group == (tag,))
        for flag in flags
        if flag.tag == tag
    ]
    by_person = left_out is not None and left_out.by_person
    return most_severe(found, by_person, left_out is not None and not by_person)


def finite(value: float) -> float | None:
    """The value, or None for nan and infinities."""
    return float(value) if math.isfinite(value) else None


def estimate_rows(spec: UnitSpec, latest: series.TimedResults | None) -> tuple[EstimateRow, ...]:
    """Every estimate of the model with its latest published value."""
    rows = []
    reasons = json.loads(latest.results.reasons[-1] or "{}") if latest is not None else {}
    for e, item in enumerate(spec.estimates):
        value = sd = lower = upper = math.nan
        status, reason = "Bad", "no cycle has run yet"
        if latest is not None:
            mean, spread = float(latest.results.estimate[-1, e]), float(latest.results.sd[-1, e])
            value, sd, lower, upper = published_one(item, mean, spread)
            status, reason = STATUS_WORDS[latest.results.status[-1, e]], reasons.get(item.tag, "")
        interval = finite(lower), finite(upper)
        lab = item.lab.tag if item.lab is not None else None
        row = (finite(value), finite(sd), *interval, status, reason, lab)
        rows.append(EstimateRow(item.tag, item.unit, estimate_decimals(item), *row))
    return tuple(rows)


def _sensor_row(
    item: SensorSpec, i: int, seen: CycleReadings, latest: series.TimedResults, health: SensorStatus
) -> SensorRow:
    results = latest.results
    reading = finite(seen.y[-1, i])
    deviation = results.innovation[-1, i] / results.innovation_sd[-1, i]
    left_out = f"{item.tag} is left out" in results.reasons[-1]
    waits = "left out, waits to be put back" if health is SensorStatus.MAINTENANCE_REQUIRED else "left out"
    unused = waits if left_out else "not used: it cannot be right"
    if reading is None:
        unused = f"no reading: {NO_READING[seen.y_quality[-1, i]]}"
    return SensorRow(
        item.tag,
        item.unit,
        difference_unit(item.unit),
        decimals_for(item.noise_sd),
        reading,
        finite(one_from_model(item, float(results.predicted[-1, i]))),
        finite(deviation),
        _beyond(results.sums[-1], i, len(results.used[-1])),
        health,
        "in use" if results.used[-1, i] else unused,
    )


def _beyond(sums: Floats, i: int, n: int) -> float | None:
    """The third part of what is kept of the sums; records of older releases have none."""
    return finite(sums[2 * n + i]) if len(sums) == 3 * n else None


def sensor_rows(
    spec: UnitSpec,
    latest: series.TimedResults | None,
    seen: CycleReadings | None,
    flags: Sequence[StoredFlag],
    left_out: Sequence[LeftOut] = (),
) -> tuple[SensorRow, ...]:
    """Every sensor of the model with its latest reading, prediction and health.

    :param left_out: what the newest cycle kept from the estimate.
    """
    rows = []
    out = {row.tag: row for row in sorted(left_out, key=lambda row: row.by_person)}
    for i, item in enumerate(spec.sensors):
        health = health_of(item.tag, flags, out.get(item.tag))
        if latest is None or seen is None:
            places = (difference_unit(item.unit), decimals_for(item.noise_sd), None, None, None, None)
            rows.append(SensorRow(item.tag, item.unit, *places, health, "no reading"))
        else:
            rows.append(_sensor_row(item, i, seen, latest, health))
    return tuple(rows)


def input_rows(
    spec: UnitSpec, seen: CycleReadings | None, flags: Sequence[StoredFlag]
) -> tuple[InputRow, ...]:
    """Every input of the model with the value that the latest cycle used."""
    rows = []
    for j, item in enumerate(spec.inputs):
        value, quality = None, QUALITY_WORDS[3]
        if seen is not None:
            value, quality = finite(seen.u[-1, j]), QUALITY_WORDS[seen.u_quality[-1, j]]
        limits = item.validated_range
        outside = value is not None and limits is not None and not limits[0] <= value <= limits[1]
        decimals = decimals_for((item.range[1] - item.range[0]) / 200.0)
        health = health_of(item.tag, flags)
        rows.append(InputRow(item.tag, item.unit, decimals, value, quality, limits, outside, health))
    return tuple(rows)


def connection_state(events: Sequence[StoredEvent]) -> State:
    """From the newest event about the connection."""
    text = next((item.event.text for item in events if item.event.kind == "connection"), "")
    if not text:
        return State("not yet on record", False)
    word, _, reason = text.partition(":")
    if word == "connected":
        return State("connected", True)
    return State(f"{word} ({reason.strip()})" if reason.strip() else word, False)


def records_state(events: Sequence[StoredEvent]) -> State:
    """From the newest event about the records; the page itself was just read from them."""
    text = next((item.event.text for item in events if item.event.kind == "records"), "")
    return State(text, False) if text.startswith("waiting") else State("up to date", True)


def progress_state(spec: UnitSpec, cycle_us: int | None, plant_us: int, speed: float = 1.0) -> State:
    """Whether cycles keep up with the plant's clock, which runs ``speed`` times as fast as the wall's."""
    if cycle_us is None:
        return State("no cycle has run yet", False)
    behind = (plant_us - cycle_us) * 1e-6
    if behind > max(LATE_CYCLES * spec.sample_time, LATE_SECONDS) * max(speed / LATE_CYCLES, 1.0):
        return State(f"late: the newest cycle is {duration(behind)} old", False)
    return State("on time", True)


def latest_cycle(
    database: Database, unit: Unit, revision_id: int
) -> tuple[series.TimedResults | None, CycleReadings | None]:
    """The newest published cycle under a revision and its readings; None where that revision has not run yet."""
    latest = series.latest_results(database, unit.id)
    if latest is None or latest.revision_id != revision_id:
        return None, None
    cycle = latest.results.first_cycle
    block = next(series.readings(database, unit.id, cycle, cycle), None)
    return latest, None if block is None else block.readings


def waiting_labs(database: Database, unit: Unit) -> tuple[StoredLab, ...]:
    """Laboratory results that a person has to decide about, the newest sample first."""
    table = lab_results
    query = select(table).where(table.c.unit_id == unit.id, table.c.status == "waiting for a person")
    with database.read() as connection:
        rows = connection.execute(query.order_by(table.c.sampled_us.desc(), table.c.id)).all()
    return tuple(StoredLab(**row._mapping) for row in rows)
