"""The charts as Bokeh documents in JSON: shapes, axes and sources, which the page's script goes on filling.

Nothing here carries script. Sources are found by their names, which are those of ``chart_data``; the band's
source holds polygons that the page makes of the estimate's columns, one for each stretch without a gap.
"""

from __future__ import annotations

import math
from typing import Any

from bokeh.embed import json_item
from bokeh.layouts import column
from bokeh.models import (
    BoxZoomTool,
    ColumnDataSource,
    DataRange1d,
    DatetimeTickFormatter,
    HoverTool,
    PanTool,
    Range1d,
    ResetTool,
    WheelZoomTool,
)
from bokeh.models.annotations.geometry import Span
from bokeh.models.annotations.labels import LabelSet
from bokeh.plotting import figure

from plant_models.specification import EstimateSpec, SensorSpec
from softsensor.web.chart_data import Columns, Window
from softsensor.web.rows import estimate_decimals
from softsensor.web.wording import decimals_for

INK, MUTED, RULE, GROUND, BAND = "#1c2226", "#4b5459", "#c9cdce", "#eef0f0", "#c2cacd"
REVISED, WAITING, FLAGGED = "#2f6f8f", "#b34700", "#d9a400"
FONT = "11px"
TALL, LOW = 330, 230
"""Heights in pixels of the only estimate's chart, and of one of several."""


def _ticks() -> DatetimeTickFormatter:
    return DatetimeTickFormatter(
        seconds="%H:%M:%S",
        minsec="%H:%M:%S",
        minutes="%H:%M",
        hourmin="%H:%M",
        hours="%H:%M",
        days="%d %b",
        months="%b %Y",
        context=DatetimeTickFormatter(
            seconds="%Y-%m-%d",
            minsec="%Y-%m-%d",
            minutes="%Y-%m-%d",
            hourmin="%Y-%m-%d",
            hours="%Y-%m-%d",
            days="%Y",
        ),
        context_which="start",
        hide_repeats=True,
    )


def offset_words(offset_us: int) -> str:
    """An offset from UTC as on a clock.

    >>> offset_words(0), offset_words(-12_600_000_000)
    ('UTC+00:00', 'UTC-03:30')
    """
    minutes = abs(offset_us) // 60_000_000
    return f"UTC{'-' if offset_us < 0 else '+'}{minutes // 60:02d}:{minutes % 60:02d}"


def _source(
    name: str, columns: dict[str, Columns], keys: tuple[str, ...] = ("x", "value")
) -> ColumnDataSource:
    """A source with its columns; None becomes nan, which breaks a line."""
    given = columns.get(name, {key: [] for key in keys})
    data: dict[str, Any] = {
        key: [math.nan if value is None else value for value in given[key]] for key in given
    }
    return ColumnDataSource(data, name=name)


def _plot(window: Window, y_label: str, height: int, x_range: Range1d | None = None) -> Any:
    start, end = float(window.drawn(window.from_us)), float(window.drawn(window.to_us))
    shown = (
        x_range if x_range is not None else Range1d(start=start, end=end, name="time", min_interval=10_000)
    )
    plot = figure(
        height=height,
        sizing_mode="stretch_width",
        x_axis_type="datetime",
        x_range=shown,
        y_range=DataRange1d(range_padding=0.08, only_visible=True),
        tools=[
            PanTool(dimensions="width"),
            BoxZoomTool(dimensions="width"),
            WheelZoomTool(dimensions="width"),
        ],
        active_drag=None,
        toolbar_location="right",
        background_fill_color=GROUND,
        border_fill_color=None,
        outline_line_color=RULE,
        min_border_right=8,
    )
    plot.add_tools(ResetTool())
    plot.toolbar.logo = None
    plot.toolbar.autohide = True
    plot.xaxis.formatter = _ticks()
    plot.xaxis.axis_label = f"time, {offset_words(window.offset_us)}"
    plot.yaxis.axis_label = y_label
    for axis in (*plot.xaxis, *plot.yaxis):
        axis.axis_label_text_font_style = "normal"
        axis.axis_label_text_font_size = axis.major_label_text_font_size = FONT
        axis.axis_label_text_color = axis.major_label_text_color = INK
        axis.axis_line_color = axis.major_tick_line_color = MUTED
        axis.minor_tick_line_color = None
    plot.grid.grid_line_color = RULE
    return plot


def _flagged(plot: Any, flags: ColumnDataSource) -> None:
    """Shaded and hatched periods, each with its tag and kind in words."""
    plot.vstrip(
        x0="left",
        x1="right",
        source=flags,
        level="underlay",
        fill_color=FLAGGED,
        fill_alpha=0.13,
        line_color=FLAGGED,
        line_width=1,
        hatch_pattern="/",
        hatch_color=FLAGGED,
        hatch_alpha=0.22,
        hatch_scale=18,
        hatch_weight=1,
    )
    labels = LabelSet(
        x="left",
        y="row",
        y_units="screen",
        text="text",
        source=flags,
        x_offset="shift",
        text_align="align",
        text_font_size=FONT,
        text_color=INK,
        background_fill_color=GROUND,
        background_fill_alpha=0.85,
    )
    plot.add_layout(labels)


def estimate_chart(
    item: EstimateSpec, window: Window, columns: dict[str, Columns], height: int
) -> dict[str, Any]:
    """An estimate with its 95 % band, laboratory results, the revised estimate and flagged periods."""
    plot = _plot(window, f"{item.tag}, {item.unit}", height)
    span = (item.range[1] - item.range[0]) / 200.0
    plot.y_range.min_interval = 4.0 * (item.lab.sd if item.lab is not None else span)
    _flagged(plot, _source("flags", columns))
    band = plot.patches(
        "xs", "ys", source=_source("band", {}, ("xs", "ys")), fill_color=BAND, line_color=None
    )
    band.level = "underlay"
    estimate = _source("estimate", columns)
    line = plot.line("x", "value", source=estimate, line_color=INK, line_width=2)
    revised = plot.line("x", "value", source=_source("revised", columns), line_color=REVISED, line_width=1.2)
    revised.glyph.line_dash = [5, 3]
    drawn: dict[str, dict[str, Any]] = {
        "lab used": {"marker": "circle", "size": 9, "fill_color": INK, "line_color": GROUND},
        "lab waiting": {
            "marker": "diamond",
            "size": 15,
            "fill_color": GROUND,
            "line_color": WAITING,
            "line_width": 2.5,
        },
        "lab left out": {"marker": "x", "size": 11, "line_color": MUTED, "line_width": 2.5},
    }
    labs = [plot.scatter("x", "value", source=_source(name, columns), **look) for name, look in drawn.items()]
    plot.y_range.renderers = [band, line, *labs]
    pattern = _pattern(estimate_decimals(item))
    tips = [(name, f"@{name}{{{pattern}}} {_braceless(item.unit)}") for name in ("value", "lower", "upper")]
    times = [("time", "@x{%F %T}")]
    hover: dict[str, Any] = {"formatters": {"@x": "datetime"}, "visible": False}
    plot.add_tools(HoverTool(renderers=[line], mode="vline", tooltips=times + tips, **hover))
    said = [("laboratory", "@text"), ("sampled", "@x{%F %T}"), tips[0]]
    plot.add_tools(HoverTool(renderers=labs, tooltips=said, **hover))
    return dict(json_item(plot))


def _pattern(decimals: int) -> str:
    return "0." + "0" * decimals if decimals else "0"


def _braceless(text: str) -> str:
    """Text that Bokeh's tooltips take as it is."""
    return text.replace("@", "").replace("$", "").replace("{", "(").replace("}", ")")


def sensor_chart(item: SensorSpec, window: Window, columns: dict[str, Columns]) -> dict[str, Any]:
    """A sensor's reading against its prediction, and below the furthest sums as shares of their decision intervals."""
    top = _plot(window, f"{item.tag}, {item.unit}", 240)
    top.y_range.min_interval = 6.0 * item.noise_sd
    _flagged(top, _source("flags", columns))
    dots = top.scatter("x", "value", source=_source("reading", columns), size=3.5, marker="circle")
    dots.glyph.update(fill_color=REVISED, line_color=None)
    line = top.line("x", "value", source=_source("predicted", columns), line_color=INK, line_width=2)
    top.y_range.renderers = [line, dots]
    pattern = _pattern(decimals_for(item.noise_sd))
    hover: dict[str, Any] = {"formatters": {"@x": "datetime"}, "visible": False, "mode": "vline"}
    for name, renderer in (("prediction", line), ("reading", dots)):
        tips = [("time", "@x{%F %T}"), (name, f"@value{{{pattern}}} {_braceless(item.unit)}")]
        top.add_tools(HoverTool(renderers=[renderer], tooltips=tips, **hover))
    top.xaxis.axis_label = None
    bottom = _plot(window, "sums, of interval", 170, top.x_range)
    bottom.y_range = DataRange1d(start=0.0, range_padding=0.08, min_interval=1.15)
    high = bottom.line("x", "value", source=_source("high", columns), line_color=INK, line_width=2)
    low = bottom.line("x", "value", source=_source("low", columns), line_color=REVISED, line_width=1.5)
    low.glyph.line_dash = [5, 3]
    bottom.y_range.renderers = [high, low]
    bottom.add_layout(
        Span(location=1.0, dimension="width", line_color=WAITING, line_width=1.5, line_dash=[2, 3])
    )
    return dict(json_item(column(top, bottom, sizing_mode="stretch_width")))
