"""News on the console, as it happens: flags, laboratory results, connection, events; not every cycle."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from typing import Any

import typer

from softsensor.service.live_feed import LiveFeed, News


def clock_text(time: int) -> str:
    """A time of day in UTC.

    >>> clock_text(0)
    '00:00:00Z'
    """
    return f"{datetime(1970, 1, 1, tzinfo=UTC) + timedelta(microseconds=time):%H:%M:%S}Z"


def line_of(news: News) -> str | None:
    """One line for a piece of news; None for what the console leaves out."""
    body = news.body
    if news.topic == "flag":
        return _flag_line(body)
    if news.topic == "lab":
        text = f"{clock_text(body['sampled'])} {body['tag']} {body['value']:.4g} reported {clock_text(body['reported'])}"
        return f"laboratory: {text}: {body['status']}{'; ' + body['reason'] if body['reason'] else ''}"
    if news.topic == "event":
        return f"{clock_text(body['time'])} {body['kind']}: {body['text']}"
    if news.topic == "connection":
        return f"plant {body['state']}: {body['reason']}"
    return None


def _flag_line(body: dict[str, Any]) -> str:
    if body["cleared"] is not None:
        return f"{clock_text(body['cleared'])} cleared: {body['flag']}"
    text = (
        f"{clock_text(body['detected'])} FLAG {body['tag']} {body['kind']}, since {clock_text(body['onset'])}"
    )
    if body["size"] is not None:
        text += f", size {body['size']:.3g} (sd {body['size_sd']:.2g}), probability {body['probability']:.3f}"
    alone = body["group"] == body["tag"]
    return text + ("" if alone else f"; cannot be told apart: {body['group']}")


async def tell_news(feed: LiveFeed) -> None:
    """Print news until cancelled."""
    async for news in feed.subscribe():
        line = line_of(news)
        if line is not None:
            typer.echo(f"{news.unit}: {line}")
