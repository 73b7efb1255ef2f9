"""A unit with a second instrument beside one of its sensors, for the question what that would be worth."""

from __future__ import annotations

from dataclasses import replace

from plant_models.specification import UnitSpec

SECOND = "a second {}"


def with_second(spec: UnitSpec, index: int) -> UnitSpec:
    """The unit with a second instrument beside one sensor, last among the sensors.

    It has the first one's transfer functions, noise, tolerance and offset, all drawn for itself.
    """
    first = spec.sensors[index]
    tag = SECOND.format(first.tag)
    paths = tuple(replace(path, target=tag) for path in spec.paths if path.target == first.tag)
    return replace(spec, sensors=(*spec.sensors, replace(first, tag=tag)), paths=(*spec.paths, *paths))
