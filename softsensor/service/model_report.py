"""What a model file promises before anything runs: its paths, its sampling, what it can know, which faults
it can find.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

from plant_models.number_text import plain
from plant_models.plant_model import PlantModel
from plant_models.specification import UnitSpec
from softsensor.detection.absorption import LATEST_FLAG
from softsensor.detection.sheet import InputLine, SheetLine, detectability_sheet
from softsensor.estimation.observability import (
    LEAST_GAIN,
    DisturbanceKnowledge,
    EstimateKnowledge,
    disturbance_knowledge,
    estimate_knowledge,
)
from softsensor.estimation.steady_state import SteadyState, steady_state
from softsensor.estimation.what_helps import LAB_INTERVAL, Prospects, prospects
from softsensor.service.path_reports import PathReport, path_reports
from softsensor.service.scale_report import ScaleReport, scale_reports
from softsensor.service.schedule_report import PointReport, along_schedules
from softsensor.service.second_instrument import Mend, mends
from softsensor.unit_design import design_unit

CAUTION = (
    "Advisory only: estimates and flags are no safety function, no part of one "
    "and no basis for defeating one. "
    "Whether a model may be used is for the site's procedures and a licensed or "
    "otherwise authorised engineer."
)
SLOWEST_SAMPLING = 0.5
"""Sample time over a path's slowest time constant above which the sampling is called too slow for that
path.
"""
FASTEST_SAMPLING = 0.001
"""... of the fastest path's slowest time constant below which a longer sample time would do as well."""


@dataclass(frozen=True, slots=True)
class SamplingReport:
    """Sample time against the dynamics; ratio: sample time over the fastest path's slowest time constant."""

    sample_time: float
    fastest: float | None
    ratio: float | None
    adequate: bool
    advice: str


@dataclass(frozen=True, slots=True)
class SolutionReport:
    """The proof that the settled filter is the right solution."""

    states: int
    spectral_radius: float
    residual: float
    stabilising: bool
    unbounded: int


@dataclass(frozen=True, slots=True)
class ModelReport:
    """All of it. ``sound``: the sensors add something to every estimate. ``mends``: for the sensors whose faults are
    absorbed or taken for others. ``prospects``: what would make each estimate better or worse. ``scales``: tags with a
    transform or physical limits.
    """

    unit: str
    title: str
    digest: str
    false_flag_interval: float
    paths: tuple[PathReport, ...]
    sampling: SamplingReport
    solution: SolutionReport
    disturbances: tuple[DisturbanceKnowledge, ...]
    estimates: tuple[EstimateKnowledge, ...]
    prospects: tuple[Prospects, ...]
    scales: tuple[ScaleReport, ...]
    sensors: tuple[SheetLine, ...]
    inputs: tuple[InputLine, ...]
    mends: tuple[Mend, ...]
    along_schedules: tuple[PointReport, ...]
    warnings: tuple[str, ...]

    @property
    def sound(self) -> bool:
        return all(estimate.sensors_help for estimate in self.estimates)


def model_report(model: PlantModel, lab_interval: float = LAB_INTERVAL) -> ModelReport:
    """Work out the report.

    :param lab_interval: seconds between two laboratory results of one estimate, for ``prospects``.
    :raises RealisationError: the filter does not settle.
    :raises RunLengthError: a false-flag interval that no test can keep.
    """
    spec = model.spec
    paths = tuple(line for path in spec.paths for line in path_reports(path, spec))
    sampling = _sampling(paths, spec.sample_time)
    disturbances, estimates = disturbance_knowledge(model), estimate_knowledge(model)
    sheet = detectability_sheet(design_unit(model).detection)
    sensors = sheet.sensors
    return ModelReport(
        spec.name,
        spec.title,
        model.digest,
        spec.false_flag_interval,
        paths,
        sampling,
        _solution(steady_state(model)),
        disturbances,
        estimates,
        prospects(model, lab_interval),
        scale_reports(spec),
        sensors,
        sheet.inputs,
        mends(model, sensors),
        along_schedules(model),
        (
            *_about_schedules(spec),
            *_about_sampling(sampling),
            *_about_disturbances(disturbances),
            *_about_estimates(estimates),
            *_about_sensors(model, sensors),
            *_about_gates(spec, sensors),
            *_about_commissioning(spec),
        ),
    )


def _about_commissioning(spec: UnitSpec) -> Iterator[str]:
    """What commissioning found, where it changed the tests."""
    for tag, reason in spec.disarmed:
        yield f"{tag}: its tests of innovations are disarmed: {reason}"
    for tag, factor in spec.widening:
        yield f"{tag}: its decision intervals are {plain(factor)} times as wide as independent innovations would need"


def _about_schedules(spec: UnitSpec) -> Iterator[str]:
    """Everything below the transfer functions is worked out for one model."""
    for item in spec.inputs:
        if any(path.schedule is not None and path.schedule.tag == item.tag for path in spec.paths):
            yield (
                f"transfer functions change with {item.tag}: tests, signatures and all that is said here of sensors and "
                f"estimates are computed at {item.tag} = {plain(item.operating_point)} {item.unit}"
            )


def _sampling(paths: tuple[PathReport, ...], sample_time: float) -> SamplingReport:
    """Judge the sample time by each path's slowest lag; the hold itself is exact at any sample time."""
    slowest = [path.time_constants[0] for path in paths if path.time_constants]
    if not slowest:
        return SamplingReport(sample_time, None, None, True, "no path has a time constant")
    fastest = min(slowest)
    ratio = sample_time / fastest
    if ratio > SLOWEST_SAMPLING:
        advice = f"too slow for the fastest path: {duration_text(0.2 * fastest)} or less would follow it"
        return SamplingReport(sample_time, fastest, ratio, False, advice)
    if ratio < FASTEST_SAMPLING:
        advice = f"faster than needed: {duration_text(0.05 * fastest)} would follow every path as well"
        return SamplingReport(sample_time, fastest, ratio, True, advice)
    return SamplingReport(sample_time, fastest, ratio, True, "follows every path")


def duration_text(seconds: float) -> str:
    """Three significant digits in the unit that suits.

    >>> duration_text(93.0), duration_text(1.5 * 86400.0)
    ('1.55 min', '1.5 d')
    """
    for unit, size in (("d", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= size:
            return f"{plain(seconds / size, 3)} {unit}"
    return f"{plain(seconds, 3)} s"


def _solution(state: SteadyState) -> SolutionReport:
    return SolutionReport(
        state.P_prior.shape[0],
        state.spectral_radius,
        state.residual,
        state.stabilising,
        state.unbounded.shape[1],
    )


def _about_sampling(sampling: SamplingReport) -> list[str]:
    return [] if sampling.adequate else [f"the sample time is {sampling.advice}"]


def _about_disturbances(disturbances: tuple[DisturbanceKnowledge, ...]) -> list[str]:
    return [
        f"disturbance {item.name}: the sensors take less than {LEAST_GAIN:.0%} off its standard deviation"
        for item in disturbances
        if not item.observable
    ]


def _about_estimates(estimates: tuple[EstimateKnowledge, ...]) -> list[str]:
    lines = []
    for item in estimates:
        if not item.sensors_help:
            lines.append(
                f"{item.tag}: the sensors take less than {LEAST_GAIN:.0%} off its standard "
                f"deviation: no unmeasured "
                "disturbance ties it to them, so for this variable the file describes no soft sensor"
            )
        if math.isinf(item.sd_with_sensors):
            lines.append(
                f"{item.tag}: its standard deviation grows without limit: a disturbance that "
                f"walks is not seen"
            )
        elif item.own_offset and item.lab is None:
            lines.append(
                f"{item.tag}: its offset (bias_walk_sd) makes its standard deviation grow "
                f"without limit, and no "
                "laboratory results bound it"
            )
    return lines


def _about_sensors(model: PlantModel, sensors: tuple[SheetLine, ...]) -> list[str]:
    lines = []
    for spec, item in zip(model.spec.sensors, sensors, strict=True):
        if spec.bias_walk_sd > 0.0:
            lines.append(
                f"{spec.tag}: bias_walk_sd makes the filter follow this sensor's drift, so "
                f"that no test can find it: "
                "offset-free estimation and drift detection conflict; offsets belong to the "
                "estimate's bias and to "
                "laboratory results"
            )
        elif item.absorbed:
            shift = item.shift
            by = f"is absorbed by {shift.absorbed_by}" if shift.absorbed_by else "is too small for its noise"
            lines.append(
                f"{spec.tag}: a lasting bias of its tolerance {by}: it leaves {plain(shift.settled, 2)} sd, for which the "
                f"test needs more than {LATEST_FLAG:.0%} of the false-flag interval on average"
                + (": only its onset shows, and the estimates go wrong with it" if shift.absorbed_by else "")
            )
    return lines


def _about_gates(spec: UnitSpec, sensors: tuple[SheetLine, ...]) -> list[str]:
    """A gate wider than the range lets every reading in range through, wherever in it the prediction lies."""
    lines = []
    for sensor, item in zip(spec.sensors, sensors, strict=True):
        width, span = sensor.gate * item.shift.innovation_sd, sensor.range[1] - sensor.range[0]
        if width > span:
            lines.append(
                f"{sensor.tag}: its gate can never fire: {plain(sensor.gate)} sd of its innovation are {plain(width, 3)} "
                f"{item.shift.unit}, more than its whole range of {plain(span, 3)}: one impossible reading within the range "
                "moves the estimates"
            )
    return lines
