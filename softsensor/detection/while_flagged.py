"""What goes on being looked at while an open flag explains the sums: each PATIENCE cycles, and when a sum turns round."""

from __future__ import annotations

from dataclasses import replace
from zlib import crc32

from softsensor.detection.absorbed_faults import explaining, opposed, went_back
from softsensor.detection.detection_design import DetectionDesign, explanations, look
from softsensor.detection.diagnosis import Likelihoods, named
from softsensor.detection.flagged_bias import beyond_by_look
from softsensor.detection.flags import Flag
from softsensor.detection.outcomes import EXPLAINING, PATIENCE, FollowUp, Moment
from softsensor.detection.second_fault import Beside, look_beside
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.kernel import Ints


def look_again(
    design: DetectionDesign, outcome: FollowUp, tests: TestState, moment: Moment, use: Ints
) -> tuple[FollowUp, Beside | None]:
    """While an open flag explains the sums: has its error gone back, how large is it now, is another fault beside it?

    With what is beside it, where that is another instrument's error, named alone.
    """
    turn = (moment.cycle + crc32(design.model.spec.name.encode())) % PATIENCE
    due, against = turn < design.tests.look_every, opposed(design, outcome.book, tests)
    if not due and not against:
        return outcome, None
    verdict, found = look(design, tests, use, gains=False)
    back = went_back(design, outcome, moment, (verdict, found)) if against else None
    if back is not None or not due:
        return (outcome if back is None else back), None
    flags = explaining(design, outcome.book, moment.cycle, EXPLAINING)
    further = look_beside(design, tests, use, flags, moment.time)
    weighed = _weighed_again(design, tests, moment, (flags, use), (found, further))
    outcome = replace(outcome, book=replace(outcome.book, weighed=weighed))
    if further is None or not further.share or not named(further.verdict):
        return outcome, None
    if explanations(design)[further.verdict.best].source == "disturbance":
        return outcome, None
    return outcome, further


def _weighed_again(
    design: DetectionDesign,
    tests: TestState,
    moment: Moment,
    flagged: tuple[tuple[Flag, ...], Ints],
    looks: tuple[Likelihoods, Beside | None],
) -> tuple[float, ...]:
    """Per sensor: one that is flagged beside the other flagged ones, the others beside all of them."""
    (flags, use), (alone, further) = flagged, looks
    cycles = min(moment.cycle + 1 - int(tests.valid_from[0]), design.window)
    if further is None:
        return beyond_by_look(design, alone, cycles)
    weighed = list(beyond_by_look(design, further.found, cycles))
    for flag in flags:
        if flag.tag in design.model.sensor_tags:
            rest = tuple(item for item in flags if item.tag != flag.tag)
            seen = look_beside(design, tests, use, rest, moment.time) if rest else None
            sensor = design.model.sensor_tags.index(flag.tag)
            weighed[sensor] = beyond_by_look(design, alone if seen is None else seen.found, cycles)[sensor]
    return tuple(weighed)
