"""Whether a unit's sensors count now, and whether a finding on a flag has an effect."""

from __future__ import annotations

from softsensor.records import changes, decisions
from softsensor.records.decisions import LeftOut
from softsensor.records.reader import StoredFlag, Unit
from softsensor.web.rows import latest_cycle
from softsensor.web.site import Site


def newest_us(site: Site, unit: Unit) -> int | None:
    """Time of the unit's newest cycle under the model in service."""
    latest, _ = latest_cycle(site.database, unit, site.models.revision_of(unit))
    return None if latest is None else int(latest.times[-1])


def left_out_now(site: Site, unit: Unit, tag: str) -> list[LeftOut]:
    """Why a sensor does not count at the newest cycle: what a person decided, what followed from a flag."""
    now = newest_us(site, unit)
    rows = decisions.left_out_of(site.database, unit.id, tag)
    return [] if now is None else [row for row in rows if row.covers(now)]


def is_out(site: Site, unit: Unit, flag: StoredFlag) -> bool:
    """Is the flag's sensor left out, and by no person?"""
    return any(not item.by_person for item in left_out_now(site, unit, flag.tag))


def is_answerable(site: Site, unit: Unit, flag: StoredFlag) -> bool:
    """Has a finding an effect on the unit: does it close the flag, or put its sensor back?"""
    return flag.kind in changes.ANSWERED and (flag.cleared_us is None or is_out(site, unit, flag))
