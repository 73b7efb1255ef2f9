"""Can the data tell the parameters of a fit apart? What they cannot is refused, by name."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from plant_models.plant_model import StochasticPart
from plant_models.specification import UnitSpec
from softsensor.estimation.kernel import Floats
from softsensor.estimation.noise_tuning.maximum_likelihood import Maximum
from softsensor.estimation.noise_tuning.parameters import NoiseParameter

NORMAL_95 = 1.959963984540054
LARGEST_SD = 0.5
"""Of a parameter's logarithm: its 95 % interval then reaches a factor of 2.7 to either side."""
LARGEST_CORRELATION = 0.99
UNKNOWN_DIRECTION = 3.0
"""Standard deviation of a combination of logarithms from which on the information counts as singular."""
RESPONSE = 300
"""Samples over which responses are compared."""
ALIKE = 1.0 - 1e-9
"""Cosine between two responses from which on they are the same."""
INVOLVED = 0.01
"""Share of a parameter's direction in what is unknown from which on its own standard error is unknown too."""
SHARE = 0.3
"""Smallest component by which a parameter belongs to such a combination."""


@dataclass(frozen=True)
class Certainty:
    """Standard errors of the logarithms (p,), nan where unknown; and why the data do not tell, a line each."""

    log_sd: Floats
    objections: tuple[str, ...]


def interval(value: float, log_sd: float) -> tuple[float, float]:
    """95 % interval of a parameter from the standard error of its logarithm."""
    factor = float(np.exp(NORMAL_95 * log_sd))
    return value / factor, value * factor


def certainty(fit: Maximum) -> Certainty:
    """Standard errors from the observed information, and what stands against the fit.

    Singular information: the parameters of each combination that the readings say nothing about. Otherwise parameters
    with a standard error above LARGEST_SD, and pairs correlated beyond LARGEST_CORRELATION.
    """
    names = [item.name for item in fit.parameters]
    found = [
        f"{name}: runs to the end of the range searched"
        for name, at in zip(names, fit.at_limit, strict=True)
        if at
    ]
    if not fit.converged:
        found.append("the likelihood has no maximum that was found within the steps allowed")
    values, vectors = np.linalg.eigh(fit.information)
    unknown = values < 1.0 / UNKNOWN_DIRECTION**2
    if unknown.any():
        for vector in vectors.T[unknown]:
            found.append(_cannot_tell([names[j] for j in np.flatnonzero(np.abs(vector) >= SHARE)]))
        known = vectors[:, ~unknown]
        spread = np.sqrt(np.sum(known**2 / values[~unknown], axis=1))
        involved = np.sum(vectors[:, unknown] ** 2, axis=1) > INVOLVED
        return Certainty(np.where(involved, np.nan, spread), tuple(dict.fromkeys(found)))
    covariance = (vectors / values) @ vectors.T
    log_sd = np.sqrt(np.diag(covariance))
    correlation = covariance / np.outer(log_sd, log_sd)
    for j, name in enumerate(names):
        if log_sd[j] > LARGEST_SD:
            low, high = interval(1.0, float(log_sd[j]))
            found.append(f"{name}: known only within factors of {low:.2g} to {high:.2g}")
        for other in range(j):
            if abs(correlation[j, other]) > LARGEST_CORRELATION:
                found.append(_cannot_tell([names[other], name]))
    return Certainty(log_sd, tuple(dict.fromkeys(found)))


def alike(spec: UnitSpec, part: StochasticPart, parameters: tuple[NoiseParameter, ...]) -> tuple[str, ...]:
    """A line for each two disturbances of one kind that reach the sensors in the same way, but for a factor.

    Whatever the readings, they then cannot tell which is which. Compared are the responses of all sensors to a step of
    the disturbance, over RESPONSE samples.
    """
    fitted = [item.index for item in parameters if item.key in ("sd", "walk_sd")]
    responses = {index: _response(spec, part, index) for index in fitted}
    found = []
    for place, one in enumerate(fitted):
        for other in fitted[place + 1 :]:
            first, second = spec.disturbances[one], spec.disturbances[other]
            size = np.linalg.norm(responses[one]) * np.linalg.norm(responses[other])
            same_kind = (first.sd is None) == (second.sd is None)
            if same_kind and size > 0.0 and abs(np.sum(responses[one] * responses[other])) > ALIKE * size:
                found.append(
                    f"{first.name} and {second.name}: they reach the sensors in the same way, so that no "
                    "readings can tell them apart"
                )
    return tuple(found)


def _response(spec: UnitSpec, part: StochasticPart, disturbance: int) -> Floats:
    """Response of the sensors (RESPONSE, m) to a unit step of a disturbance."""
    A, at = part.A.copy(), part.disturbance_index[disturbance]
    A[at, at] = 1.0
    x, C = np.zeros(len(part.q)), part.C[: len(spec.sensors)]
    x[at] = 1.0
    out = np.zeros((RESPONSE, len(spec.sensors)))
    for k in range(RESPONSE):
        out[k] = C @ x
        x = A @ x
    return out


def too_fast(fit: Maximum, sample_time: float) -> tuple[str, ...]:
    """A line for each time constant that was fitted as shorter than a sample: such a disturbance looks like noise."""
    return tuple(
        f"{item.name}: fitted as {value:.3g} s, shorter than the sample time; such a disturbance cannot be told from the "
        "noise of the sensors"
        for item, value in zip(fit.parameters, fit.values, strict=True)
        if item.key == "time_constant" and value < sample_time
    )


def _cannot_tell(names: list[str]) -> str:
    if len(names) == 1:
        return f"{names[0]}: the readings say nothing about it"
    return f"{', '.join(names[:-1])} and {names[-1]}: the readings cannot tell them apart"
