"""After a restart: what the assembly of readings knew, as far as the records tell."""

from __future__ import annotations

import numpy as np

from plant_models.specification import UnitSpec
from softsensor.readings_of_cycle import CycleQuality, CycleReadings
from softsensor.service.assembly import NO_LIMIT, AssemblyState, TagRule, rules_of
from softsensor.service.reading_rules import TagState


def held_values(spec: UnitSpec, last: CycleReadings) -> AssemblyState:
    """What the assembly knew after the last recorded cycle, as far as the record tells.

    The record keeps no source times. Inputs hold their values, as old as the record allows: one that was too old stays
    so, any other becomes too old unless it is heard again; the plant's server shows it again with its own time as soon
    as it is connected. A sensor reported on change holds its value too; any other has been used.
    """
    rules, time = rules_of(spec), int(last.times[-1])
    inputs = tuple(
        _held(time, float(value), int(quality), rule)
        for value, quality, rule in zip(last.u[-1], last.u_quality[-1], rules.inputs, strict=True)
    )
    sensors = tuple(
        TagState(newest_time=time, used_time=time)
        if rule.counts_once
        else _held(time, float(value), int(quality), rule)
        for value, quality, rule in zip(last.y[-1], last.y_quality[-1], rules.sensors, strict=True)
    )
    return AssemblyState(time, inputs, sensors)


def _held(time: int, value: float, quality: int, rule: TagRule) -> TagState:
    if not np.isfinite(value):
        return TagState(newest_time=time, used_time=time)
    oldest = time if rule.max_age == NO_LIMIT else time - rule.max_age
    since = oldest - 1 if quality == CycleQuality.STALE else oldest
    newest = quality if quality <= CycleQuality.BAD or quality == CycleQuality.UNMAPPED else None
    usable = (
        min(quality, int(CycleQuality.UNCERTAIN)) if quality <= CycleQuality.BAD else int(CycleQuality.GOOD)
    )
    return TagState(since, value, usable if newest is None else newest, since, since, value, usable)
