"""Tuning a model's noise on a recorded history: fit on its first part, judge on the rest, propose interval scales.

Nothing is proposed where an archive has changed the readings, where the data cannot separate what is asked for, or
where what was fitted does worse than the file on the rest of the history.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from connectors.history import History
from plant_models.building import build_plant_model
from plant_models.durations import parse_duration
from plant_models.model_scale import to_model
from plant_models.plant_model import PlantModel
from plant_models.schedules import slowest_lag
from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign, rerun, usable, usable_inputs
from softsensor.detection.flags import FlagBook
from softsensor.estimation.kernel import Floats, initial_state
from softsensor.estimation.lab_results import LabArrival
from softsensor.estimation.noise_tuning.archive_checks import objection_to_archive, objection_to_spectrum
from softsensor.estimation.noise_tuning.deviations import Deviations, deviations
from softsensor.estimation.noise_tuning.maximum_likelihood import Maximum, NoiseFit, maximise
from softsensor.estimation.noise_tuning.parameters import NoiseParameter, noise_parameters
from softsensor.estimation.noise_tuning.separability import alike, certainty, interval, too_fast
from softsensor.readings_of_cycle import CycleQuality, CycleReadings
from softsensor.service.assembly import assemble_history
from softsensor.service.interval_proposals import interval_proposals, scale_changes
from softsensor.service.tuned_file import UNITS_OF_TIME, Change, changed_spec, tolerances_given
from softsensor.service.tuning_report import FittedNumber, TuningReport, Whiteness
from softsensor.service.unit_run import slice_readings
from softsensor.unit_design import design_unit

FIT_SHARE = 0.6
"""Share of the history that is fitted; the rest judges the fit."""
LEAST_CYCLES = 500
"""In either part."""
LEAD_IN = 0.05
"""At most this share of the fit only leads in: the inputs before the history are not known."""
SETTLED = 3.0
"""Slowest time constants of the inputs' paths after which the lead-in ends."""
GATE_TURNS = 5
"""Fits after which gate and fit must agree on the readings that are kept out."""
DIGITS = 4
"""Written; the fit knows no more."""
CHANCE = 3.0
"""By this and one per parameter log L on the rest may fall by chance."""


@dataclass(frozen=True)
class _Data:
    """A history as it is tuned on: cycles, readings as shown (``y``), which cycles are fitted, what the likelihood sees."""

    design: UnitDesign
    readings: CycleReadings
    y: Floats
    split: int
    lead_in: int
    seen: Deviations


def tune(
    model: PlantModel, history: History, labs: Sequence[LabArrival] = (), keep: Collection[str] = ()
) -> TuningReport:
    """Fit a model's noise on the first part of a history and judge it on the rest.

    :param labs: laboratory results that lie within the history.
    :param keep: names of parameters that stay as they are, such as ``TI2101A.noise_sd``.
    :raises Problem: a name in ``keep`` that the model does not have.
    """
    parameters = noise_parameters(model.spec, keep)
    data = _data(design_unit(model), history)
    report = _blank(model.spec, data)
    refusals = _too_short(report) or (
        _archive(model.spec, data) + alike(model.spec, model.stochastic, parameters)
    )
    if refusals:
        return replace(report, refusals=refusals)
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
        return replace(report, refusals=refusals)
    return _judged(data, report, labs)


def tune_intervals(model: PlantModel, history: History, labs: Sequence[LabArrival]) -> TuningReport:
    """Leave the noise as the file has it, and propose interval scales only, from the same later part of the history.

    For a model whose noise the data cannot give: a factor on the interval asks for no fit.
    """
    design = design_unit(model)
    data = _data(design, history)
    report = _blank(model.spec, data)
    refusals = _too_short(report) + _archive(model.spec, data)
    if refusals:
        return replace(report, refusals=refusals)
    intervals = interval_proposals(design, data.readings, data.split, labs)
    return replace(
        report, sensors=_whiteness(data, design), intervals=intervals, changes=scale_changes(intervals)
    )


def _fitted(
    data: _Data, parameters: tuple[NoiseParameter, ...]
) -> tuple[_Data, UnitDesign, Maximum, tuple[str, ...]]:
    """The fit without the readings that the gate keeps out: data without them, fitted unit, fit, what speaks against it.

    Which readings those are depends on the noise, so gate and fit take turns until they agree.
    """
    kept_out = _kept_out(data.design, data)
    for _ in range(GATE_TURNS):
        z = np.where(kept_out, np.nan, data.seen.z)
        seen = replace(data, seen=data.seen._replace(z=z))
        fit = NoiseFit(data.design.model, parameters, seen.seen.between(0, data.split), data.lead_in)
        best = maximise(fit)
        fitted = design_unit(build_plant_model(fit.spec_at(np.log(best.values))))
        before, kept_out = kept_out, _kept_out(fitted, data)
        if np.array_equal(before, kept_out):
            return seen, fitted, best, ()
    text = f"after {GATE_TURNS} fits it is not settled which readings lie beyond the sensors' gates"
    return seen, fitted, best, (text,)


def _kept_out(design: UnitDesign, data: _Data) -> NDArray[np.bool_]:
    """(N, m) true where a reading lies beyond its sensor's gate and is not used."""
    state = initial_state(design.model, design.kernel)
    _, out = rerun(design, state, FlagBook(), 0, data.readings, ())
    return np.asarray(np.isfinite(out.innovation) & (out.used == 0), dtype=np.bool_)


def _judged(data: _Data, report: TuningReport, labs: Sequence[LabArrival]) -> TuningReport:
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
    intervals = interval_proposals(tuned, data.readings, data.split, labs)
    return replace(
        report,
        check_log_likelihood=(before, after),
        sensors=_whiteness(data, tuned),
        intervals=intervals,
        refusals=refusals,
        changes=changes + scale_changes(intervals),
    )


def _data(design: UnitDesign, history: History) -> _Data:
    """Cycles from the first that has every input, and what the likelihood sees of them."""
    model = design.model
    readings = assemble_history(model.spec, history)
    complete = np.flatnonzero(np.all(np.isfinite(readings.u), axis=1))
    first = int(complete[0]) if len(complete) else len(readings)
    readings = slice_readings(readings, first, len(readings))
    y, scale = usable(design, readings)
    doubtful = np.any(readings.u_quality > CycleQuality.UNCERTAIN, axis=1).astype(np.int64)
    in_scale = to_model(model.spec.sensors, y)
    seen = deviations(model, usable_inputs(design, readings), in_scale, scale, doubtful)
    split = int(FIT_SHARE * len(readings))
    return _Data(design, readings, y, split, min(_settling(model), int(LEAD_IN * split)), seen)


def _settling(model: PlantModel) -> int:
    """Cycles after which what came before the history no longer shows in any path from an input."""
    longest = 0.0
    for path in model.paths:
        sizes = np.abs(np.linalg.eigvals(path.phi)) if path.phi.size else np.zeros(0)
        slow = sizes[(sizes > 0.0) & (sizes < 1.0 - 1e-9)]
        decay = -SETTLED / float(np.log(slow.max())) if slow.size else 0.0
        longest = max(longest, path.whole_delays + 1 + decay)
    for number, scheduled in model.scheduled:
        decay = SETTLED * slowest_lag(scheduled) / model.spec.sample_time
        longest = max(longest, model.paths[number].whole_delays + 1 + decay)
    return math.ceil(longest)


def _blank(spec: UnitSpec, data: _Data) -> TuningReport:
    times = data.readings.times
    if not len(times):
        return TuningReport(spec.name, 0, 0, 0, 0, 0, 0)
    split = int(times[data.split])
    return TuningReport(
        spec.name, int(times[0]), split, int(times[-1]), data.split, len(times) - data.split, 0
    )


def _too_short(report: TuningReport) -> tuple[str, ...]:
    if min(report.fit_cycles, report.check_cycles) >= LEAST_CYCLES:
        return ()
    return (
        f"the history has {report.fit_cycles} cycles to fit and {report.check_cycles} to judge the fit by; expected at "
        f"least {LEAST_CYCLES} in either part",
    )


def _archive(spec: UnitSpec, data: _Data) -> tuple[str, ...]:
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


def _filtered(fitted: UnitDesign, data: _Data) -> tuple[str, ...]:
    """A line per sensor whose innovations, with the fitted noise, show that its readings were filtered."""
    z = _standardised(fitted, data)[data.lead_in : data.split]
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


def _standardised(design: UnitDesign, data: _Data) -> Floats:
    """Innovations over their sd (N, m) of the live cycle without tests; nan where there is no reading."""
    state = initial_state(design.model, design.kernel)
    _, out = rerun(design, state, FlagBook(), 0, data.readings, ())
    z = np.asarray(out.innovation / out.innovation_sd, dtype=np.float64)
    z[~np.isfinite(data.seen.z)] = np.nan
    return z


def _whiteness(data: _Data, tuned: UnitDesign) -> tuple[Whiteness, ...]:
    before = _standardised(data.design, data)[data.split :]
    after = _standardised(tuned, data)[data.split :]
    out = []
    for i, tag in enumerate(tuned.model.sensor_tags):
        count = int(np.isfinite(after[:, i]).sum())
        old, new = _nis_and_whiteness(before[:, i]), _nis_and_whiteness(after[:, i])
        out.append(Whiteness(tag, count, old[0], new[0], old[1], new[1]))
    return tuple(out)


def _nis_and_whiteness(z: Floats) -> tuple[float, float]:
    """Mean square and lag-one correlation of standardised innovations (N,) with gaps; nan where there are none."""
    present = z[np.isfinite(z)]
    pairs = z[1:] * z[:-1]
    pairs = pairs[np.isfinite(pairs)]
    if not len(pairs):
        return math.nan, math.nan
    nis = float(np.mean(present**2))
    return nis, float(np.mean(pairs)) / nis
