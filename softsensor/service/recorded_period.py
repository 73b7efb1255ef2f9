"""Which of a unit's recorded cycles a command takes: the period asked for, and in it the cycles of one model."""

from __future__ import annotations

import itertools
from dataclasses import dataclass

import pandas as pd

from plant_models.plant_model import PlantModel
from softsensor.detection.flags import Note
from softsensor.errors import ReplayError
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import series
from softsensor.records.engine import Database
from softsensor.records.reader import revisions_of

EVER = 2**62


@dataclass(frozen=True)
class Period:
    """A unit on record and the time asked for, as on the command line; None for all."""

    unit: str
    start: str | None = None
    end: str | None = None

    @property
    def between(self) -> tuple[int, int]:
        """First time and time after the last, UTC microseconds.

        :raises ReplayError: a time that is none, or without a zone.
        """
        return _moment(self.start, "--from", -EVER), _moment(self.end, "--to", EVER)


@dataclass(frozen=True)
class RecordedStretch:
    """Consecutive cycles on record, all run by the model in question or all by others; first and last time."""

    own: bool
    cycles: range
    begins: int
    ends: int


def cycles_in(database: Database, unit_id: int, period: Period) -> range:
    """The cycles on record in a period.

    :raises ReplayError: there is none.
    """
    cycles = series.cycles_between(database, unit_id, *period.between)
    if not cycles:
        raise ReplayError(f"{database.name}: no cycle of {period.unit} is on record in this period")
    return cycles


def stretches_of(database: Database, unit_id: int, cycles: range, digest: str) -> list[RecordedStretch]:
    """These cycles in stretches of consecutive numbers, each run by the model of this digest or by others."""
    own = {item.id for item in revisions_of(database, unit_id) if item.digest == digest}
    found: list[RecordedStretch] = []
    for block in series.readings(database, unit_id, cycles.start, cycles.stop - 1):
        stop, times = block.first_cycle + len(block), block.readings.times
        new = RecordedStretch(
            block.revision_id in own, range(block.first_cycle, stop), int(times[0]), int(times[-1])
        )
        if found and found[-1].own == new.own and found[-1].cycles.stop == block.first_cycle:
            before = found.pop()
            new = RecordedStretch(new.own, range(before.cycles.start, stop), before.begins, new.ends)
        found.append(new)
    return found


def chosen_cycles(
    database: Database, unit_id: int, cycles: range, model: PlantModel
) -> tuple[range, list[Note]]:
    """Which of these recorded cycles a model replays: the latest stretch that it ran itself, else all of them.

    :raises ReplayError: cycles of other revisions that do not follow each other in time.
    """
    found = stretches_of(database, unit_id, cycles, model.digest)
    latest = next((item for item in reversed(found) if item.own), None)
    if latest is not None:
        text = "the cycles before or after were run by other revisions of the model and are left out"
        return latest.cycles, [Note(latest.begins, "records", text)] if len(found) > 1 else []
    step = round(model.spec.sample_time * 1e6)
    for before, after in itertools.pairwise(found):
        if after.begins != before.ends + step:
            raise ReplayError(
                f"no cycle is on record between {_iso(before.ends)} and {_iso(after.begins)}; "
                "expected a period (--from, --to) on one side of it"
            )
    return cycles, []


def check_tags(model: PlantModel, recorded: CycleReadings, unit: str) -> None:
    """The records keep readings in the order of the model file that ran, without tags.

    :raises ReplayError: another number of inputs or sensors than the model has.
    """
    found = (recorded.u.shape[1], recorded.y.shape[1])
    expected = (len(model.input_tags), len(model.sensor_tags))
    if found != expected:
        raise ReplayError(
            f"{unit}: the recorded cycles have {found[0]} inputs and {found[1]} sensors; expected those of the "
            f"model, {expected[0]} and {expected[1]}"
        )


def _moment(text: str | None, option: str, default: int) -> int:
    if text is None:
        return default
    try:
        moment = pd.Timestamp(text)
    except ValueError:
        raise ReplayError(f"{option}: {text!r}; expected a time such as 2026-12-01T08:00:00Z") from None
    if moment.tz is None:
        raise ReplayError(f"{option}: {text!r} names no time zone; expected Z or an offset")
    return int(moment.tz_convert("UTC").value // 1000)


def _iso(time: int) -> str:
    return f"{pd.Timestamp(time, unit='us').isoformat()}Z"
