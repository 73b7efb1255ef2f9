"""Whatever comes late, in whatever order, corrected how often: the present is that of in-order processing."""

from __future__ import annotations

from hypothesis import given, settings
from hypothesis import strategies as st
from independent.arrival_orders import (
    CYCLES,
    Report,
    assert_same_from_the_last_report_on,
    outcome_of,
    true_value,
)

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
