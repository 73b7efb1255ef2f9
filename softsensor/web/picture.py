"""A still picture of courses over time, or over a number, as inline SVG: for paper, without a script."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from markupsafe import Markup, escape

from softsensor.web.wording import moment

WIDTH, HEIGHT = 760.0, 230.0
LEFT, RIGHT, TOP, BOTTOM = 62.0, 22.0, 12.0, 34.0
TICKS = 5
STEPS_S = (
    60,
    300,
    600,
    1800,
    3600,
    7200,
    14400,
    28800,
    86400,
    172800,
    604800,
    1209600,
    2419200,
    4838400,
    14515200,
)
"""Distances between two times on the axis."""


@dataclass(frozen=True)
class Course:
    """A line through points (milliseconds since 1970 or a number, value); None breaks it. ``kind`` names its look."""

    kind: str
    x: Sequence[float | None]
    y: Sequence[float | None]


@dataclass(frozen=True)
class Area:
    """A band between two lines over time (milliseconds since 1970); None breaks it."""

    kind: str
    x: Sequence[float | None]
    lower: Sequence[float | None]
    upper: Sequence[float | None]


@dataclass(frozen=True)
class Marks:
    """Single points. ``kind`` names their look, ``shape`` is a circle, a diamond or a cross."""

    kind: str
    shape: str
    x: Sequence[float]
    y: Sequence[float]
    leads: bool = True
    """Do they always stretch the axis? Others do where that at most trebles it; those further away stand on its edge."""


@dataclass(frozen=True)
class Picture:
    """What is drawn between two times (milliseconds since 1970), or between two numbers where ``across`` names them."""

    title: str
    unit: str
    start: float
    end: float
    courses: tuple[Course, ...]
    bands: tuple[tuple[float, float, str], ...] = ()
    """Stretches of time to shade: start, end, kind."""
    levels: tuple[float, ...] = ()
    """Values drawn as horizontal lines."""
    areas: tuple[Area, ...] = ()
    marks: tuple[Marks, ...] = ()
    across: str = ""
    """What the horizontal axis counts; empty for time."""
    size: tuple[float, float] = (WIDTH, HEIGHT)


def round_step(span: float, wanted: int = TICKS) -> float:
    """A step of 1, 2 or 5 times a power of ten that cuts a span into about so many parts.

    >>> round_step(10.0), round_step(0.037), round_step(330.0)
    (2.0, 0.01, 100.0)
    """
    rough = span / wanted
    power = 10.0 ** math.floor(math.log10(rough))
    factor = next(step for step in (1.0, 2.0, 5.0, 10.0) if rough <= step * power * (1.0 + 1e-9))
    return float(f"{factor * power:.12g}")


def time_step(span_s: float) -> int:
    """Seconds between two marks on the time axis, at most eight marks."""
    return next((step for step in STEPS_S if span_s / step <= 8.0), STEPS_S[-1])


def svg_of(picture: Picture) -> Markup:
    """The picture as an SVG element; times in UTC, every text escaped."""
    low, high = _scale(picture)
    margin = 0.06 * (high - low)
    frame = _Frame(picture.start, picture.end, low - margin, high + margin, *picture.size)
    parts = [_band(frame, *band) for band in picture.bands]
    parts += [_area(frame, area) for area in picture.areas]
    parts += _value_axis(frame, picture.unit)
    parts += _number_axis(frame, picture.across) if picture.across else _time_axis(frame)
    parts += [
        f'<path class="level" d="M{LEFT} {frame.y(level):.1f}H{frame.right}"/>' for level in picture.levels
    ]
    parts += [_course(frame, course) for course in picture.courses]
    parts += [
        _mark(frame, marks, x, y) for marks in picture.marks for x, y in zip(marks.x, marks.y, strict=True)
    ]
    title = escape(picture.title)
    return Markup(
        f'<svg class="still" viewBox="0 0 {frame.width:.0f} {frame.height:.0f}" role="img" aria-label="{title}">'
        f"<title>{title}</title>{''.join(parts)}</svg>"
    )


def _scale(picture: Picture) -> tuple[float, float]:
    """Lowest and highest value that the axis must show."""
    values = [float(y) for course in picture.courses for y in course.y if y is not None]
    values += [float(y) for area in picture.areas for y in (*area.lower, *area.upper) if y is not None]
    values += [*picture.levels, *(y for marks in picture.marks if marks.leads for y in marks.y)]
    others = [y for marks in picture.marks if not marks.leads for y in marks.y]
    values = values or others
    low, high = (min(values), max(values)) if values else (0.0, 1.0)
    if high - low < 1e-12 * max(1.0, abs(high)):
        low, high = low - 0.5, high + 0.5
    span = high - low
    near = [y for y in others if low - span <= y <= high + span]
    return min([low, *near]), max([high, *near])


@dataclass(frozen=True)
class _Frame:
    start: float
    end: float
    low: float
    high: float
    width: float
    height: float

    @property
    def right(self) -> float:
        return self.width - RIGHT

    @property
    def bottom(self) -> float:
        return self.height - BOTTOM

    def x(self, time: float) -> float:
        share = (min(max(time, self.start), self.end) - self.start) / (self.end - self.start)
        return LEFT + share * (self.right - LEFT)

    def y(self, value: float) -> float:
        return TOP + (self.high - value) / (self.high - self.low) * (self.bottom - TOP)


def _band(frame: _Frame, start: float, end: float, kind: str) -> str:
    left, right = frame.x(start), frame.x(end)
    return (
        f'<rect class="{escape(kind)}" x="{left:.1f}" y="{TOP}" width="{right - left:.1f}" '
        f'height="{frame.bottom - TOP}"/>'
    )


def _value_axis(frame: _Frame, unit: str) -> list[str]:
    step = round_step(frame.high - frame.low)
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    parts = []
    for k in range(math.ceil(frame.low / step), math.floor(frame.high / step) + 1):
        y = frame.y(k * step)
        parts.append(f'<path class="grid" d="M{LEFT} {y:.1f}H{frame.right}"/>')
        parts.append(f'<text class="end" x="{LEFT - 6}" y="{y + 4:.1f}">{k * step:.{decimals}f}</text>')
    middle = TOP + (frame.bottom - TOP) / 2.0
    parts.append(f'<text class="middle" transform="translate(13 {middle}) rotate(-90)">{escape(unit)}</text>')
    return parts


def _number_axis(frame: _Frame, across: str) -> list[str]:
    step = round_step(frame.end - frame.start, 6)
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    parts = [_axis(frame)]
    for k in range(math.ceil(frame.start / step - 1e-9), math.floor(frame.end / step + 1e-9) + 1):
        x = frame.x(k * step)
        parts.append(f'<path class="axis" d="M{x:.1f} {frame.bottom}v4"/>')
        parts.append(
            f'<text class="middle" x="{x:.1f}" y="{frame.bottom + 16}">{k * step:.{decimals}f}</text>'
        )
    middle = (LEFT + frame.right) / 2.0
    parts.append(f'<text class="middle" x="{middle:.1f}" y="{frame.height - 4}">{escape(across)}</text>')
    return parts


def _axis(frame: _Frame) -> str:
    return f'<path class="axis" d="M{LEFT} {TOP}V{frame.bottom}H{frame.right}"/>'


def _time_axis(frame: _Frame) -> list[str]:
    step = time_step((frame.end - frame.start) / 1000.0) * 1000
    parts = [_axis(frame)]
    day = ""
    for time in range(math.ceil(frame.start / step) * step, math.floor(frame.end) + 1, step):
        at, x = moment(time * 1000), frame.x(time)
        new = f"{at:%Y-%m-%d}"
        parts.append(f'<path class="axis" d="M{x:.1f} {frame.bottom}v4"/>')
        parts.append(f'<text class="middle" x="{x:.1f}" y="{frame.bottom + 16}">{at:%H:%M}</text>')
        if new != day:
            parts.append(f'<text class="middle" x="{x:.1f}" y="{frame.height - 4}">{new} UTC</text>')
            day = new
    return parts


def _course(frame: _Frame, course: Course) -> str:
    pieces: list[str] = []
    pen = False
    for time, value in zip(course.x, course.y, strict=True):
        if time is None or value is None or not frame.start <= time <= frame.end:
            pen = False
            continue
        pieces.append(f"{'L' if pen else 'M'}{frame.x(time):.1f} {frame.y(value):.1f}")
        pen = True
    return f'<path class="{escape(course.kind)}" d="{"".join(pieces)}"/>'


def _area(frame: _Frame, area: Area) -> str:
    """One closed outline for each unbroken stretch."""
    stretches: list[list[tuple[float, float, float]]] = [[]]
    for time, lower, upper in zip(area.x, area.lower, area.upper, strict=True):
        if time is None or lower is None or upper is None or not frame.start <= time <= frame.end:
            stretches.append([])
        else:
            stretches[-1].append((frame.x(time), frame.y(lower), frame.y(upper)))
    outlines = []
    for points in (points for points in stretches if points):
        there = [f"{x:.1f} {upper:.1f}" for x, _, upper in points]
        back = [f"{x:.1f} {lower:.1f}" for x, lower, _ in reversed(points)]
        outlines.append(f"M{'L'.join([*there, *back])}Z")
    return f'<path class="{escape(area.kind)}" d="{"".join(outlines)}"/>'


SHAPES = {
    "circle": "M{0:.1f} {1:.1f}m-4 0a4 4 0 1 0 8 0a4 4 0 1 0 -8 0Z",
    "diamond": "M{0:.1f} {1:.1f}m0 -6l5 6l-5 6l-5 -6Z",
    "cross": "M{0:.1f} {1:.1f}m-4 -4l8 8m0 -8l-8 8",
}


def _mark(frame: _Frame, marks: Marks, time: float, value: float) -> str:
    place = SHAPES[marks.shape].format(frame.x(time), frame.y(min(max(value, frame.low), frame.high)))
    return f'<path class="{escape(marks.kind)}" d="{place}"/>'


def course_of(kind: str, columns: dict[str, list[Any]]) -> Course:
    """A course from a chart's columns."""
    return Course(kind, columns["x"], columns["value"])


def area_of(kind: str, columns: dict[str, list[Any]]) -> Area:
    """A band from a chart's columns."""
    return Area(kind, columns["x"], columns["lower"], columns["upper"])
