"""Faults that show in a sensor's own readings and need no comparison: stuck, lost, spike, noisy."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from softsensor.detection import state_of_tests as told
from softsensor.detection.detection_design import DetectionDesign, sensors_in_use
from softsensor.detection.flags import (
    Flag,
    Kind,
    flag_name,
)
from softsensor.detection.outcomes import SHIFT_KINDS, FollowUp, Moment, cleared, opened
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.elementary import exponential

QUIET = 360
"""Cycles without another spike, or with the sums down, after which a spike's or a shift's flag clears: a fault that comes
and goes, or that the filter half follows, stays one flag."""


def _certain(design: DetectionDesign, tag: str, kind: Kind, onset: int, moment: Moment) -> Flag:
    name = flag_name(design.model.spec.name, tag, kind, moment.time)
    return Flag(name, tag, kind, onset, moment.time, None, np.nan, np.nan, 1.0, (tag,))


def single_faults(
    design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment, sensor: int
) -> FollowUp:
    """Stuck, lost and spike: each shows in the sensor's own readings and needs no comparison."""
    bits, tag = int(moment.events[sensor]), design.model.spec.sensors[sensor].tag
    starts: tuple[tuple[int, Kind, int], ...] = (
        (told.LOST, "lost", int(tests.missing[sensor]) - 1),
        (told.STUCK, "stuck", int(tests.repeats[sensor])),
        (told.SPIKE, "spike", 1),
    )
    shift = outcome.book.find(tag, SHIFT_KINDS)
    shifted = shift is not None and shift.flag not in outcome.book.absorbed
    worked_on = outcome.book.worked_on(sensor, moment.cycle)
    for bit, kind, ago in starts:
        if worked_on or (kind == "spike" and shifted):
            continue
        if bits & bit and outcome.book.find(tag, (kind,)) is None:
            onset = moment.time - ago * design.sample_us
            outcome = _superseded(outcome, tag, kind, (onset, moment.time))
            outcome = opened(outcome, _certain(design, tag, kind, onset, moment))
    if bits & told.NOISY and not worked_on:
        outcome = _noisy(design, outcome, tests, moment, sensor)
    ends: tuple[tuple[int, Kind], ...] = (
        (told.LOST_ENDED, "lost"),
        (told.STUCK_ENDED, "stuck"),
        (told.NOISY_ENDED, "noisy"),
    )
    for bit, kind in ends:
        flag = outcome.book.find(tag, (kind,))
        if bits & bit and flag is not None:
            outcome = cleared(outcome, flag, moment.time)
    if bits & (told.LOST | told.LOST_ENDED):
        tests.valid_from[0] = moment.cycle + 1
        tests.forget_evidence()
    spike = outcome.book.find(tag, ("spike",))
    if spike is not None and moment.time - spike.detected > QUIET * design.sample_us:
        outcome = cleared(outcome, spike, moment.time)
    return outcome


def _noisy(
    design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment, sensor: int
) -> FollowUp:
    """More noise than the model file says. It reaches the other sensors' innovations through the estimate: where two
    tests are up, the sensor whose sum went further is the one."""
    use = sensors_in_use(design, outcome.book, tests, moment.cycle)
    further = [
        i for i in np.flatnonzero((tests.noisy != 0) & (use != 0)) if tests.spread[i] > tests.spread[sensor]
    ]
    tag = design.model.spec.sensors[sensor].tag
    if further or outcome.book.find(tag, ("noisy",)) is not None:
        return outcome
    flag = _certain(design, tag, "noisy", moment.time, moment)
    probability = 1.0 / (1.0 + exponential(-float(tests.spread[sensor])))
    return opened(outcome, replace(flag, probability=probability))


def _superseded(outcome: FollowUp, tag: str, kind: Kind, times: tuple[int, int]) -> FollowUp:
    """A sensor that has stuck was flagged as shifted first: one fault, the shift's flag closes."""
    shift = outcome.book.find(tag, SHIFT_KINDS)
    onset, now = times
    if kind != "stuck" or shift is None or shift.onset < onset:
        return outcome
    return cleared(outcome, shift, now)
