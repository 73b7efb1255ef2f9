"""Laboratory results in 1,000 random orders, late and corrected, end in the last bit where in-order processing ends.

Source: none published; the second computation of in-order processing is the dense filter in tests/independent.
"""

from __future__ import annotations

import numpy as np
import pytest
from independent.arrival_orders import (
    SAMPLES,
    Report,
    assert_same_from_the_last_report_on,
    in_order,
    outcome_of,
    random_reports,
    small_run,
    small_spec,
    true_value,
)
from independent.dense_filter import LabRow, filter_in_order

from softsensor.estimation.lab_results import with_corrections

ORDERS = 1000


def test_a_thousand_random_orders_end_where_in_order_processing_ends() -> None:
    rng = np.random.default_rng(1000)
    corrected = moved = 0
    for _ in range(ORDERS):
        reports = random_reports(rng)
        late, ordered = assert_same_from_the_last_report_on(reports)
        corrected += len(reports) > len(SAMPLES)
        moved += late.estimate.tobytes() != ordered.estimate.tobytes()
    assert corrected > 0.9 * ORDERS
    assert moved == ORDERS


def test_in_order_processing_is_that_of_the_dense_filter() -> None:
    reports = in_order(random_reports(np.random.default_rng(2)))
    rows = [LabRow(int(np.ceil(r.sampled)), int(np.ceil(r.sampled)), 0, r.value, 0.02) for r in reports]
    run = small_run()
    dense = filter_in_order(small_spec(), run.u, run.y, run.uncertain, rows)
    ours = outcome_of(reports)
    np.testing.assert_allclose(ours.estimate, dense.estimate, rtol=1e-8)
    np.testing.assert_allclose(ours.sd, dense.sd, rtol=1e-8)


@pytest.mark.parametrize("corrected_at", [20.0, 21.5, 60.0])
def test_a_corrected_value_takes_the_place_of_the_earlier_from_then_on(corrected_at: float) -> None:
    right = true_value(12.0)
    first, second = Report(12.0, 20.0, right + 0.03), Report(12.0, corrected_at, right - 0.01)
    alone, without = outcome_of([first]), outcome_of([])
    both = outcome_of([second, first] if corrected_at > 20.0 else [first, second])
    at = int(np.ceil(corrected_at))
    assert both.estimate[:20].tobytes() == without.estimate[:20].tobytes()
    if corrected_at == first.reported:  # two determinations of one sample: both count
        assert [lab.status for lab in both.labs] == ["used", "used"]
        assert both.labs[1].replaces == ()
        assert np.all(both.sd[20:] < alone.sd[20:])
        return
    assert both.estimate[20:at].tobytes() == alone.estimate[20:at].tobytes()
    assert (
        both.estimate[at:].tobytes() == outcome_of([Report(12.0, 12.0, second.value)]).estimate[at:].tobytes()
    )
    assert [lab.replaces for lab in both.labs] == [(), (first.value,)]
    assert both.labs[1].predicted == both.labs[0].predicted
    old, new = with_corrections(both.labs)
    assert (old.status, old.counted_cycle, new.status, new.counted_cycle) == ("left out", -1, "used", 12)
    assert old.reason == f"replaced by {second.value:.6g}, which was reported later for the same sample"


def test_a_correction_that_cannot_be_right_waits_and_the_earlier_value_stays() -> None:
    first, wrong = Report(12.0, 20.0, true_value(12.0)), Report(12.0, 30.0, 13.2)
    outcome = outcome_of([first, wrong])
    assert [lab.status for lab in outcome.labs] == ["used", "waiting for a person"]
    assert outcome.estimate.tobytes() == outcome_of([first]).estimate.tobytes()


def test_a_correction_of_a_value_that_could_not_be_right_is_used() -> None:
    wrong, right = Report(12.0, 20.0, 13.2), Report(12.0, 30.0, true_value(12.0))
    outcome, _ = assert_same_from_the_last_report_on([wrong, right])
    assert [lab.status for lab in outcome.labs] == ["waiting for a person", "used"]
    assert [lab.status for lab in with_corrections(outcome.labs)] == ["left out", "used"]
