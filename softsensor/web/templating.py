"""Templates in which everything is escaped and a name that is not there is an error."""

from __future__ import annotations

from jinja2 import Environment, PackageLoader, StrictUndefined

from softsensor.web import wording

FILTERS = (
    "iso",
    "utc",
    "number",
    "short",
    "percent",
    "share",
    "clock",
    "address",
    "difference_unit",
    "group_words",
    "event_words",
)
"""Functions of ``softsensor.web.wording`` that templates may use."""


def templates() -> Environment:
    """The templates of the house with the words they share."""
    found = Environment(
        loader=PackageLoader("softsensor.web", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    found.filters |= {name: getattr(wording, name) for name in FILTERS}
    return found
