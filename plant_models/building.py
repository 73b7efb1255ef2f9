"""A unit's specification to the discrete model that the estimator runs on, checked and with its digest."""

from __future__ import annotations

import hashlib
import math
import struct
from dataclasses import fields, is_dataclass, replace
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from plant_models.discretisation import discretise
from plant_models.errors import RealisationError
from plant_models.model_scale import in_model_scale
from plant_models.plant_model import DiscretePath, PlantModel, StochasticPart
from plant_models.schedules import operating_points, path_in_operation, schedule_faults
from plant_models.specification import PathSpec, UnitSpec
from plant_models.stochastic import output_rows, scheduled_states, stochastic_part
from plant_models.transfer_function import dc_gain, faults, label

Part = TypeVar("Part", DiscretePath, StochasticPart)

_AGREEMENT = 1e-9
"""Largest disagreement between a realised gain and the transfer function's, relative to its terms."""
_COMMENTARY = frozenset({"title", "source_text", "paths"})
"""Fields of the specification that do not enter the digest; the paths enter it discretised."""
_WHERE_GIVEN = frozenset({"transform", "limits", "late_horizon"})
"""Fields that enter the digest only where they are given: a file without them has the digest it had before they were."""


def build_plant_model(spec: UnitSpec) -> PlantModel:
    """The discrete model of a unit: input-driven paths in file order, the stochastic part, and the digest.

    Every array is C-contiguous float64 and read-only.

    :raises RealisationError: with a line for each path that cannot be run, or when an array is not finite, a
        realised gain disagrees with its transfer function, or a disturbance has no stationary covariance.
    """
    _refuse_unsound(spec)
    inputs = {item.tag: index for index, item in enumerate(spec.inputs)}
    rows = output_rows(spec)
    scaled = in_model_scale(spec)
    points = operating_points(scaled)
    paths: list[DiscretePath] = []
    scheduled: list[tuple[int, PathSpec]] = []
    for path in scaled.paths:
        if path.source in inputs:
            if path.schedule is not None:
                scheduled.append((len(paths), path))
            path = path_in_operation(path, points)
            discrete = discretise(path, inputs[path.source], rows[path.target], spec.sample_time)
            _check_path(path, discrete)
            paths.append(_frozen(discrete))
    stochastic = stochastic_part(scaled)
    _check_stochastic(stochastic)
    stochastic = _frozen(stochastic)
    changing = (tuple(scheduled), scheduled_states(scaled))
    digest = _digest(spec, tuple(paths), stochastic, changing if any(changing) else ())
    return PlantModel(spec, tuple(paths), stochastic, digest, scaled, *changing)


def _refuse_unsound(spec: UnitSpec) -> None:
    """Collect what is wrong with every path before any is realised."""
    if not (math.isfinite(spec.sample_time) and spec.sample_time > 0.0):
        raise RealisationError(f"the sample time is {spec.sample_time}; expected a finite time above zero")
    sources = {item.tag for item in spec.inputs} | {item.name for item in spec.disturbances}
    targets = output_rows(spec)
    found: list[str] = []
    for path in spec.paths:
        if path.source not in sources:
            found.append(f"{label(path)}: {path.source} is neither an input nor a disturbance")
        if path.target not in targets:
            found.append(f"{label(path)}: {path.target} is neither a sensor nor an estimate")
        found.extend(faults(path))
        found.extend(schedule_faults(path, spec))
    tags = {item.tag for item in spec.inputs}
    for item in spec.disturbances:
        if item.at_input is not None and item.at_input not in tags:
            found.append(f"disturbance {item.name}: at_input names {item.at_input}, which is not an input")
    if found:
        raise RealisationError(*found)


def _check_path(path: PathSpec, discrete: DiscretePath) -> None:
    """Finite arrays; the steady state really is one; the realised gain is the transfer function's."""
    _require_finite(label(path), discrete)
    stable = discrete.c.size - discrete.integrating
    steady = discrete.steady[:stable]
    moved = (discrete.phi @ discrete.steady + discrete.gamma_recent + discrete.gamma_older)[:stable]
    if stable and np.abs(moved - steady).max() > _AGREEMENT * max(1.0, np.abs(steady).max()):
        raise RealisationError(f"{label(path)}: the discretised path does not stay in its own steady state")
    if not discrete.integrating:
        terms = np.append(discrete.c * discrete.steady, discrete.d)
        if abs(terms.sum() - dc_gain(path)) > _AGREEMENT * np.abs(terms).sum():
            raise RealisationError(
                f"{label(path)}: the realised gain {terms.sum():.12g} is not the transfer function's "
                f"{dc_gain(path):.12g}; its time constants lie too far apart for this form"
            )


def _check_stochastic(part: StochasticPart) -> None:
    """Finite arrays, a symmetric start covariance without negative variances, no negative noise."""
    _require_finite("the stochastic part", part)
    if not np.array_equal(part.P0, part.P0.T) or np.any(np.diag(part.P0) < 0.0) or np.any(part.q < 0.0):
        raise RealisationError(
            "the stochastic part: a covariance is not symmetric or has a negative variance"
        )


def _require_finite(name: str, part: DiscretePath | StochasticPart) -> None:
    for field in fields(part):
        value = getattr(part, field.name)
        if isinstance(value, np.ndarray | float) and not np.isfinite(value).all():
            raise RealisationError(f"{name}: {field.name} is not finite after discretisation")


def _frozen(part: Part) -> Part:
    """The same part with every array C-contiguous float64 and read-only."""
    arrays: dict[str, NDArray[np.float64]] = {}
    for field in fields(part):
        value = getattr(part, field.name)
        if isinstance(value, np.ndarray):
            array = np.array(value, dtype=np.float64, order="C")
            array.setflags(write=False)
            arrays[field.name] = array
    return replace(part, **arrays)  # type: ignore[arg-type]


def _digest(
    spec: UnitSpec,
    paths: tuple[DiscretePath, ...],
    stochastic: StochasticPart,
    scheduled: tuple[Any, ...],
) -> str:
    """SHA-256 over the specification without its commentary, the paths, the stochastic part, and schedules if any."""
    parts = (spec, paths, stochastic, scheduled) if scheduled else (spec, paths, stochastic)
    return hashlib.sha256(b"".join(map(_canonical, parts))).hexdigest()


def _canonical(value: Any) -> bytes:
    """A value as bytes, the same on every machine: type letter, length, content; little-endian.

    Fields of a dataclass come with their names, in the order of the class, commentary left out.
    """
    if value is None:
        return b"n"
    if isinstance(value, bool):
        return b"t" if value else b"f"
    if isinstance(value, int):
        return b"i" + struct.pack("<q", value)
    if isinstance(value, float):
        return b"d" + struct.pack("<d", value + 0.0)
    if isinstance(value, str):
        text = value.encode()
        return b"s" + struct.pack("<q", len(text)) + text
    if isinstance(value, np.ndarray):
        shape = struct.pack(f"<{value.ndim + 1}q", value.ndim, *value.shape)
        return b"a" + shape + (value + 0.0).astype("<f8").tobytes(order="C")
    if isinstance(value, tuple):
        return b"l" + struct.pack("<q", len(value)) + b"".join(map(_canonical, value))
    if is_dataclass(value):
        kept = [field.name for field in fields(value) if _counts(value, field.name)]
        content = b"".join(_canonical(name) + _canonical(getattr(value, name)) for name in kept)
        return b"o" + struct.pack("<q", len(kept)) + content
    raise TypeError(f"no canonical form for {type(value).__name__}")


def _counts(value: Any, name: str) -> bool:
    """Does a field enter the digest?"""
    return name not in _COMMENTARY and not (name in _WHERE_GIVEN and getattr(value, name) is None)
