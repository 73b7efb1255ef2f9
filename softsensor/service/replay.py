"""The live cycle over recorded data."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from connectors.files import history_from_frame, lab_from_frame
from connectors.history import History
from connectors.lab_results import LabResults, place_lab
from plant_models.plant_model import PlantModel
from softsensor.cycle import CycleResults, UnitDesign, start
from softsensor.detection.flags import Note
from softsensor.errors import ReplayError
from softsensor.estimation.lab_results import LabArrival, LabOutcome
from softsensor.estimation.past import Past
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.assembly import assemble_blocks, rules_of
from softsensor.service.result_tables import (
    ESTIMATE_COLUMNS,
    INNOVATION_COLUMNS,
    estimate_table,
    flag_table,
    innovation_table,
    lab_table,
)
from softsensor.service.summary import RunSummary
from softsensor.service.unit_run import UnitRun, slice_readings
from softsensor.unit_design import design_unit

BLOCK = 8192
LEAST_HORIZON_S = 7 * 86400.0
"""Late results are taken up to this age at least; a replay looks as far back as its latest result needs."""


@dataclass(frozen=True)
class Stretch:
    """Some consecutive cycles of a replay: what they saw and what came of it."""

    readings: CycleReadings
    results: CycleResults
    labs: tuple[LabOutcome, ...]


@dataclass(frozen=True)
class ReplayResult:
    """Tables with the columns of the result files, and the summary."""

    estimates: pd.DataFrame
    innovations: pd.DataFrame
    flags: pd.DataFrame
    lab_results: pd.DataFrame
    summary: dict[str, Any]


class Replay:
    """A replay under way: iterate over :meth:`stretches`, then ask for the summary."""

    def __init__(
        self, design: UnitDesign, blocks: Iterable[CycleReadings], labs: Iterable[LabArrival] = ()
    ) -> None:
        self._design = design
        self._blocks = blocks
        self._labs = sorted(labs, key=lambda item: item.reported)
        horizon = max([LEAST_HORIZON_S, *((lab.reported - lab.sampled) * 1e-6 for lab in self._labs)])
        cycles = int(np.ceil(horizon / design.model.spec.sample_time)) + 2
        self.run = UnitRun(design, start(design), Past(cycles, design.kernel.n_estimates))
        self.totals = RunSummary(design)

    def stretches(self) -> Iterator[Stretch]:
        """Run all cycles, a stretch at a time."""
        for block in self._blocks:
            for part, arrivals in self._split(block):
                advance = self.run.advance(part, arrivals)
                self.totals.labs += advance.labs
                row, labs = 0, advance.labs
                for results in advance.results:
                    self.totals.add(results)
                    yield Stretch(slice_readings(part, row, row + len(results)), results, labs)
                    row, labs = row + len(results), ()

    def _split(self, block: CycleReadings) -> Iterator[tuple[CycleReadings, list[LabArrival]]]:
        """Cut a block so that each part begins where laboratory results have arrived."""
        row, arrivals = 0, []
        while row < len(block):
            now = int(block.times[row])
            while self._labs and self._labs[0].reported <= now:
                arrivals.append(self._labs.pop(0))
            stop = len(block)
            if self._labs:
                stop = max(row + 1, int(np.searchsorted(block.times, self._labs[0].reported, side="left")))
            yield slice_readings(block, row, min(stop, len(block))), arrivals
            row, arrivals = min(stop, len(block)), []

    @property
    def digest(self) -> str:
        """The digest of all results so far."""
        return self.run.state.digest.hexdigest()


def lab_arrivals(model: PlantModel, lab: LabResults) -> list[LabArrival]:
    """Laboratory results as the estimator takes them; results of tags that the model does not know are not here."""
    index = {item.lab.tag: e for e, item in enumerate(model.spec.estimates) if item.lab is not None}
    return [
        LabArrival(
            index[lab.tag(k)],
            lab.tag(k),
            int(lab.sampled_at[k]),
            int(lab.reported_at[k]),
            float(lab.values[k]),
            float(lab.time_uncertainty[k]),
        )
        for k in range(len(lab))
    ]


def lab_tags(model: PlantModel) -> list[str]:
    """Tags of laboratory results that the model names."""
    return [item.lab.tag for item in model.spec.estimates if item.lab is not None]


def prepare(model: PlantModel, history: History, lab: LabResults | None) -> tuple[Replay, list[Note]]:
    """A replay of a history, with the laboratory results that it can see; the others are named in notes."""
    notes, arrivals = [], []
    if lab is not None:
        usable, remarks = place_lab(lab, history.first_time, history.last_time)
        notes = [Note(history.first_time, "laboratory", text) for text in remarks]
        arrivals = lab_arrivals(model, usable)
    if history.ignored_columns:
        names = ", ".join(history.ignored_columns)
        notes.append(Note(history.first_time, "history", f"columns that the model does not know: {names}"))
    blocks = assemble_blocks(model.spec, history, BLOCK)
    return Replay(design_unit(model), blocks, arrivals), notes


def replay(
    model: PlantModel, history: pd.DataFrame, lab: pd.DataFrame | None = None, timezone: str | None = None
) -> ReplayResult:
    """Run a model over a recorded history held in data frames.

    :param history: a ``time`` column and one column per tag; optional ``<tag>.quality`` columns.
    :param lab: columns sampled_at, reported_at, tag, value and, where known, time_uncertainty.
    :raises ReplayError: no cycle lies within the history.
    :raises HistoryFileError, LabFileError: a frame that cannot be used.
    """
    recorded = history_from_frame(history, rules_of(model.spec).tags, timezone)
    results = lab_from_frame(lab, lab_tags(model), timezone) if lab is not None else None
    running, notes = prepare(model, recorded, results)
    running.totals.notes += notes
    estimates, innovations = [], []
    for stretch in running.stretches():
        estimates.append(estimate_table(running._design, stretch.readings, stretch.results))
        innovations.append(innovation_table(running._design, stretch.results))
    if not estimates:
        raise ReplayError("history: no cycle lies within it; expected at least one row at or after a cycle")
    return ReplayResult(
        _joined(estimates, ESTIMATE_COLUMNS),
        _joined(innovations, INNOVATION_COLUMNS),
        flag_table(list(running.totals.flags.values())),
        lab_table(running.totals.labs),
        running.totals.as_dict(running.digest),
    )


def _joined(tables: list[pd.DataFrame], columns: tuple[str, ...]) -> pd.DataFrame:
    joined = pd.concat(tables, ignore_index=True)[list(columns)]
    for name in ("tag", "status"):
        if name in joined:
            joined[name] = joined[name].astype(str)
    return joined
