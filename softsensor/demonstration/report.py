"""The demonstration's report: the estimate against the truth that only the simulator knows, and everything promised."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from plant_models.number_text import plain
from plant_models.plant_model import PlantModel
from plant_models.simulators.scenario import DemoScenario
from softsensor.cycle import start
from softsensor.demonstration.plant_side import Truth
from softsensor.detection.detection_design import look
from softsensor.estimation.kernel import Floats
from softsensor.published import NORMAL_95
from softsensor.readings_of_cycle import CycleQuality, CycleReadings, join_readings
from softsensor.records import audit, series
from softsensor.records.engine import Database
from softsensor.records.reader import StoredFlag, StoredLab, find_unit, flags_of, lab_results_of
from softsensor.service.replay import Replay
from softsensor.unit_design import design_unit


@dataclass(frozen=True)
class Score:
    """Errors are root mean squares over all cycles, in the estimate's unit; coverage is a share."""

    cycles: int
    estimate: float
    open_loop: float
    last_lab: float
    coverage: float


@dataclass(frozen=True)
class Report:
    """Everything that the demonstration shows."""

    unit: str
    score: Score
    flags: tuple[StoredFlag, ...]
    labs: tuple[StoredLab, ...]
    trail: audit.AuditReport
    digest: str
    restarts: int


def make_report(database: Database, model: PlantModel, truth: Truth, restarts: int) -> Report:
    """Score the records of a run against the simulator's truth."""
    unit = find_unit(database, model.spec.name)
    latest = series.latest_results(database, unit.id)
    assert latest is not None
    blocks = list(series.published(database, unit.id, 0, latest.results.first_cycle))
    readings = join_readings(
        [part.readings for part in series.readings(database, unit.id, 0, latest.results.first_cycle)]
    )
    times = np.concatenate([block.times for block in blocks])
    value = np.concatenate([block.results.estimate[:, 0] for block in blocks])
    sd = np.concatenate([block.results.sd[:, 0] for block in blocks])
    return Report(
        model.spec.estimates[0].unit,
        _score(model, readings, truth, (times, value, sd)),
        tuple(flags_of(database, unit.id)),
        tuple(lab_results_of(database, unit.id)),
        audit.verify(database),
        latest.results.digests[-1].hex(),
        restarts,
    )


def _score(
    model: PlantModel,
    readings: CycleReadings,
    truth: Truth,
    published: tuple[np.ndarray, Floats, Floats],
) -> Score:
    times, value, sd = published
    known = np.isin(times, np.array(truth.times))
    true = np.array(truth.values)[np.searchsorted(np.array(truth.times), times[known])]
    error = value[known] - true
    open_loop = open_loop_estimate(model, readings)[np.isin(readings.times, times[known])]
    held = last_laboratory_value(model, truth, times[known])
    inside = np.abs(error) <= NORMAL_95 * sd[known]
    return Score(len(error), _rms(error), _rms(open_loop - true), _rms(held - true), float(np.mean(inside)))


def _rms(error: Floats) -> float:
    return float(np.sqrt(np.mean(error**2)))


def open_loop_estimate(model: PlantModel, readings: CycleReadings) -> Floats:
    """What the transfer functions alone make of the inputs: no sensor, no laboratory result."""
    blind = replace(
        readings,
        y=np.full_like(readings.y, np.nan),
        y_quality=np.full_like(readings.y_quality, CycleQuality.MISSING),
    )
    running = Replay(design_unit(model), [(blind, [])])
    return np.concatenate([stretch.results.estimate[:, 0] for stretch in running.stretches()])


def last_laboratory_value(model: PlantModel, truth: Truth, times: np.ndarray) -> Floats:
    """The newest reported laboratory value at each time; the operating point before the first."""
    held = np.full(len(times), model.spec.estimates[0].operating_point)
    for lab in sorted(truth.labs, key=lambda item: item.reported_at):
        held[times >= lab.reported_at] = lab.value
    return held


def report_lines(report: Report, story: DemoScenario, began: int) -> list[str]:
    """The report in words."""
    score, unit = report.score, report.unit
    best = min(score.open_loop, score.last_lab)
    lines = [
        "",
        f"After {score.cycles} cycles, against the simulator's true concentration (root mean square error):",
        f"  estimate                        {score.estimate:.4f} {unit}",
        f"  open-loop model                 {score.open_loop:.4f} {unit}",
        f"  last laboratory result held     {score.last_lab:.4f} {unit}",
        f"  the estimate's error is {score.estimate / best:.0%} of the better of the two",
        f"  true value inside the 95 % interval in {score.coverage:.1%} of cycles",
    ]
    in_order = sorted(report.flags, key=lambda flag: (flag.detected_us, flag.id))
    lines += [_flag_line(flag, story, began) for flag in in_order] or ["No flag."]
    used = sum(lab.status == "used" for lab in report.labs)
    lines.append(f"Laboratory results: {used} used of {len(report.labs)}.")
    lines += [
        f"  not used: {plain(lab.value, 4)} {unit}, {lab.status}; {lab.reason}"
        for lab in report.labs
        if lab.status != "used"
    ]
    state = (
        "whole" if report.trail.whole else f"BROKEN at entry {report.trail.first_broken}: {report.trail.why}"
    )
    lines.append(f"Audit trail: {report.trail.entries} entries, {state}.")
    if report.restarts:
        lines.append(f"The service was started again {report.restarts} times.")
    lines.append(f"Digest of all results: {report.digest}")
    return lines


def _flag_line(flag: StoredFlag, story: DemoScenario, began: int) -> str:
    minutes = (flag.detected_us - began) / 60e6
    text = (
        f"Flag after {minutes:.0f} min: {flag.tag} {flag.kind}, probability {flag.probability:.3f}, "
        f"group: {'; '.join(flag.group)}"
    )
    return f"{text}; {_judged(flag, story, began)}"


def _judged(flag: StoredFlag, story: DemoScenario, began: int) -> str:
    """The flag against what the simulator knows: its one fault is the story's drift."""
    if flag.kind == "lost":
        return "readings that did not arrive, no fault of the instrument"
    drift_start = began + round(story.drift_start * 1e6)
    under_way = story.drift_rate != 0.0 and flag.detected_us > drift_start
    if not under_way or flag.kind not in ("bias", "drift"):
        return "a FALSE flag: the simulator knows of no such fault at that time"
    if flag.tag != story.drift_tag:
        place = "in its group" if story.drift_tag in flag.group else "not in its group"
        return f"a FALSE name: the simulator's fault is a drift of {story.drift_tag}, {place}"
    after = (flag.detected_us - drift_start) / 60e6
    grown = story.drift_rate * after / 60.0
    error = math.copysign(min(abs(grown), story.drift_limit), grown)
    onset = (flag.onset_us - drift_start) / 60e6
    return (
        f"true: the simulator's drift; its onset is {abs(onset):.0f} min {'late' if onset > 0 else 'early'}; "
        f"found {after:.0f} min after it began, at an error of {error:.2f} K"
    )


def warm_up(model: PlantModel) -> None:
    """Run a few cycles, so that what is compiled once is compiled before the plant's time starts."""
    design = design_unit(model)
    n_inputs, n_sensors = design.kernel.n_inputs, design.kernel.n_sensors
    times = np.arange(3, dtype=np.int64) * design.detection.sample_us
    readings = CycleReadings(
        times,
        np.tile(design.kernel.operating_u, (3, 1)),
        np.zeros((3, n_inputs), dtype=np.int8),
        np.tile(design.kernel.operating_y[:n_sensors], (3, 1)),
        np.zeros((3, n_sensors), dtype=np.int8),
    )
    for _ in Replay(design, [(readings, [])]).stretches():
        pass
    look(design.detection, start(design).tests, np.ones(n_sensors, dtype=np.int64))
