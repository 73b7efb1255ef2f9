"""What is published of an estimate: value and interval in its engineering unit, within its physical limits.

The estimator knows an estimate in the scale of its transfer functions as N(m, s^2), s with interval_scale in it. Published
are points of that distribution, carried back through the estimate's transform: ``value`` its median, ``lower`` and
``upper`` its 2.5 % and 97.5 % points. Where the estimate has physical limits they are those of the normal distribution
given that the truth lies within the limits. A monotone map carries points of a distribution to the same points, so that a
log gives the quantiles of a lognormal distribution. ``sd`` is s times the derivative of the inverse transform at m, limits
or not.

None of this goes back into the estimator: the state is never clipped.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy.special import log_ndtr, ndtri_exp

from plant_models.specification import EstimateSpec
from softsensor.estimation.kernel import Floats

NORMAL_95 = 1.959963984540054
"""97.5 % quantile of the standard normal distribution."""
TAIL = 0.025
"""Probability beyond either end of an interval."""


class Published(NamedTuple):
    """All of one shape, in the estimate's engineering unit."""

    value: Floats
    sd: Floats
    lower: Floats
    upper: Floats


def published(item: EstimateSpec, mean: Floats, sd: Floats) -> Published:
    """Means and standard deviations in model scale (any shape) as they are published; nan stays nan."""
    value, _, lower, upper = interval(mean, sd)
    if item.limits is not None:
        ends = limits_in_model_scale(item)
        value, lower, upper = (truncated_quantile(p, mean, sd, ends) for p in (0.5, TAIL, 1.0 - TAIL))
    if item.transform is None:
        return Published(value, sd, lower, upper)
    back = item.transform.back
    ends_back = (back(lower), back(upper)) if item.transform.rising else (back(upper), back(lower))
    return Published(back(value), sd * np.abs(item.transform.back_slope(mean)), *ends_back)


def interval(mean: Floats, sd: Floats) -> Published:
    """Without transform and limits."""
    return Published(mean, sd, mean - NORMAL_95 * sd, mean + NORMAL_95 * sd)


def published_one(item: EstimateSpec, mean: float, sd: float) -> tuple[float, float, float, float]:
    """Value, sd, lower and upper of one cycle."""
    value, spread, lower, upper = published(item, np.array([mean]), np.array([sd]))
    return float(value[0]), float(spread[0]), float(lower[0]), float(upper[0])


def limits_in_model_scale(item: EstimateSpec) -> tuple[float, float]:
    """The estimate's physical limits in model scale, the lower first; without any, the ends of what its transform covers."""
    low, high = item.limits if item.limits is not None else (-np.inf, np.inf)
    return (low, high) if item.transform is None else item.transform.limits(low, high)


def truncated_quantile(p: float, mean: Floats, sd: Floats, ends: tuple[float, float]) -> Floats:
    """The p-quantile of N(mean, sd^2) given that the truth lies between ``ends``, which may be infinite.

    With a and b the ends in standard deviations from the mean and F the normal distribution function::

        F(z) = (1 - p) F(a) + p F(b)

    a sum of positive terms: in logarithms it holds its digits far out in the lower tail, and an interval in the upper
    tail is taken by its mirror image. Where sd is zero the mean, or the end beyond which it lies.
    """
    there = np.isfinite(mean) & np.isfinite(sd)
    centre, spread = np.where(there, mean, 0.0), np.where(there & (sd > 0.0), sd, 1.0)
    a, b = (ends[0] - centre) / spread, (ends[1] - centre) / spread
    mirrored = a > 0.0
    low, high = np.where(mirrored, -b, a), np.where(mirrored, -a, b)
    share = np.where(mirrored, 1.0 - p, p)
    log_f = np.logaddexp(np.log1p(-share) + log_ndtr(low), np.log(share) + log_ndtr(high))
    z = np.clip(ndtri_exp(np.minimum(log_f, 0.0)), low, high)
    found = np.where(sd > 0.0, centre + spread * np.where(mirrored, -z, z), centre)
    return np.where(there, np.clip(found, *ends), np.nan)
