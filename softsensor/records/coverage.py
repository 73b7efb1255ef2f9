"""Whether laboratory results still lie inside the interval as often as promised: told as an event when they do not."""

from __future__ import annotations

from sqlalchemy import Connection, select

from softsensor.detection.coverage import PROMISED_MISSES, alarms, run_length
from softsensor.records.happenings import Event, record_event
from softsensor.records.tables import cycles, lab_results

INSIDE = 1.959963984540054
"""Standard deviations on either side that hold 95 % of a normal distribution."""
SHOWN = 40
"""Results of which the count is told."""


def watch_coverage(connection: Connection, unit_id: int, tag: str, news: int, time_us: int) -> None:
    """Look at a tag's results, the newest ``news`` of which have just come; may be repeated.

    Counted are those that were compared with a prediction of the revision that runs now, in the order of arrival,
    corrected values not.
    """
    found = connection.execute(
        select(lab_results.c.id, lab_results.c.innovation, lab_results.c.sd, cycles.c.revision_id)
        .join(
            cycles,
            (cycles.c.unit_id == lab_results.c.unit_id) & (cycles.c.cycle == lab_results.c.arrived_cycle),
        )
        .where(lab_results.c.unit_id == unit_id, lab_results.c.tag == tag)
        .where(lab_results.c.innovation.is_not(None), lab_results.c.sd.is_not(None))
        .where(lab_results.c.status.in_(("used", "waiting for a person")))
        .order_by(lab_results.c.arrived_cycle, lab_results.c.sampled_us, lab_results.c.id)
    ).all()
    rows = [row for row in found if row.revision_id == found[-1].revision_id]
    misses = [abs(row.innovation) > INSIDE * row.sd for row in rows]
    for place in alarms(misses):
        if place >= len(misses) - news:
            last = misses[max(place + 1 - SHOWN, 0) : place + 1]
            text = (
                f"{sum(last)} of the last {len(last)} results of {tag} lay outside the 95 % interval, where "
                f"{PROMISED_MISSES * len(last):.1f} are expected: the interval, the model or the laboratory has changed "
                f"(told wrongly once in {run_length(PROMISED_MISSES):.0f} results)"
            )
            key = f"coverage {unit_id} {rows[place].id}"
            record_event(connection, Event(unit_id, time_us, "coverage", text, tag, key))
