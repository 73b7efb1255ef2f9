"""News on the console, as it happens: flags, laboratory results, connection, events; not every cycle."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from datetime import UTC, datetime, timedelta
from typing import Any

import typer

from plant_models.number_text import plain
from plant_models.plant_model import PlantModel
from plant_models.units import difference_unit
from softsensor.service.live_feed import LiveFeed, News

Units = Mapping[tuple[str, str], str]
"""The unit of a tag, by the name of the plant's unit and the tag."""


def units_of(models: Iterable[PlantModel]) -> dict[tuple[str, str], str]:
    """The unit of every tag that news can be about; a laboratory's tag has its estimate's."""
    found: dict[tuple[str, str], str] = {}
    for spec in (model.spec for model in models):
        found |= {(spec.name, item.tag): item.unit for item in spec.inputs}
        found |= {(spec.name, item.tag): item.unit for item in spec.sensors}
        for estimate in spec.estimates:
            found[spec.name, estimate.tag] = estimate.unit
            if estimate.lab is not None:
                found[spec.name, estimate.lab.tag] = estimate.unit
    return found


def clock_text(time: int) -> str:
    """Date and time of day in UTC.

    >>> clock_text(0)
    '1970-01-01 00:00:00Z'
    """
    return f"{datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=time):%Y-%m-%d %H:%M:%S}Z"


def line_of(news: News, units: Units) -> str | None:
    """One line for a piece of news; None for what the console leaves out."""
    body = news.body
    if news.topic == "flag":
        return _flag_line(body, units.get((news.unit, body["tag"]), ""))
    if news.topic == "lab":
        return _lab_line(body, units.get((news.unit, body["tag"]), ""))
    if news.topic == "event":
        said = body["text"] if body["text"].startswith(body["kind"]) else f"{body['kind']}: {body['text']}"
        return f"{clock_text(body['time'])} {said}"
    if news.topic == "connection":
        return f"{clock_text(body['time'])} plant {body['state']}: {body['reason']}"
    return None


def _lab_line(body: dict[str, Any], unit: str) -> str:
    value = "no value" if body["value"] is None else _quantity(plain(body["value"], 4), unit)
    text = f"laboratory: {clock_text(body['sampled'])} {body['tag']} {value}"
    text += f", reported {clock_text(body['reported'])}: {body['status']}"
    return f"{text}; {body['reason']}" if body["reason"] else text


def _flag_line(body: dict[str, Any], unit: str) -> str:
    if body["cleared"] is not None:
        return f"{clock_text(body['cleared'])} cleared: {body['flag']}"
    text = (
        f"{clock_text(body['detected'])} FLAG {body['tag']} {body['kind']}, since {clock_text(body['onset'])}"
    )
    if body["size"] is not None:
        size = _quantity(plain(body["size"], 3), difference_unit(unit))
        text += f", size {size}"
        if body["size_sd"] is not None:
            sd = _quantity(plain(body["size_sd"], 2), difference_unit(unit))
            text += f" (sd {sd})"
        text += f", probability {body['probability']:.3f}"
    alone = body["group"] == body["tag"]
    return text + ("" if alone else f"; cannot be told apart: {body['group']}")


def _quantity(number: str, unit: str) -> str:
    return number if unit in ("", "-") else f"{number} {unit}"


async def tell_news(feed: LiveFeed, units: Units) -> None:
    """Print news until cancelled."""
    async for news in feed.subscribe():
        line = line_of(news, units)
        if line is not None:
            typer.echo(f"{news.unit}: {line}")
