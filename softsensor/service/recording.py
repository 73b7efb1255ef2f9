"""What a unit's run brings, put on record: which tables a stretch of cycles touches, in one transaction."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from sqlalchemy import Connection

from plant_models.plant_model import PlantModel
from softsensor.cycle import UnitDesign
from softsensor.cycle_results import CycleResults
from softsensor.detection.flags import Exclusion, Flag, Note
from softsensor.detection.people import Decision, Taken
from softsensor.detection.plant_states import StateChange
from softsensor.estimation.lab_results import LabArrival, LabOutcome, replaced_by
from softsensor.estimation.late_readings import LateReadings, UnusedReadings
from softsensor.estimation.past import Revision
from softsensor.readings_of_cycle import CycleReadings
from softsensor.records import blocks, decisions, happenings, rests, storing
from softsensor.records.coverage import watch_coverage
from softsensor.service.checkpoints import FORMAT, pack_estimator
from softsensor.service.result_tables import reasons
from softsensor.service.unit_run import Came


@dataclass(frozen=True)
class Step:
    """One cycle's outcome on its way to the records."""

    readings: CycleReadings
    results: CycleResults
    digest: bytes
    labs: tuple[LabOutcome, ...]
    revisions: tuple[Revision, ...]
    checkpoint: bytes | None
    """The state before the coming cycle, where it is to be kept."""
    taken: tuple[Taken, ...] = ()
    exclusions: tuple[Exclusion, ...] = ()
    """All sensors left out so far, where that has changed."""


def pack_decisions(came: Sequence[Came]) -> bytes:
    """What came before a cycle besides its readings: laboratory results, what people decided, states of the plant; empty
    for none.
    """
    labs = [
        [a.estimate, a.tag, a.sampled, a.reported, a.value.hex(), a.time_uncertainty, a.decided_at]
        for a in came
        if isinstance(a, LabArrival)
    ]
    people = [
        [d.number, d.act, d.tag, d.flag, d.occasion, float(d.seconds).hex(), d.actor, d.reason]
        for d in came
        if isinstance(d, Decision)
    ]
    states = [
        [s.name, s.condition, s.sensor, s.begins, s.value.hex(), s.unit, s.since, float(s.settle).hex()]
        for s in came
        if isinstance(s, StateChange)
    ]
    late = [_packed_late(item) for item in came if isinstance(item, LateReadings)]
    unused = [_packed_unused(item) for item in came if isinstance(item, UnusedReadings)]
    kinds = {"laboratory": labs, "people": people, "plant": states, "late": late, "unused": unused}
    content = {kind: items for kind, items in kinds.items() if items}
    return json.dumps(content, separators=(",", ":")).encode() if content else b""


def unpack_decisions(blob: bytes) -> list[Came]:
    """What came before a recorded cycle."""
    if not blob:
        return []
    content = json.loads(blob)
    found: list[Came] = [
        LabArrival(e, tag, sampled, reported, float.fromhex(value), uncertainty, decided)
        for e, tag, sampled, reported, value, uncertainty, decided in content.get("laboratory", ())
    ]
    for number, act, tag, flag, occasion, seconds, actor, reason in content.get("people", ()):
        found.append(Decision(number, act, tag, flag, occasion, float.fromhex(seconds), actor, reason))
    for name, condition, sensor, begins, value, unit, since, settle in content.get("plant", ()):
        seen = float.fromhex(value)
        found.append(StateChange(name, condition, sensor, begins, seen, unit, since, float.fromhex(settle)))
    for tag, kind, column, *arrays in content.get("late", ()):
        found.append(LateReadings(tag, kind, column, *_unpacked_arrays(*arrays)))
    for tag, reason, *arrays in content.get("unused", ()):
        found.append(UnusedReadings(tag, *_unpacked_arrays(*arrays), reason))
    return found


def _packed_late(item: LateReadings) -> list[object]:
    return [item.tag, item.kind, item.column, *_packed_arrays(item)]


def _packed_unused(item: UnusedReadings) -> list[object]:
    return [item.tag, item.reason, *_packed_arrays(item)]


def _packed_arrays(item: LateReadings | UnusedReadings) -> list[list[object]]:
    return [item.times.tolist(), [value.hex() for value in item.values.tolist()], item.qualities.tolist()]


def _unpacked_arrays(
    times: list[int], values: list[str], qualities: list[int]
) -> tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.int8]]:
    return (
        np.array(times, dtype=np.int64),
        np.array([float.fromhex(value) for value in values], dtype=np.float64),
        np.array(qualities, dtype=np.int8),
    )


def results_block(design: UnitDesign, step: Step) -> blocks.ResultsBlock:
    """One cycle's results as the records keep them."""
    results = step.results
    texts = reasons(design, step.readings, results)
    return blocks.ResultsBlock(
        results.first,
        results.estimate,
        results.sd,
        results.status,
        results.predicted,
        results.innovation,
        results.innovation_sd,
        results.used,
        np.concatenate([results.high, results.low, results.beyond], axis=1),
        tuple(_joined(design.model, row) for row in texts),
        (step.digest,),
    )


def _joined(model: PlantModel, row: np.ndarray) -> str:
    named = {tag: text for tag, text in zip(model.estimate_tags, row, strict=True) if text}
    return json.dumps(named, ensure_ascii=False) if named else ""


def write_step(connection: Connection, unit_id: int, design: UnitDesign, step: Step) -> None:
    """Results, flags, laboratory outcomes, revised estimates and states of one cycle; may be repeated."""
    storing.store_results(connection, unit_id, results_block(design, step))
    cycle = step.results.first
    answers = {item.decision.tag: item.decision for item in step.taken if item.decision.act == "put back"}
    for flag in step.results.flags:
        _write_flag(connection, unit_id, flag, answers.get(flag.tag))
    for number, note in enumerate(step.results.notes):
        _write_note(connection, unit_id, note, f"{unit_id} {cycle} {number} {note.kind}")
    rests.store_rests(connection, unit_id, step.results.rests)
    for outcome in step.labs:
        _write_lab(connection, unit_id, outcome, int(step.results.times[0]))
    for tag in {outcome.arrival.tag for outcome in step.labs}:
        news = sum(outcome.arrival.tag == tag for outcome in step.labs)
        watch_coverage(connection, unit_id, tag, news, int(step.results.times[0]))
    for revision in step.revisions:
        _write_revision(connection, unit_id, revision, cycle)
    for taken in step.taken:
        until = taken.until
        decisions.settle_decision(
            connection, taken.decision.number, decisions.Outcome(cycle, taken.time, until, taken.refusal)
        )
    _write_left_out(connection, unit_id, design, step)
    if step.checkpoint is not None:
        storing.store_checkpoint(connection, unit_id, blocks.Checkpoint(cycle + 1, FORMAT, step.checkpoint))


def _write_left_out(connection: Connection, unit_id: int, design: UnitDesign, step: Step) -> None:
    now, sample_us = int(step.results.times[0]), design.detection.sample_us
    rows = [
        decisions.LeftOut(
            design.model.spec.sensors[item.sensor].tag,
            now + (item.since - step.results.first) * sample_us,
            None if item.until is None else now + (item.until - step.results.first) * sample_us,
            item.by_person,
        )
        for item in step.exclusions
    ]
    decisions.store_left_out(connection, unit_id, rows)


def _write_flag(connection: Connection, unit_id: int, flag: Flag, answer: Decision | None) -> None:
    if flag.cleared is not None:
        reason = "its test has come down" if answer is None else f"put back by {answer.actor}"
        happenings.clear_flag(connection, flag.flag, flag.cleared, reason)
        return
    row = happenings.Flag(
        flag.flag,
        flag.tag,
        flag.kind,
        flag.onset,
        flag.detected,
        flag.size,
        flag.size_sd,
        flag.probability,
        flag.group,
        flag.onset_from,
        flag.onset_to,
        flag.hypotheses,
    )
    happenings.open_flag(connection, unit_id, row)


def _write_note(connection: Connection, unit_id: int, note: Note, key: str) -> None:
    event = happenings.Event(unit_id, note.time, note.kind, note.text, key=key)
    happenings.record_event(connection, event)


def _write_lab(connection: Connection, unit_id: int, outcome: LabOutcome, time: int) -> None:
    arrival = outcome.arrival
    result = happenings.LabResult(
        arrival.tag, arrival.sampled, arrival.reported, arrival.value, arrival.time_uncertainty
    )
    lab_id = happenings.store_lab(connection, unit_id, result)
    used = outcome.status == "used"
    happenings.settle_lab(
        connection,
        lab_id,
        happenings.LabOutcome(
            outcome.status,
            outcome.reason,
            outcome.arrived_cycle if outcome.arrived_cycle >= 0 else None,
            outcome.counted_cycle if used else None,
            outcome.predicted,
            outcome.innovation,
            outcome.sd,
        ),
    )
    if used:
        happenings.replace_labs(connection, lab_id, replaced_by(arrival.value), time)


def _write_revision(connection: Connection, unit_id: int, revision: Revision, cycle: int) -> None:
    if len(revision.estimate):
        storing.store_revised(
            connection,
            unit_id,
            blocks.RevisedEstimates(revision.first, cycle, revision.estimate, revision.sd),
        )
    for at, state in revision.states:
        storing.store_checkpoint(connection, unit_id, blocks.Checkpoint(at, FORMAT, pack_estimator(state)))
