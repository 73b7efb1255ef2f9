"""Recorded histories and laboratory results, from frames or files, through the live cycle."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from connectors.files import history_from_frame, lab_from_frame, late_from_frame
from connectors.history import History, LateRows
from connectors.lab_results import LabResults, place_lab
from connectors.long_history import LongHistory
from plant_models.plant_model import PlantModel
from softsensor.detection.flags import Note
from softsensor.errors import ReplayError
from softsensor.estimation.kernel import CHUNK
from softsensor.estimation.lab_results import LabArrival
from softsensor.records.engine import open_database
from softsensor.records.reader import find_unit
from softsensor.service.assembly import assemble_blocks, assemble_with_late, history_cycles, rules_of
from softsensor.service.long_assembly import assemble_long
from softsensor.service.plant_state import StateRule, recorded_changes
from softsensor.service.recorded_period import Period, check_tags, chosen_cycles, cycles_in
from softsensor.service.replay import Replay, cut_parts, gathered, horizon_of, parts_of
from softsensor.service.result_tables import (
    CONFORMANCE_COLUMNS,
    ESTIMATE_COLUMNS,
    INNOVATION_COLUMNS,
    SMOOTHED_COLUMNS,
    conformance_table,
    estimate_table,
    flag_table,
    hypothesis_table,
    innovation_table,
    lab_table,
    smoothed_table,
    words_of,
)
from softsensor.service.resuming import recorded_cycles
from softsensor.service.smoothed_run import SmoothedRun
from softsensor.service.state_tables import fitted_states, read_states_file
from softsensor.unit_design import designed

BLOCK = 8192
WHOLE = 2**62
"""Cycles of one table where everything stays in memory anyway: tables cost by the piece."""


@dataclass(frozen=True)
class ReplayResult:
    """Tables with the columns of the result files, and the summary."""

    estimates: pd.DataFrame
    innovations: pd.DataFrame
    flags: pd.DataFrame
    hypotheses: pd.DataFrame
    """What was weighed for each flag, with probabilities, and the interval of its onset."""
    lab_results: pd.DataFrame
    summary: dict[str, Any]
    conformance: pd.DataFrame
    """The probability that each sensor's bias lies beyond its tolerance, from time to time."""
    smoothed: pd.DataFrame | None = None
    """The estimates once more, each given all readings of the period; None where they were not asked for."""


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


def replay_tags(model: PlantModel, states: Sequence[StateRule] = ()) -> tuple[str, ...]:
    """The tags that a replay needs of a history: the model's, and those of the states."""
    return tuple(dict.fromkeys((*rules_of(model.spec).tags, *(rule.tag for rule in states))))


def _ignored(lab: LabResults) -> Iterator[str]:
    """What the laboratory's file holds and no estimate of the model takes."""
    for what, names in (("tags", lab.ignored_tags), ("columns", lab.ignored_columns)):
        if names:
            yield f"{lab.name}: {what} that the model does not know: {', '.join(names)}"


def prepare(
    model: PlantModel,
    history: History | LongHistory,
    lab: LabResults | None,
    states: Sequence[StateRule] = (),
    late: LateRows | None = None,
) -> tuple[Replay, list[Note]]:
    """A replay of a history, with the laboratory results that it can see; the others are named in notes.

    :param states: states of the plant in which the tests rest; their tags are in the history.
    :param late: readings that came after their cycles.
    """
    notes: list[Note] = []
    arrivals: list[LabArrival] = []
    if lab is not None:
        usable, remarks = place_lab(lab, history.first_time, history.last_time)
        notes = [Note(history.first_time, "laboratory", text) for text in (*_ignored(lab), *remarks)]
        arrivals = lab_arrivals(model, usable)
    if history.ignored_columns:
        names = ", ".join(history.ignored_columns)
        notes.append(Note(history.first_time, "history", f"columns that the model does not know: {names}"))
    if isinstance(history, LongHistory):
        if states or late is not None:
            raise ReplayError(
                f"{history.name}: states and late readings need the whole history; it is read in stretches"
            )
        cycles = assemble_long(model.spec, history, BLOCK)
        return Replay(designed(model), parts_of(cycles, arrivals), horizon_of(arrivals)), notes
    changes = recorded_changes(states, history.series, history_cycles(model.spec, history)) if states else ()
    if late is None:
        parts = parts_of(assemble_blocks(model.spec, history, BLOCK), arrivals, changes)
        return Replay(designed(model), parts, horizon_of(arrivals)), notes
    notes += [
        Note(history.first_time, "late readings", text) for text in _left_alone(late, history.last_time)
    ]
    parts = cut_parts(assemble_with_late(model.spec, history, late, BLOCK), arrivals, changes)
    needed = max(horizon_of(arrivals), late.longest + model.spec.sample_time)
    return Replay(designed(model), parts, needed), notes


def _left_alone(late: LateRows, last_time: int) -> Iterator[str]:
    if late.ignored_tags:
        yield f"{late.name}: tags that the model does not know: {', '.join(late.ignored_tags)}"
    after = int((late.arrived > last_time).sum())
    if after:
        count = f"{after} reading{'s' if after > 1 else ''}"
        yield f"{late.name}: left out, because they arrived after the last row of the history: {count}"


def replay(
    model: PlantModel,
    history: pd.DataFrame,
    lab: pd.DataFrame | None = None,
    timezone: str | None = None,
    smooth: bool = False,
    states: str | Path | None = None,
    late: pd.DataFrame | None = None,
) -> ReplayResult:
    """Run a model over a recorded history held in data frames.

    :param history: a ``time`` column and one column per tag; optional ``<tag>.quality`` columns.
    :param lab: columns sampled_at, reported_at, tag, value and, where known, time_uncertainty.
    :param smooth: smoothed estimates as well.
    :param states: a file with ``[[state]]`` tables: states of the plant in which the tests rest.
    :param late: readings that came after their cycles: columns time, arrived_at, tag, value and, where known, quality.
    :raises ReplayError: no cycle lies within the history.
    :raises HistoryFileError, LabFileError: a frame that cannot be used.
    """
    rules = () if states is None else read_states_file(states)
    recorded = history_from_frame(history, replay_tags(model, rules), timezone)
    fitted = fitted_states(rules, model.spec, recorded.tags, str(states))
    results = lab_from_frame(lab, lab_tags(model), timezone) if lab is not None else None
    rows = None if late is None else late_from_frame(late, recorded.tags, timezone)
    running, notes = prepare(model, recorded, results, fitted, rows)
    running.totals.notes += notes
    estimates, innovations, conformance = [], [], []
    with SmoothedRun(running.design) as smoothing:
        stretches = smoothing.keeping(running.stretches()) if smooth else running.stretches()
        for stretch in gathered(stretches, WHOLE):
            estimates.append(estimate_table(running.design, stretch.readings, stretch.results))
            innovations.append(innovation_table(running.design, stretch.results))
            conformance.append(conformance_table(running.design, stretch.results))
        if not estimates:
            raise ReplayError(
                "history: no cycle lies within it; expected at least one row at or after a cycle"
            )
        parts = smoothing.cycles(running) if smooth else iter(())
        smoothed = [smoothed_table(running.design, part) for part in parts]
    flags = list(running.totals.flags.values())
    return ReplayResult(
        _joined(estimates, ESTIMATE_COLUMNS),
        _joined(innovations, INNOVATION_COLUMNS),
        flag_table(flags),
        hypothesis_table(flags),
        lab_table(running.totals.labs),
        running.totals.as_dict(running.digest),
        _joined(conformance, CONFORMANCE_COLUMNS),
        _joined(smoothed, SMOOTHED_COLUMNS) if smooth else None,
    )


def _joined(tables: list[pd.DataFrame], columns: tuple[str, ...]) -> pd.DataFrame:
    joined = tables[0] if len(tables) == 1 else pd.concat(tables, ignore_index=True)
    if tuple(joined.columns) != columns:
        joined = joined[list(columns)]
    for name in ("tag", "status"):
        if name in joined:
            joined[name] = words_of(joined[name].cat.codes.to_numpy(), joined[name].cat.categories)
    return joined


def prepare_from_records(
    model: PlantModel, url: str, unit: str, start: str | None, end: str | None
) -> tuple[Replay, list[Note], int]:
    """A replay of a unit's recorded cycles, with the laboratory results as they arrived; and how many cycles it has.

    Of a period with cycles of several revisions those of this model are replayed, the latest stretch of them; a
    model that never ran is run over all, where they follow each other without a gap. Started at the first cycle of
    a revision it gives the digest of the live run.

    :raises RecordsError: no such database or unit.
    :raises ReplayError: no cycle is on record in the period, or the cycles do not suit the model.
    """
    with open_database(url) as database:
        unit_id = find_unit(database, unit).id
        cycles = cycles_in(database, unit_id, Period(unit, start, end))
        chosen, notes = chosen_cycles(database, unit_id, cycles, model)
        parts = list(recorded_cycles(database, unit_id, chosen.start, chosen.stop - 1))
    check_tags(model, parts[0][0], unit)
    first = chosen.start if chosen.start % CHUNK == 0 else 0
    running = Replay(designed(model), parts, first_cycle=first)
    return running, notes, sum(len(readings) for readings, _ in parts)
