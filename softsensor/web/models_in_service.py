"""The model file of each unit's revision in service, read from the records once."""

from __future__ import annotations

import threading

from sqlalchemy import select

from plant_models.building import build_plant_model
from plant_models.errors import RealisationError
from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.detection.absorption import settled_estimates
from softsensor.errors import RecordsError
from softsensor.estimation.kernel import Floats
from softsensor.estimation.observability import EstimateKnowledge, estimate_knowledge
from softsensor.records.engine import Database
from softsensor.records.reader import Unit
from softsensor.records.tables import model_revisions
from softsensor.service.model_report import ModelReport, model_report
from softsensor.unit_design import design_unit


class ModelsInService:
    """Specifications, decision intervals and what can be known, by revision; safe to ask from several threads."""

    def __init__(self, database: Database) -> None:
        self._database = database
        self._specs: dict[int, UnitSpec] = {}
        self._knowledge: dict[int, tuple[EstimateKnowledge, ...]] = {}
        self._moved: dict[int, Floats | None] = {}
        self._reports: dict[str, ModelReport] = {}
        self._designs: dict[int, UnitDesign] = {}
        self._solving = threading.Lock()
        self._reporting = threading.Lock()

    def revision_of(self, unit: Unit) -> int:
        """The id of the revision in service, or of the newest one where none is.

        :raises RecordsError: the unit has no revision on record.
        """
        table = model_revisions
        query = (
            select(table.c.id, table.c.state).where(table.c.unit_id == unit.id).order_by(table.c.id.desc())
        )
        with self._database.read() as connection:
            rows = connection.execute(query).all()
        if not rows:
            raise RecordsError(f"unit {unit.name} has no model on record")
        return int(next((row.id for row in rows if row.state == "in service"), rows[0].id))

    def spec(self, revision_id: int) -> UnitSpec:
        """The specification of a revision.

        :raises ModelFileError: the text on record is no sound model file.
        """
        known = self._specs.get(revision_id)
        if known is None:
            query = select(model_revisions.c.file_text).where(model_revisions.c.id == revision_id)
            with self._database.read() as connection:
                text = connection.execute(query).scalar_one()
            known = parse_model_text(text, f"revision {revision_id}")
            self._specs[revision_id] = known
        return known

    def knowledge(self, revision_id: int) -> tuple[EstimateKnowledge, ...]:
        """What can be known of each estimate with all sensors, and with each of them lost."""
        with self._solving:
            known = self._knowledge.get(revision_id)
            if known is None:
                known = estimate_knowledge(build_plant_model(self.spec(revision_id)))
                self._knowledge[revision_id] = known
        return known

    def moved(self, revision_id: int) -> Floats | None:
        """(n_estimates, n_sensors) Where estimates settle for a unit bias of each sensor; None where they do not settle."""
        with self._solving:
            if revision_id not in self._moved:
                try:
                    self._moved[revision_id] = settled_estimates(build_plant_model(self.spec(revision_id)))
                except RealisationError:
                    self._moved[revision_id] = None
            return self._moved[revision_id]

    def design(self, revision_id: int) -> UnitDesign:
        """Everything that a revision runs on; made once, which takes about a second."""
        with self._solving:
            known = self._designs.get(revision_id)
            if known is None:
                known = design_unit(build_plant_model(self.spec(revision_id)))
                self._designs[revision_id] = known
        return known

    def report(self, revision_id: int) -> ModelReport:
        """All that the model of a revision promises; worked out once for each digest, which takes some seconds."""
        model = build_plant_model(self.spec(revision_id))
        with self._reporting:
            known = self._reports.get(model.digest)
            if known is None:
                known = model_report(model)
                self._reports[model.digest] = known
        return known
