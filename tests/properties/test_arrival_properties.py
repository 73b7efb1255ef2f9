"""Whatever comes late, in whatever order, corrected how often: the present is that of in-order processing."""

from __future__ import annotations

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from independent.arrival_orders import (
    CYCLES,
    Late,
    Report,
    assert_same_from_the_last_report_on,
    in_order,
    outcome_of,
    there,
    true_value,
    with_late,
)
from independent.replaying import outcome_of_replay

LAST = CYCLES - 2


@st.composite
def some_reports(draw: st.DrawFn) -> list[Report]:
    """Up to six samples, each reported up to four times, always at different times."""
    reports = []
    for sampled in draw(st.lists(st.integers(0, 4 * LAST - 8), max_size=6, unique=True)):
        earliest = -(-sampled // 4)
        for reported in draw(st.lists(st.integers(earliest, LAST), min_size=1, max_size=4, unique=True)):
            error = draw(st.floats(-0.03, 0.03))
            reports.append(Report(sampled / 4, float(reported), true_value(sampled / 4) + error))
    return draw(st.permutations(reports))


@settings(max_examples=60, deadline=None)
@given(reports=some_reports(), cuts=st.lists(st.integers(1, CYCLES - 1), max_size=4))
def test_late_and_corrected_results_in_any_order(reports: list[Report], cuts: list[int]) -> None:
    late, _ = assert_same_from_the_last_report_on(reports, tuple(cuts))
    assert late.digest == outcome_of(sorted(reports, key=lambda r: (r.reported, r.sampled))).digest


@settings(max_examples=60, deadline=None)
@given(
    chosen=st.lists(
        st.tuples(st.sampled_from(["FI1", "TI1"]), st.integers(1, CYCLES - 6), st.floats(4.0, 60.0)),
        max_size=40,
        unique_by=lambda item: item[:2],
    ),
    reports=some_reports(),
)
def test_readings_and_results_late_in_any_order(
    chosen: list[tuple[str, int, float]], reports: list[Report]
) -> None:
    late = [Late(tag, k, min(k + by, CYCLES - 1.0)) for tag, k, by in chosen if k in there(tag)]
    found, ordered = outcome_of_replay(with_late(late, reports)), outcome_of(in_order(reports))
    last = max([0.0, *(item.arrived for item in late), *(item.reported for item in reports)])
    first = int(np.ceil(last))
    assert found.estimate[first:].tobytes() == ordered.estimate[first:].tobytes()
    assert found.sd[first:].tobytes() == ordered.sd[first:].tobytes()
    assert found.P.tobytes() == ordered.P.tobytes()
