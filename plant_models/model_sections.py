"""The sections of a model file, all but its transfer functions."""

from __future__ import annotations

import math
from collections.abc import Collection
from dataclasses import dataclass, fields
from typing import TypeVar

from plant_models.durations import format_duration
from plant_models.model_kinds import (
    ABOVE_ZERO,
    DURATION_ABOVE_ZERO,
    FACTOR,
    FLAG,
    INPUT_TAG,
    LATE_HORIZON,
    NAME,
    NOT_BELOW_ZERO,
    NUMBER,
    RANGE,
    SAMPLE_TIME,
    TAG,
    TAGS,
    TEXT,
    UNIT,
    Kind,
)
from plant_models.model_tables import Table
from plant_models.model_transforms import read_limits, read_transform
from plant_models.quoting import quoted, suggestion
from plant_models.specification import (
    GATE,
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    LabSpec,
    Range,
    SensorSpec,
)

T = TypeVar("T")

FALSE_FLAG_INTERVAL = 30 * 86400.0
"""Wanted mean time between false flags where the file names none, in seconds."""

LEAST_CYCLES_BETWEEN_FLAGS = 100
"""A day's promise is thousands of cycles; below this a flag every few minutes would be promised."""

_VARIABLE = ("tag", "unit", "operating_point", "range", "validated_range", "transform")
_EITHER = "expected sd with time_constant, or walk_sd with initial_sd"
_OFFSET = ("bias_walk_sd", "bias_initial_sd")


def read_unit(table: Table) -> tuple[str, str, float, float | None]:
    """Name, title (the name where there is none), sample time and, where it is said, the late horizon, in seconds."""
    table.only("name", "title", "sample_time", "late_horizon")
    name = table.read("name", NAME)
    title = table.read_or("title", TEXT, name)
    return (
        name,
        title,
        table.read("sample_time", SAMPLE_TIME),
        table.read_or("late_horizon", LATE_HORIZON, None),
    )


@dataclass(frozen=True, slots=True)
class FaultTests:
    """The section on fault tests; the fields are those of UnitSpec."""

    false_flag_interval: float = FALSE_FLAG_INTERVAL
    leave_out_isolated: bool = False
    back_by_itself: bool = False
    widening: tuple[tuple[str, float], ...] = ()
    disarmed: tuple[tuple[str, str], ...] = ()
    patient: tuple[str, ...] = ()


def read_fault_tests(table: Table | None, sensors: Collection[str]) -> FaultTests:
    """How often false flags may be, what follows from a flag, and what commissioning found.

    :param sensors: the tags that factors and reasons may name.
    """
    if table is None:
        return FaultTests()
    table.only(*(item.name for item in fields(FaultTests)))
    left_out = table.read_or("leave_out_isolated", FLAG, False)
    by_itself = table.read_or("back_by_itself", FLAG, False)
    if by_itself and not left_out and table.sound("leave_out_isolated"):
        table.fault("back_by_itself", "expected leave_out_isolated = true beside it: no sensor is left out")
    return FaultTests(
        table.read_or("false_flag_interval", DURATION_ABOVE_ZERO, FALSE_FLAG_INTERVAL),
        left_out,
        by_itself,
        _by_sensor(table, "widening", FACTOR, sensors, "a table such as { TI2101A = 1.42 }"),
        _by_sensor(table, "disarmed", TEXT, sensors, "a table of reasons such as { TI2101A = 'correlated' }"),
        _patient_sensors(table, sensors),
    )


def check_interval(table: Table, tests: FaultTests, sample_time: float) -> None:
    """Refuse a false-flag interval of so few cycles that no test could keep it."""
    least = LEAST_CYCLES_BETWEEN_FLAGS * sample_time
    if table.sound("false_flag_interval") and tests.false_flag_interval < least:
        table.fault(
            "false_flag_interval",
            f"expected at least {LEAST_CYCLES_BETWEEN_FLAGS} sample times, {format_duration(least)}; got "
            f"{format_duration(tests.false_flag_interval)}",
        )


def _patient_sensors(table: Table, sensors: Collection[str]) -> tuple[str, ...]:
    tags = table.read_or("patient", TAGS, ())
    for tag in tags:
        if tag not in sensors:
            table.fault(
                "patient",
                f"expected sensors' tags, of {', '.join(sensors)}; {tag} is none{suggestion(tag, tuple(sensors))}",
            )
    return tags


def _by_sensor(
    table: Table, key: str, kind: Kind[T], sensors: Collection[str], expected: str
) -> tuple[tuple[str, T], ...]:
    inner = table.subtable(key, expected)
    if inner is None:
        return ()
    for tag in inner.values:
        if tag not in sensors:
            inner.fault(
                tag, f"expected a sensor's tag, one of {', '.join(sensors)}{suggestion(tag, tuple(sensors))}"
            )
    return tuple((tag, inner.read(tag, kind)) for tag in inner.values)


def read_input(table: Table) -> InputSpec:
    table.only(*_VARIABLE, "max_age")
    operating_point, limits, validated = _limits(table)
    return InputSpec(
        tag=table.read("tag", TAG),
        unit=table.read("unit", UNIT),
        operating_point=operating_point,
        range=limits,
        validated_range=validated,
        max_age=table.read_or("max_age", DURATION_ABOVE_ZERO, None),
        transform=read_transform(table, operating_point),
    )


def read_sensor(table: Table) -> SensorSpec:
    """A sensor; its tolerance is four times noise_sd unless it has one of its own."""
    table.only(*_VARIABLE, "noise_sd", "tolerance", *_OFFSET, "on_change", "max_age", "gate")
    operating_point, limits, validated = _limits(table)
    noise_sd = table.read("noise_sd", ABOVE_ZERO)
    if not math.isfinite(4.0 * noise_sd):
        table.fault("noise_sd", ABOVE_ZERO.refusal(noise_sd, "which is too large"))
    return SensorSpec(
        tag=table.read("tag", TAG),
        unit=table.read("unit", UNIT),
        operating_point=operating_point,
        range=limits,
        noise_sd=noise_sd,
        tolerance=table.read_or("tolerance", ABOVE_ZERO, 4.0 * noise_sd),
        validated_range=validated,
        bias_walk_sd=table.read_or("bias_walk_sd", NOT_BELOW_ZERO, 0.0),
        bias_initial_sd=table.read_or("bias_initial_sd", NOT_BELOW_ZERO, 0.0),
        on_change=table.read_or("on_change", FLAG, False),
        max_age=table.read_or("max_age", DURATION_ABOVE_ZERO, None),
        gate=table.read_or("gate", ABOVE_ZERO, GATE),
        transform=read_transform(table, operating_point),
    )


def read_estimate(table: Table) -> EstimateSpec:
    table.only(*_VARIABLE, *_OFFSET, "lab", "interval_scale", "limits")
    operating_point, limits, validated = _limits(table)
    transform = read_transform(table, operating_point)
    return EstimateSpec(
        tag=table.read("tag", TAG),
        unit=table.read("unit", UNIT),
        operating_point=operating_point,
        range=limits,
        validated_range=validated,
        bias_walk_sd=table.read_or("bias_walk_sd", NOT_BELOW_ZERO, 0.0),
        bias_initial_sd=table.read_or("bias_initial_sd", NOT_BELOW_ZERO, 0.0),
        lab=_lab(table),
        interval_scale=table.read_or("interval_scale", ABOVE_ZERO, 1.0),
        transform=transform,
        limits=read_limits(table, operating_point, transform),
    )


def read_disturbance(table: Table) -> DisturbanceSpec:
    """A disturbance: sd with time_constant, or walk_sd with or without initial_sd, and not both."""
    table.only("name", "sd", "time_constant", "walk_sd", "initial_sd", "at_input")
    name = table.read("name", NAME)
    at_input = table.read_or("at_input", INPUT_TAG, None)
    gauss_markov, walk = table.has("sd", "time_constant"), table.has("walk_sd", "initial_sd")
    mixed = gauss_markov and walk
    if mixed:
        key = "walk_sd" if table.has("walk_sd") else "initial_sd"
        table.fault(key, f"{_EITHER}; got some of both")
    elif not gauss_markov and not walk:
        table.fault("sd", f"missing; {_EITHER}")

    def read(key: str, kind: Kind[float], needed: bool) -> float | None:
        return table.read(key, kind) if needed and not mixed else table.read_or(key, kind, None)

    return DisturbanceSpec(
        name=name,
        sd=read("sd", ABOVE_ZERO, gauss_markov),
        time_constant=read("time_constant", DURATION_ABOVE_ZERO, gauss_markov),
        walk_sd=read("walk_sd", ABOVE_ZERO, walk),
        initial_sd=table.read_or("initial_sd", NOT_BELOW_ZERO, 0.0),
        at_input=at_input,
    )


def _limits(table: Table) -> tuple[float, Range, Range | None]:
    """Operating point, instrument range and validated range, which must lie within one another."""
    operating_point = table.read("operating_point", NUMBER)
    limits = table.read("range", RANGE)
    validated = table.read_or("validated_range", RANGE, None)
    if not table.sound("range"):
        return operating_point, limits, validated
    low, high = limits
    if table.sound("operating_point") and not low <= operating_point <= high:
        table.fault(
            "operating_point",
            f"expected a number within range, {low:g} to {high:g}; got {quoted(operating_point)}",
        )
    if (
        validated is not None
        and table.sound("validated_range")
        and not (low <= validated[0] and validated[1] <= high)
    ):
        found = quoted(list(validated))
        table.fault("validated_range", f"expected limits within range, {low:g} to {high:g}; got {found}")
    return operating_point, limits, validated


def _lab(table: Table) -> LabSpec | None:
    inner = table.subtable("lab", "a table such as { tag = 'AL2101', sd = 0.02 }")
    if inner is None:
        return None
    inner.only("tag", "sd")
    return LabSpec(tag=inner.read("tag", TAG), sd=inner.read("sd", ABOVE_ZERO))
