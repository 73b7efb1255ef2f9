"""The transfer functions of a model file as `check` shows them: one line each, or one for each point of a schedule."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from plant_models.model_scale import variables
from plant_models.schedules import path_at
from plant_models.specification import PathSpec, UnitSpec
from plant_models.transfer_function import dc_gain, is_integrating, poles, ramp_gain, zeros
from softsensor.service.scale_report import scale_unit


@dataclass(frozen=True, slots=True)
class PathReport:
    """One transfer function: steady gain (per second where integrating) and its unit, lags, dead time in seconds
    and samples.
    """

    source: str
    target: str
    gain: float
    gain_unit: str
    integrating: bool
    time_constants: tuple[float, ...]
    """-1 / Re(pole) in seconds, longest first; an oscillating pair appears twice."""
    oscillating: bool
    inverse_response: bool
    dead_time: float
    dead_time_samples: float
    at: str = ""
    """The value of its schedule's tag at which this line holds: ``FI2103 = 8 m3/h``; empty without a schedule."""


def path_reports(path: PathSpec, spec: UnitSpec) -> Iterator[PathReport]:
    """A path's line, or one for each point of its schedule."""
    if path.schedule is None:
        yield _path(path, spec)
        return
    unit = next(item.unit for item in spec.inputs if item.tag == path.schedule.tag)
    for value in path.schedule.at:
        line = _path(path_at(path, value), spec)
        yield replace(line, at=f"{path.schedule.tag} = {value:g} {unit}")


def _path(path: PathSpec, spec: UnitSpec) -> PathReport:
    roots = poles(path)
    integrating = is_integrating(path)
    lags = sorted((-1.0 / float(pole.real) for pole in roots if pole.real < 0.0), reverse=True)
    return PathReport(
        path.source,
        path.target,
        ramp_gain(path) if integrating else dc_gain(path),
        _gain_unit(path, spec) + (" per s" if integrating else ""),
        integrating,
        tuple(lags),
        bool(np.any(np.abs(roots.imag) > 1e-6 * np.abs(roots))),
        bool(np.any(zeros(path).real > 0.0)),
        path.dead_time,
        path.dead_time / spec.sample_time,
    )


def _gain_unit(path: PathSpec, spec: UnitSpec) -> str:
    """Output unit per input unit, both of differences. A disturbance has no unit but its own."""
    units = {item.tag: scale_unit(item) for item in variables(spec)}
    source = units.get(path.source, "unit of the disturbance")
    return f"{units[path.target]} per {source}"
