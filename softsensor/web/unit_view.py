"""What a unit's page shows, read from the records piece by piece."""

from __future__ import annotations

from functools import cached_property

from plant_models.specification import UnitSpec
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import decisions, reader, series
from softsensor.records.audit import StoredEntry
from softsensor.records.decisions import LeftOut
from softsensor.records.engine import Database
from softsensor.records.reader import StoredEvent, StoredFlag, StoredLab, Unit
from softsensor.records.rests import StoredRest, rests_at
from softsensor.web.models_in_service import ModelsInService
from softsensor.web.rows import (
    EstimateRow,
    InputRow,
    SensorRow,
    State,
    connection_state,
    estimate_rows,
    input_rows,
    latest_cycle,
    progress_state,
    records_state,
    sensor_rows,
    tag_decimals,
    tag_units,
    waiting_labs,
)
from softsensor.web.wording import utc

EVENTS_SHOWN, ENTRIES_SHOWN, CLEARED_SHOWN = 12, 8, 10
EVENTS_SEARCHED = 500


def rest_words(rest: StoredRest) -> str:
    """Why tests rest, and until when where that is known."""
    end = f"since {utc(rest.since_us)}" if rest.until_us is None else f"until {utc(rest.until_us)}"
    return f"{rest.cause}, {end}"


class UnitView:
    """All that a unit's page shows; each piece is read from the records when it is first asked for, and once.

    Each piece raises Problem where the records cannot be read or hold no sound model of the unit.
    """

    def __init__(
        self, database: Database, models: ModelsInService, unit: Unit, clock_speed: float = 1.0
    ) -> None:
        self._database = database
        self._clock_speed = clock_speed
        self._models = models
        self.unit = unit

    @cached_property
    def _revision(self) -> int:
        return self._models.revision_of(self.unit)

    @cached_property
    def _cycle(self) -> tuple[series.TimedResults | None, CycleReadings | None]:
        return latest_cycle(self._database, self.unit, self._revision)

    @cached_property
    def _found_events(self) -> list[StoredEvent]:
        return reader.latest_events(self._database, self.unit.id, limit=EVENTS_SEARCHED)

    @cached_property
    def spec(self) -> UnitSpec:
        """The model in service."""
        return self._models.spec(self._revision)

    @cached_property
    def cycle_us(self) -> int | None:
        """The newest cycle's time."""
        latest = self._cycle[0]
        return None if latest is None else int(latest.times[-1])

    @cached_property
    def progress(self) -> State:
        """Whether cycles keep up."""
        return progress_state(self.spec, self.cycle_us, self._database.clock(), self._clock_speed)

    @cached_property
    def connection(self) -> State:
        """How the connection to the plant stands."""
        return connection_state(self._found_events)

    @cached_property
    def records(self) -> State:
        """Whether the records keep up."""
        return records_state(self._found_events)

    @cached_property
    def estimates(self) -> tuple[EstimateRow, ...]:
        """Every estimate."""
        return estimate_rows(self.spec, self._cycle[0])

    @cached_property
    def sensors(self) -> tuple[SensorRow, ...]:
        """Every sensor."""
        return sensor_rows(self.spec, *self._cycle, self.open_flags, self.left_out)

    @cached_property
    def left_out(self) -> tuple[LeftOut, ...]:
        """Sensors that the newest cycle kept from the estimate."""
        now = self.cycle_us
        rows = decisions.left_out_of(self._database, self.unit.id)
        return () if now is None else tuple(row for row in rows if row.covers(now))

    @cached_property
    def tests(self) -> State:
        """Whether the tests of all sensors rest, and why."""
        now = self.cycle_us
        found = [] if now is None else rests_at(self._database, self.unit.id, now)
        whole = [rest for rest in found if not rest.tag]
        if not whole and self.spec.disarmed:
            words = "; ".join(f"{tag}: {reason}" for tag, reason in self.spec.disarmed)
            return State(f"running, but not of {words}", False)
        if not whole:
            return State("running", True)
        return State(f"at rest: {'; '.join(rest_words(rest) for rest in whole)}", False)

    @cached_property
    def inputs(self) -> tuple[InputRow, ...]:
        """Every input."""
        return input_rows(self.spec, self._cycle[1], self.open_flags)

    @cached_property
    def open_flags(self) -> tuple[StoredFlag, ...]:
        """Open flags, the newest first."""
        return tuple(reader.flags_of(self._database, self.unit.id, "open"))

    @cached_property
    def cleared_flags(self) -> tuple[StoredFlag, ...]:
        """The newest cleared flags."""
        return tuple(reader.flags_of(self._database, self.unit.id, "cleared", limit=CLEARED_SHOWN))

    @cached_property
    def waiting(self) -> tuple[StoredLab, ...]:
        """Laboratory results that wait for a person."""
        return waiting_labs(self._database, self.unit)

    @cached_property
    def events(self) -> tuple[StoredEvent, ...]:
        """The newest events."""
        return tuple(self._found_events[:EVENTS_SHOWN])

    @cached_property
    def entries(self) -> tuple[StoredEntry, ...]:
        """The newest entries of the audit trail."""
        return tuple(reader.latest_audit_entries(self._database, limit=ENTRIES_SHOWN))

    @cached_property
    def units(self) -> dict[str, str]:
        """Unit of every tag."""
        return tag_units(self.spec)

    @cached_property
    def decimals(self) -> dict[str, int]:
        """Decimals of every tag."""
        return tag_decimals(self.spec)
