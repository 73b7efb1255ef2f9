"""The onset's interval against a posterior written out in numpy and scipy, and how often it holds the true onset.

COMPUTED: each onset's likelihood ratio from two Gaussian densities of all innovations stacked, the interval from the sorted
posterior; nothing of softsensor.detection is used for the expected values.
"""

from __future__ import annotations

import numpy as np
import pytest
from long_runs.models import FRACTIONATOR, design_named
from long_runs.onsets import dated
from numpy.typing import NDArray
from scipy.special import logsumexp
from scipy.stats import binom, multivariate_normal

from softsensor.detection import onsets
from softsensor.detection.flags import Flag
from softsensor.detection.onsets import onset_scores, onset_span

COUNT, SENSORS = 24, 2
Array = NDArray[np.float64]


def drawn(seed: int, onset: int, size: float) -> tuple[Array, Array, Array]:
    """White innovations (COUNT, SENSORS) with a fading step from ``onset`` cycles back, its signature and a ramp's."""
    random = np.random.default_rng(seed)
    lags = np.arange(COUNT)
    step = np.column_stack([0.4 + 0.6 * 0.8**lags, -0.3 * (1.0 - 0.8**lags)])
    ramp = np.cumsum(step, axis=0) / 6.0
    eps = random.standard_normal((COUNT, SENSORS))
    eps[COUNT - onset :] += size * step[:onset]
    return eps, step, ramp


def log_ratio(eps: Array, signature: Array, prior_sd: float) -> float:
    """Of innovations with a fault of N(0, prior_sd^2) in them against none, from two densities."""
    g = signature.ravel()
    with_it = multivariate_normal(np.zeros(len(g)), np.eye(len(g)) + prior_sd**2 * np.outer(g, g))
    return float(with_it.logpdf(eps.ravel()) - multivariate_normal(np.zeros(len(g))).logpdf(eps.ravel()))


EVERY = np.ones(COUNT, dtype=np.int64)


@pytest.mark.parametrize(
    ("seed", "onset", "size", "beginning"),
    [(1, 9, 2.0, True), (2, 14, 1.2, False), (3, 5, 3.0, True), (4, 20, 0.4, False)],
)
def test_the_interval_is_that_of_the_posterior_over_every_cycle(
    seed: int, onset: int, size: float, beginning: bool
) -> None:
    eps, step, ramp = drawn(seed, onset, size)
    prior_sd = np.array([2.0, 1.0])
    expected = np.array(
        [
            [log_ratio(eps[COUNT - age :], shape[:age], sd) for age in range(1, COUNT + 1)]
            for shape, sd in zip((step, ramp), prior_sd, strict=True)
        ]
    )
    long_ago = log_ratio(eps, np.tile(step[-1], (COUNT, 1)), 2.0)
    scores = onset_scores(np.stack([step, ramp]), prior_sd, eps, EVERY, np.array([1, 0]), EVERY)
    np.testing.assert_allclose(scores[:, :COUNT], expected, rtol=1e-9, atol=1e-9)
    assert np.isclose(scores[0, COUNT], long_ago, rtol=1e-9)
    weights = np.append(logsumexp(expected, axis=0), long_ago + np.log(COUNT))
    posterior = np.exp(weights - logsumexp(weights))
    since_then = np.cumsum(posterior)  # P(age <= 1), P(age <= 2), ...
    latest = 1 + int(np.flatnonzero(since_then > 0.025)[0])
    before = np.cumsum(posterior[::-1])[::-1]  # P(age >= 1), P(age >= 2), ...
    opened = before[COUNT - 1] > 0.025
    earliest = 0 if opened else 1 + int(np.flatnonzero(before > 0.025)[-1])
    assert onset_span(scores) == (earliest, latest)
    assert (earliest > 0) is beginning


def test_a_gross_fault_s_onset_is_one_cycle_and_its_weights_do_not_overflow() -> None:
    eps, step, ramp = drawn(7, 9, 200.0)
    scores = onset_scores(np.stack([step, ramp]), np.full(2, 50.0), eps, EVERY, np.zeros(2, np.int64), EVERY)
    assert scores.max() > 10_000.0
    assert onset_span(scores) == (9, 9)


def test_one_cycle_is_before_everything() -> None:
    assert onset_span(np.array([[3.0, -1e300]])) == (0, 1)


def test_the_true_onset_lies_within_the_interval_as_often_as_it_says() -> None:
    """Sixty seeded steps of 1 to 3 noise sd on the fractionator; the share inside, against 95 % by the binomial's 1 %."""
    design = design_named(FRACTIONATOR)
    found = [item for item in (dated(design, number) for number in range(60)) if item.flag is not None]
    assert len(found) >= 50
    assert sum(item.inside for item in found) >= binom.ppf(0.01, len(found), 0.95)
    widths = np.array([item.width(design.detection.sample_us) for item in found])
    assert 5.0 < np.nanmedian(widths) < 80.0
    for item in found:
        assert item.flag is not None
        holds(item.flag)


def test_weighing_only_between_likely_ends_changes_no_interval(monkeypatch: pytest.MonkeyPatch) -> None:
    design = design_named(FRACTIONATOR)
    near = [dated(design, number).flag for number in range(12)]
    monkeypatch.setattr(onsets, "UNLIKELY", 1e12)
    whole = [dated(design, number).flag for number in range(12)]
    assert sum(flag is not None for flag in near) >= 8
    assert near == whole


def holds(flag: Flag) -> None:
    """What is true of every flag with an interval."""
    assert flag.onset_to is not None
    assert flag.onset <= flag.onset_to <= flag.detected
    assert flag.onset_from is None or flag.onset_from <= flag.onset
    names = [name for name, _ in flag.hypotheses]
    probabilities = [probability for _, probability in flag.hypotheses]
    assert names[0] == flag.tag
    assert probabilities[0] == flag.probability
    assert "nothing" in names
    assert probabilities == sorted(probabilities, reverse=True)
    assert all(probability >= 0.001 for name, probability in flag.hypotheses if name != "nothing")
    assert 0.95 < sum(probabilities) <= 1.0 + 1e-12
