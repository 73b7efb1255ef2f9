"""The pictures of a tuning's report: correlations, cumulative periodograms, laboratory results less predictions."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from markupsafe import Markup

from softsensor.estimation.kernel import Floats
from softsensor.service.tuning_report import InnovationCourse, LabCourse, WhitenessCourse
from softsensor.web.picture import Course, Marks, Picture, svg_of

HALF_PAGE = (370.0, 220.0)
BESIDE = 0.16
"""Distance of the two stems of one lag from it."""


def correlation_picture(course: InnovationCourse, sample_time: str) -> Markup:
    """Correlations over lags: before (light) beside after (dark), white within the dashed bounds."""
    stems = [
        _stems(kind, found, place)
        for kind, found, place in (("was", course.before, -BESIDE), ("now", course.after, BESIDE))
        if found is not None
    ]
    lags = np.arange(1.0, len(course.before.correlation) + 1.0)
    newest = course.after or course.before
    bounds = [Course("bound", lags.tolist(), _known(sign * newest.bound)) for sign in (1.0, -1.0)]
    zero = Course("axis", [0.0, len(lags) + 1.0], [0.0, 0.0])
    return svg_of(
        Picture(
            f"{course.tag}: correlation of innovations over lags",
            "correlation",
            0.0,
            len(lags) + 1.0,
            (zero, *bounds, *stems),
            across=f"lag, samples of {sample_time}",
            size=HALF_PAGE,
        )
    )


def periodogram_picture(course: InnovationCourse) -> Markup:
    """Cumulative periodograms: before (light) and after (dark), white within the dashed bounds."""
    curves = [
        _shares(kind, found)
        for kind, found in (("was", course.before), ("now", course.after))
        if found is not None and len(found.share)
    ]
    newest = course.after or course.before
    return svg_of(
        Picture(
            f"{course.tag}: cumulative periodogram of innovations",
            "share of power",
            0.0,
            0.5,
            (*_white(newest), *curves),
            across="frequency, cycles per sample",
            size=HALF_PAGE,
        )
    )


def lab_picture(course: LabCourse, unit: str) -> Markup:
    """Laboratory results less predictions over time, with the 95 % interval before (light) and after scaling (dark)."""
    times = (course.times / 1000.0).tolist()
    changed = not np.array_equal(course.half_before, course.half_after)
    lines = [*_band("was", times, course.half_before)] if changed else []
    lines += _band("now", times, course.half_after)
    outside = np.abs(course.error) > course.half_after
    marks = tuple(
        Marks(kind, shape, (course.times[chosen] / 1000.0).tolist(), course.error[chosen].tolist())
        for kind, shape, chosen in (("result", "circle", ~outside), ("outside", "diamond", outside))
    )
    margin = max(0.01 * (times[-1] - times[0]), 60_000.0)
    return svg_of(
        Picture(
            f"{course.tag}: laboratory result less prediction",
            "transformed scale" if course.transformed else unit,
            times[0] - margin,
            times[-1] + margin,
            tuple(lines),
            levels=(0.0,),
            marks=marks,
        )
    )


def _stems(kind: str, course: WhitenessCourse, place: float) -> Course:
    x: list[float | None] = []
    y: list[float | None] = []
    for lag, value in enumerate(course.correlation.tolist(), start=1):
        if math.isfinite(value):
            x += [lag + place, lag + place, None]
            y += [0.0, value, None]
    return Course(kind, x, y)


def _shares(kind: str, course: WhitenessCourse) -> Course:
    return Course(kind, [0.0, *course.frequency.tolist()], [0.0, *course.share.tolist()])


def _white(course: WhitenessCourse) -> list[Course]:
    """The straight line of white noise and its bounds, within 0 and 1."""
    x = np.linspace(0.0, 0.5, 101)
    lines = [Course("white", [0.0, 0.5], [0.0, 1.0])]
    if math.isfinite(course.periodogram_bound):
        for sign in (1.0, -1.0):
            y = 2.0 * x + sign * course.periodogram_bound
            lines.append(Course("bound", x.tolist(), _known(np.where((y >= 0.0) & (y <= 1.0), y, np.nan))))
    return lines


def _band(kind: str, times: Sequence[float], half: Floats) -> list[Course]:
    return [Course(kind, times, _known(sign * half)) for sign in (1.0, -1.0)]


def _known(values: Floats) -> list[float | None]:
    return [value if math.isfinite(value) else None for value in values.tolist()]
