"""One flag for the workshop: what was seen, how sure it is, what it does to the estimate, what to check and where."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from plant_models.specification import EstimateSpec, InputSpec, SensorSpec
from softsensor.published import published_one
from softsensor.records.reader import StoredFlag, Unit
from softsensor.records.series import TimedResults
from softsensor.web.flag_seen import Seen, seen_of
from softsensor.web.likely_causes import FIRST_LETTERS, causes_of, check_of
from softsensor.web.rows import latest_cycle, tag_decimals, tag_units
from softsensor.web.site import Site

NEAR = 0.05
"""Reference points lie at the operating value and this share of the range below and above it."""


@dataclass(frozen=True)
class Effect:
    """An estimate's settled sd with the sensor and without it, its sd now, and how far the sensor's error moves it in the
    end, while it counts; None where it has none."""

    tag: str
    unit: str
    decimals: int
    sd_with: float
    sd_without: float
    sd_now: float | None
    moved: float | None


@dataclass(frozen=True)
class Sheet:
    """Everything on the sheet besides the flag itself."""

    seen: Seen
    measures: str
    units: dict[str, str]
    decimals: dict[str, int]
    effects: tuple[Effect, ...]
    error: float | None
    """The error for which they are moved: the present one, or that at detection."""
    operating_value: float
    points: tuple[float, ...]
    causes: tuple[str, ...]
    check: str


def flag_sheet(site: Site, unit: Unit, flag: StoredFlag) -> Sheet:
    """The sheet of a flag, from the records and the unit's model."""
    revision = site.models.revision_of(unit)
    spec, seen = site.models.spec(revision), seen_of(site, unit, flag)
    item, value = seen.item, seen.operating_value
    if not np.isfinite(value) and item is not None:
        value = item.operating_point
    known = None if seen.now is None else seen.now.size
    error = flag.size if known is None else known
    return Sheet(
        seen,
        FIRST_LETTERS.get(flag.tag[:1].upper(), "by its tag not known"),
        tag_units(spec),
        tag_decimals(spec),
        _effects(site, unit, flag.tag, error),
        error,
        value,
        reference_points(item, value),
        causes_of(flag.tag, flag.kind),
        check_of(flag.tag, flag.kind),
    )


def reference_points(item: SensorSpec | InputSpec | None, value: float) -> tuple[float, ...]:
    """The operating value and a little below and above it, within the range of the instrument; round numbers, so that a
    printed sheet and the screen an hour later say the same."""
    if item is None or not np.isfinite(value):
        return ()
    low, high = item.range
    step = NEAR * (high - low)
    middle = min(max(value, low + step), high - step)
    unit = 10.0 ** math.floor(math.log10(step / 2.0))
    return tuple(round(point / unit) * unit for point in (middle - step, middle, middle + step))


def _published_sd(item: EstimateSpec, latest: TimedResults, e: int) -> float:
    return published_one(item, float(latest.results.estimate[-1, e]), float(latest.results.sd[-1, e]))[1]


def _effects(site: Site, unit: Unit, tag: str, error: float | None) -> tuple[Effect, ...]:
    revision = site.models.revision_of(unit)
    spec = site.models.spec(revision)
    tags = [sensor.tag for sensor in spec.sensors]
    if tag not in tags:
        return ()
    moved = site.models.moved(revision)
    latest, _ = latest_cycle(site.database, unit, revision)
    decimals, found = tag_decimals(spec), []
    for e, known in enumerate(site.models.knowledge(revision)):
        now = None if latest is None else _published_sd(spec.estimates[e], latest, e)
        found.append(
            Effect(
                known.tag,
                known.unit,
                decimals[known.tag] + 1,
                known.sd_with_sensors,
                dict(known.sd_without)[tag],
                now if now is not None and np.isfinite(now) else None,
                None if moved is None or error is None else float(moved[e, tags.index(tag)]) * error,
            )
        )
    return tuple(found)
