"""Tuning a model's noise on a recorded history: fit on its first part, judge on the rest, propose interval scales.

Nothing is proposed where an archive has changed the readings, where the data cannot separate what is asked for, or
where what was fitted does worse than the file on the rest of the history.
"""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import replace

import numpy as np

from connectors.history import History
from plant_models.building import build_plant_model
from plant_models.durations import parse_duration
from plant_models.plant_model import PlantModel
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.kernel import Floats
from softsensor.estimation.lab_results import LabArrival
from softsensor.estimation.noise_tuning.archive_checks import objection_to_archive, objection_to_spectrum
from softsensor.estimation.noise_tuning.maximum_likelihood import Maximum, NoiseFit, maximise
from softsensor.estimation.noise_tuning.parameters import NoiseParameter, noise_parameters
from softsensor.estimation.noise_tuning.separability import alike, certainty, interval, too_fast
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.interval_proposals import interval_proposals, scale_changes
from softsensor.service.judged_stretch import innovation_courses, whiteness_of
from softsensor.service.tuned_file import UNITS_OF_TIME, Change, changed_spec, tolerances_given
from softsensor.service.tuning_data import FIT_SHARE, TuningData, beyond_gates, standardised, tuning_data
from softsensor.service.tuning_report import FittedNumber, TuningReport
from softsensor.unit_design import design_unit

__all__ = ["FIT_SHARE", "LEAST_CYCLES", "tune", "tune_intervals", "written_value"]

LEAST_CYCLES = 500
"""In either part."""
GATE_TURNS = 5
"""Fits after which gate and fit must agree on the readings that are kept out."""
DIGITS = 4
"""Written; the fit knows no more."""
CHANCE = 3.0
"""By this and one per parameter log L on the rest may fall by chance."""


def tune(
    model: PlantModel,
    recorded: History | CycleReadings,
    labs: Sequence[LabArrival] = (),
    keep: Collection[str] = (),
) -> TuningReport:
    """Fit a model's noise on the first part of a history and judge it on the rest.

    :param recorded: a history, or cycles on record that follow each other without a gap.
    :param labs: laboratory results that lie within it.
    :param keep: names of parameters that stay as they are, such as ``TI2101A.noise_sd``.
    :raises Problem: a name in ``keep`` that the model does not have.
    """
    parameters = noise_parameters(model.spec, keep)
    data = tuning_data(design_unit(model), recorded)
    report = _blank(model.spec, data)
    refusals = _too_short(report) or (
        _archive(model.spec, data) + alike(model.spec, model.stochastic, parameters)
    )
    if refusals:
        return replace(_looked_at(report, data, data.design), refusals=refusals)
    data, fitted, best, disagreement = _fitted(data, parameters)
    known = certainty(best)
    report = replace(
        report,
        readings=best.readings,
        numbers=_numbers(best, known.log_sd),
        log_likelihood=(best.log_likelihood_before, best.log_likelihood),
    )
    refusals = known.objections + disagreement + too_fast(best, model.spec.sample_time)
    refusals += _filtered(fitted, data)
    if refusals:
        return replace(_looked_at(report, data, fitted), refusals=refusals)
    return _judged(data, report, labs)


def tune_intervals(
    model: PlantModel, recorded: History | CycleReadings, labs: Sequence[LabArrival]
) -> TuningReport:
    """Leave the noise as the file has it, and propose interval scales only, from the same later part of the history.

    For a model whose noise the data cannot give: a factor on the interval asks for no fit.
    """
    design = design_unit(model)
    data = tuning_data(design, recorded)
    report = _looked_at(_blank(model.spec, data), data, design)
    refusals = _too_short(report) + _archive(model.spec, data)
    if refusals:
        return replace(report, refusals=refusals)
    intervals, courses = interval_proposals(design, data.readings, data.split, labs)
    return replace(report, intervals=intervals, lab_courses=courses, changes=scale_changes(intervals))


def _looked_at(report: TuningReport, data: TuningData, tuned: UnitDesign) -> TuningReport:
    """The report with each sensor's innovations on the cycles that were not fitted: by the file, and by another design."""
    if report.check_cycles < LEAST_CYCLES:
        return report
    before = standardised(data.design, data)[data.split :]
    after = before if tuned is data.design else standardised(tuned, data)[data.split :]
    tags = data.design.model.sensor_tags
    courses = innovation_courses(tags, before, after)
    return replace(report, sensors=whiteness_of(tags, before, after), courses=courses)


def _fitted(
    data: TuningData, parameters: tuple[NoiseParameter, ...]
) -> tuple[TuningData, UnitDesign, Maximum, tuple[str, ...]]:
    """The fit without the readings that the gate keeps out: data without them, fitted unit, fit, what speaks against it.

    Which readings those are depends on the noise, so gate and fit take turns until they agree.
    """
    kept_out = beyond_gates(data.design, data)
    for _ in range(GATE_TURNS):
        z = np.where(kept_out, np.nan, data.seen.z)
        seen = replace(data, seen=data.seen._replace(z=z))
        fit = NoiseFit(data.design.model, parameters, seen.seen.between(0, data.split), data.lead_in)
        best = maximise(fit)
        fitted = design_unit(build_plant_model(fit.spec_at(np.log(best.values))))
        before, kept_out = kept_out, beyond_gates(fitted, data)
        if np.array_equal(before, kept_out):
            return seen, fitted, best, ()
    text = f"after {GATE_TURNS} fits it is not settled which readings lie beyond the sensors' gates"
    return seen, fitted, best, (text,)


def _judged(data: TuningData, report: TuningReport, labs: Sequence[LabArrival]) -> TuningReport:
    """The report with what the rest of the history says about the numbers to be written."""
    model = data.design.model
    changes = tuple(
        Change((item.parameter.section, item.parameter.index, item.parameter.key), item.written)
        for item in report.numbers
    )
    tuned = design_unit(build_plant_model(changed_spec(model.spec, changes, tolerances_given(model.spec))))
    check = NoiseFit(model, tuple(item.parameter for item in report.numbers), data.seen, data.split)
    before = check.at(np.log([item.parameter.value for item in report.numbers])).value
    after = check.at(np.log([item.written for item in report.numbers])).value
    refusals: tuple[str, ...] = ()
    if not after > before - CHANCE - len(report.numbers):
        refusals = (
            f"on the part that was not fitted the fit does worse than the file (log L {after:.1f}, before {before:.1f}): "
            "the two parts of the history differ",
        )
    intervals, courses = interval_proposals(tuned, data.readings, data.split, labs)
    return replace(
        _looked_at(report, data, tuned),
        check_log_likelihood=(before, after),
        intervals=intervals,
        lab_courses=courses,
        refusals=refusals,
        changes=changes + scale_changes(intervals),
    )


def _blank(spec: UnitSpec, data: TuningData) -> TuningReport:
    times = data.readings.times
    if not len(times):
        return TuningReport(spec.name, 0, 0, 0, 0, 0, 0)
    split = int(times[data.split])
    return TuningReport(
        spec.name, int(times[0]), split, int(times[-1]), data.split, len(times) - data.split, 0, data.lead_in
    )


def _too_short(report: TuningReport) -> tuple[str, ...]:
    if min(report.fit_cycles, report.check_cycles) >= LEAST_CYCLES:
        return ()
    return (
        f"the history has {report.fit_cycles} cycles to fit and {report.check_cycles} to judge the fit by; expected at "
        f"least {LEAST_CYCLES} in either part",
    )


def _archive(spec: UnitSpec, data: TuningData) -> tuple[str, ...]:
    """A line per sensor whose readings an archive has changed."""
    found = []
    for i, sensor in enumerate(spec.sensors):
        if sensor.on_change:
            objection: str | None = "it is reported on change, so that its own noise is not in the history"
        else:
            objection = objection_to_archive(data.y[:, i])
        if objection is not None:
            found.append(f"{sensor.tag}: {objection}")
    return tuple(found)


def _filtered(fitted: UnitDesign, data: TuningData) -> tuple[str, ...]:
    """A line per sensor whose innovations, with the fitted noise, show that its readings were filtered."""
    z = standardised(fitted, data)[data.lead_in : data.split]
    found = []
    for i, sensor in enumerate(fitted.model.spec.sensors):
        objection = objection_to_spectrum(z[:, i])
        if objection is not None:
            found.append(f"{sensor.tag}: {objection}")
    return tuple(found)


def _numbers(best: Maximum, log_sd: Floats) -> tuple[FittedNumber, ...]:
    out = []
    for item, value, sd in zip(best.parameters, best.values, log_sd, strict=True):
        low, high = interval(float(value), float(sd))
        out.append(FittedNumber(item, float(value), low, high, written_value(item, float(value))))
    return tuple(out)


def written_value(parameter: NoiseParameter, value: float) -> float:
    """The value as it goes into the file: a few digits, times in the unit that suits them.

    >>> written_value(NoiseParameter("sensor", 0, "TI1", "noise_sd", 1.0), 0.123456)
    0.1235
    >>> written_value(NoiseParameter("disturbance", 0, "feed", "time_constant", 1.0), 5432.1)
    5432.4
    """
    if parameter.key != "time_constant":
        return float(f"{value:.{DIGITS}g}")
    unit, size = next((unit, size) for unit, size, until in UNITS_OF_TIME if value < until)
    return parse_duration(f"{value / size:.{DIGITS}g} {unit}")
