"""The innovations of the cycles that were not fitted: figures and courses by which a tuning is judged."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from softsensor.estimation.kernel import Floats
from softsensor.estimation.noise_tuning.whiteness import correlations, cumulative_periodogram
from softsensor.service.tuning_report import InnovationCourse, Whiteness, WhitenessCourse

LAGS = 30
"""Correlations are shown over so many lags."""
POINTS = 240
"""Of a cumulative periodogram, about so many are kept for the picture."""


def whiteness_of(tags: Sequence[str], before: Floats, after: Floats) -> tuple[Whiteness, ...]:
    """For each sensor the figures of its standardised innovations (N, m), by the file's numbers and by the new ones."""
    out = []
    for i, tag in enumerate(tags):
        count = int(np.isfinite(after[:, i]).sum())
        old, new = _nis_and_whiteness(before[:, i]), _nis_and_whiteness(after[:, i])
        was, now = cumulative_periodogram(before[:, i]), cumulative_periodogram(after[:, i])
        out.append(
            Whiteness(tag, count, old[0], new[0], old[1], new[1], was.distance, now.distance, now.bound)
        )
    return tuple(out)


def innovation_courses(tags: Sequence[str], before: Floats, after: Floats) -> tuple[InnovationCourse, ...]:
    """For each sensor what is drawn of its innovations (N, m); ``after`` the same array where nothing was fitted."""
    return tuple(
        InnovationCourse(tag, _course(before[:, i]), None if after is before else _course(after[:, i]))
        for i, tag in enumerate(tags)
    )


def _course(z: Floats) -> WhitenessCourse:
    found, periodogram = correlations(z, LAGS), cumulative_periodogram(z)
    count = len(periodogram.share)
    kept = np.unique(np.linspace(0, count - 1, min(count, POINTS)).astype(np.int64)) if count else slice(0)
    return WhitenessCourse(*found, periodogram.frequency[kept], periodogram.share[kept], periodogram.bound)


def _nis_and_whiteness(z: Floats) -> tuple[float, float]:
    """Mean square and lag-one correlation of standardised innovations (N,) with gaps; nan where there are none."""
    present = z[np.isfinite(z)]
    pairs = z[1:] * z[:-1]
    pairs = pairs[np.isfinite(pairs)]
    if not len(pairs):
        return math.nan, math.nan
    nis = float(np.mean(present**2))
    return nis, float(np.mean(pairs)) / nis
