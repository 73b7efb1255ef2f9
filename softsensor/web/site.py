"""What every page needs: the records, the feed of news, the models, the form guard; and looking things up by address."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from sqlalchemy import select

from plant_models.errors import Problem
from softsensor.records import reader
from softsensor.records.engine import Database
from softsensor.records.reader import Comment, StoredFlag, StoredLab, Unit
from softsensor.records.tables import flags
from softsensor.web.live import LiveStreams
from softsensor.web.models_in_service import ModelsInService
from softsensor.web.security import FormGuard


class NotHere(Problem):
    """The address names something that is not on record."""


class BadForm(Problem):
    """What was entered cannot be taken; says what was expected."""


class ForeignForm(Problem):
    """The form did not come from a page of ours."""


@dataclass(frozen=True)
class Site:
    """Everything the pages stand on."""

    database: Database
    streams: LiveStreams
    models: ModelsInService
    clock_speed: float = 1.0
    guard: FormGuard = field(default_factory=FormGuard)

    def unit(self, name: str) -> Unit:
        """The unit of this name.

        :raises NotHere: there is none; names those there are.
        """
        there = reader.all_units(self.database)
        for unit in there:
            if unit.name == name:
                return unit
        names = ", ".join(unit.name for unit in there) or "none"
        raise NotHere(f"There is no unit {name}. Units on record: {names}.")

    def flag(self, name: str, flag_id: str) -> tuple[Unit, StoredFlag, tuple[Comment, ...]]:
        """A unit's flag with its comments.

        :raises NotHere: no such unit, or no such flag of it.
        """
        unit = self.unit(name)
        query = select(flags.c.id).where(flags.c.id == flag_id, flags.c.unit_id == unit.id)
        with self.database.read() as connection:
            there = connection.execute(query).first()
        if there is None:
            raise NotHere(f"There is no flag {flag_id} of unit {name}.")
        return unit, *reader.flag_with_comments(self.database, flag_id)

    def lab(self, name: str, lab_id: int) -> tuple[Unit, StoredLab]:
        """A unit's laboratory result.

        :raises NotHere: no such unit, or no such result of it.
        """
        unit = self.unit(name)
        for lab in reader.lab_results_of(self.database, unit.id):
            if lab.id == lab_id:
                return unit, lab
        raise NotHere(f"There is no laboratory result {lab_id} of unit {name}.")

    def other_reports(self, lab: StoredLab) -> list[StoredLab]:
        """What else was reported for the same sample, in the order of the reports."""
        found = reader.lab_results_of(self.database, lab.unit_id, lab.sampled_us, lab.sampled_us + 1)
        others = [item for item in found if item.tag == lab.tag and item.id != lab.id]
        return sorted(others, key=lambda item: (item.reported_us, item.id))


def choices_for(lab: StoredLab, others: Sequence[StoredLab] = ()) -> tuple[str, ...]:
    """What a person may still decide about a laboratory result; one that counts already stays, and so does one that the
    laboratory has corrected.

    :param others: what else was reported for the same sample.
    """
    if any(item.reported_us > lab.reported_us and item.status == "used" for item in others):
        return ()
    if lab.status == "waiting for a person":
        return ("use", "leave out")
    if lab.status == "left out" and lab.decided_by is not None:
        return ("use",)
    return ()
