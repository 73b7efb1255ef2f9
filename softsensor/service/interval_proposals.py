"""How an estimate's interval stood against laboratory results, and the factor that would have kept its promise."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from plant_models.model_scale import one_to_model
from plant_models.specification import EstimateSpec
from softsensor.cycle import UnitDesign
from softsensor.estimation.kernel import Floats
from softsensor.estimation.lab_results import LabArrival, LabOutcome, with_corrections
from softsensor.estimation.noise_tuning.interval_scale import (
    LEAST_RESULTS,
    LEVEL,
    SURE_RESULTS,
    Scores,
    conformal_scale,
    share_interval,
)
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.replay import Replay, parts_of
from softsensor.service.tuned_file import Change
from softsensor.service.tuning_report import IntervalProposal, LabCourse

LEAST_SCALE = 0.05


def interval_proposals(
    tuned: UnitDesign, readings: CycleReadings, split: int, labs: Sequence[LabArrival]
) -> tuple[tuple[IntervalProposal, ...], tuple[LabCourse, ...]]:
    """For each estimate what the laboratory results after cycle ``split`` say about its interval, and their course."""
    proposals, courses = [], []
    scores = _scores(tuned, readings, split, labs)
    for estimate, (times, own) in zip(tuned.model.spec.estimates, scores, strict=True):
        proposals.append(_proposal(estimate, own))
        courses.append(_course(estimate, proposals[-1], times, own))
    return tuple(proposals), tuple(courses)


def _scores(
    tuned: UnitDesign, readings: CycleReadings, split: int, labs: Sequence[LabArrival]
) -> list[tuple[NDArray[np.int64], Scores]]:
    """For each estimate the laboratory results after cycle ``split``: sampling times and scores, in order of sampling."""
    outcomes: list[LabOutcome] = []
    variances: dict[tuple[int, int, float], float] = {}
    spec = tuned.model.spec
    published = np.full((2, len(readings), len(spec.estimates)), np.nan)
    if labs:
        running = Replay(tuned, parts_of([readings], labs), len(readings) * spec.sample_time)
        for stretch in running.stretches():
            outcomes += stretch.labs
            here = slice(stretch.results.first, stretch.results.first + len(stretch.results))
            published[0, here], published[1, here] = stretch.results.estimate, stretch.results.sd
        variances = {(item.cycle, item.estimate, item.value): item.variance for item in running.run.labs}
    published[1] /= [item.interval_scale for item in spec.estimates]
    counted = sorted(_counted(outcomes, int(readings.times[split])), key=lambda item: item.arrival.sampled)
    out = []
    for e, estimate in enumerate(spec.estimates):
        lab = tuned.model.scaled.estimates[e].lab
        own = [item for item in counted if item.arrival.estimate == e]
        usual = lab.sd**2 if lab is not None else math.nan
        results = [
            _score(
                item,
                one_to_model(estimate, item.arrival.value),
                variances.get((item.counted_cycle, e, item.arrival.value), usual),
                published[:, :, e],
            )
            for item in own
        ]
        times = np.array([item.arrival.sampled for item in own], dtype=np.int64)
        out.append((times, Scores(*np.array(results, dtype=np.float64).reshape(-1, 3).T)))
    return out


def _counted(outcomes: Sequence[LabOutcome], since: int) -> list[LabOutcome]:
    """Results sampled after a time that the estimate can be held against, without those that were corrected later."""
    return [
        item
        for item in with_corrections(outcomes)
        if item.arrival.sampled > since and item.counted_cycle >= 0 and math.isfinite(item.innovation)
    ]


def _course(
    estimate: EstimateSpec, proposal: IntervalProposal, times: NDArray[np.int64], scores: Scores
) -> LabCourse:
    """Results less predictions with half of the 95 % interval before and after scaling."""
    return LabCourse(
        estimate.tag,
        estimate.unit,
        estimate.transform is not None,
        times,
        scores.error,
        scores.half_width(proposal.scale_before),
        scores.half_width(proposal.scale),
    )


def _score(item: LabOutcome, result: float, variance: float, published: Floats) -> tuple[float, float, float]:
    """Error of a ``result`` against the estimate, the estimate's variance, its own variance; all in model scale.

    Where it arrived after the cycle it counts at, the estimate is the one published there (2, N: value, sd), without
    it; else the prediction.
    """
    if item.arrived_cycle > item.counted_cycle:
        value, sd = (float(part) for part in published[:, item.counted_cycle])
        return result - value, sd**2, variance
    return item.innovation, item.sd**2 - variance, variance


def _proposal(estimate: EstimateSpec, scores: Scores) -> IntervalProposal:
    count, before = len(scores.error), estimate.interval_scale
    hits = scores.inside(before)
    low, high = share_interval(hits, count) if count else (math.nan, math.nan)
    share = hits / count if count else math.nan
    scale, reason = _scale(scores, before, low <= LEVEL <= high)
    scaled = scores.inside(scale) / count if count else math.nan
    return IntervalProposal(estimate.tag, count, share, low, high, before, scale, scaled, reason)


def _scale(scores: Scores, before: float, agrees: bool) -> tuple[float, str]:
    """The interval scale proposed, and why."""
    count = len(scores.error)
    if count < LEAST_RESULTS:
        return (
            before,
            f"unchanged: {count} laboratory results after the fit; expected at least {LEAST_RESULTS}",
        )
    if agrees and count < SURE_RESULTS:
        return before, "unchanged: these results agree with what the interval promises"
    scale = float(f"{conformal_scale(scores):.3g}")
    if scale < LEAST_SCALE:
        return (
            before,
            "unchanged: the laboratory's own sd explains all errors, so that the interval is not tested",
        )
    return scale, f"split conformal on {count} laboratory results that the fit has not seen"


def scale_changes(intervals: Sequence[IntervalProposal]) -> tuple[Change, ...]:
    """The model file's numbers that change with these proposals."""
    return tuple(
        Change(("estimate", e, "interval_scale"), item.scale)
        for e, item in enumerate(intervals)
        if item.scale != item.scale_before
    )
