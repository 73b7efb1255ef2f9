"""The largest likelihood over the logarithms of the noise parameters, by Fisher's scoring, and its standard errors.

Steps solve (I + lambda diag I) step = gradient with the expected information I, which is never indefinite, lambda
adapted as Levenberg and Marquardt do (Osborne 1992). Standard errors come from the observed information, the
differences of the exact gradient around the maximum.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from plant_models.errors import RealisationError
from plant_models.model_scale import in_model_scale
from plant_models.plant_model import PlantModel
from plant_models.specification import UnitSpec
from softsensor.estimation.kernel import Floats
from softsensor.estimation.noise_tuning.autocovariance import (
    NoisySystem,
    autocovariance_least_squares,
    innovations_of_gain,
)
from softsensor.estimation.noise_tuning.deviations import Deviations
from softsensor.estimation.noise_tuning.likelihood import Likelihood, innovations_likelihood
from softsensor.estimation.noise_tuning.parameters import (
    NoiseParameter,
    noise_model,
    offset_state,
    part_with_values,
    seen_states,
    with_values,
)
from softsensor.estimation.schedule_tables import scheduled_entries
from softsensor.estimation.steady_state import Rows, settle

REACH = 1e4
"""A parameter is looked for within this factor of its value in the file."""
LONGEST_STEP = 1.5
"""In any logarithm, at once: a factor of 4.5."""
ENOUGH = 1e-9
"""Gain of log L below which a step is not worth taking: far below what is significant (1.92)."""
MOST_STEPS = 60
DIFFERENCE = 1e-4
"""In each logarithm, to either side, for the observed information."""
LEAST_START = 1e-3
"""A variance that the start finds smaller than this share of the file's starts there."""


@dataclass(frozen=True)
class Maximum:
    """The fit: values (p,), log L there and at the file's values, observed information by logarithms (p, p), readings
    counted, steps taken, and whether the last step was too small to matter."""

    parameters: tuple[NoiseParameter, ...]
    values: Floats
    log_likelihood: float
    log_likelihood_before: float
    information: Floats
    readings: int
    steps: int
    converged: bool
    at_limit: tuple[bool, ...]
    """Which parameters ran to the end of the range that is searched."""


class NoiseFit:
    """log L of a model's readings as a function of the logarithms of its noise parameters.

    :param first: cycles before this one only lead in.
    """

    def __init__(
        self, model: PlantModel, parameters: tuple[NoiseParameter, ...], data: Deviations, first: int = 0
    ) -> None:
        self.parameters = parameters
        self._model = model
        self._data = data
        self._first = first
        self._entries = scheduled_entries(model)

    def spec_at(self, theta: Floats) -> UnitSpec:
        """The specification with these logarithms of its noise."""
        return with_values(self._model.spec, self.parameters, np.exp(theta))

    def at(self, theta: Floats) -> Likelihood:
        """log L, gradient and expected information."""
        spec = in_model_scale(self.spec_at(theta))
        part = part_with_values(spec, self._model.stochastic, self.parameters)
        noise = noise_model(spec, part, self.parameters, self._entries)
        return innovations_likelihood(noise, self._data, self._first)

    def observed_information(self, theta: Floats) -> Floats:
        """Minus the second derivatives of log L (p, p), from central differences of the exact gradient."""
        p = len(theta)
        out = np.zeros((p, p))
        for j in range(p):
            step = np.zeros(p)
            step[j] = DIFFERENCE
            out[j] = (self.at(theta - step).gradient - self.at(theta + step).gradient) / (2.0 * DIFFERENCE)
        return np.asarray(0.5 * (out + out.T))

    def start(self) -> Floats:
        """Logarithms to start from: variances by autocovariance least squares, or the file's values if better."""
        file = np.log([item.value for item in self.parameters])
        found = self._by_autocovariance(file)
        if found is None or not self.at(found).value > self.at(file).value:
            return file
        return found

    def _by_autocovariance(self, file: Floats) -> Floats | None:
        """None where the filter of the file's values does not settle, or the autocovariances do not tell."""
        spec, part = self._model.scaled, self._model.stochastic
        states, sensors = seen_states(spec, part), len(spec.sensors)
        driven = [int(state) for state in states if part.q[state] > 0.0]
        try:
            with np.errstate(invalid="ignore"):
                steady = settle(
                    part, Rows(part.C[:sensors], np.array([item.noise_sd**2 for item in spec.sensors]))
                )
        except RealisationError:
            return None
        A, C, L = (
            np.ascontiguousarray(part.A[np.ix_(states, states)]),
            np.ascontiguousarray(part.C[:sensors, states]),
            np.ascontiguousarray(steady.L[states]),
        )
        e = innovations_of_gain(A, C, L, self._data.z)[self._first :]
        G = np.eye(len(part.q))[states][:, driven]
        try:
            found = autocovariance_least_squares(NoisySystem(A, G, C), L, e)
        except ValueError:
            return None
        if not np.isfinite(found.condition):
            return None
        now = {state: float(found.process[at] / part.q[state]) for at, state in enumerate(driven)}
        changes = [self._change(item, found.measurement, now) for item in self.parameters]
        return np.asarray(file + np.array(changes))

    def _change(self, item: NoiseParameter, noise: Floats, driven: dict[int, float]) -> float:
        """By how much a parameter's logarithm moves to give the variance found."""
        spec, part = self._model.scaled, self._model.stochastic
        if item.key == "time_constant":
            return 0.0
        if item.key == "noise_sd":
            ratio = float(noise[item.index]) / spec.sensors[item.index].noise_sd ** 2
        elif item.key == "bias_walk_sd":
            ratio = driven.get(offset_state(spec, part, item.index), 1.0)
        else:
            ratio = driven.get(part.disturbance_index[item.index], 1.0)
        return 0.5 * float(np.log(min(max(ratio, LEAST_START), 1.0 / LEAST_START)))


def maximise(fit: NoiseFit) -> Maximum:
    """The largest likelihood within a factor of REACH of the file's values."""
    file = np.log([item.value for item in fit.parameters])
    low, high = file - np.log(REACH), file + np.log(REACH)
    before = fit.at(file).value
    theta = fit.start()
    here = fit.at(theta)
    damping, steps, converged = 1e-3, 0, False
    while steps < MOST_STEPS and not converged:
        steps += 1
        step = _step(here, damping, (theta <= low, theta >= high))
        following = np.clip(theta + step, low, high)
        step = following - theta
        expected = float(here.gradient @ step - 0.5 * step @ here.information @ step)
        if expected < ENOUGH:
            converged = True
            break
        there = fit.at(following)
        if there.value > here.value:
            theta, here, damping = following, there, max(damping * 0.2, 1e-9)
        else:
            damping *= 8.0
            converged = damping > 1e9
    return Maximum(
        fit.parameters,
        np.exp(theta),
        here.value,
        before,
        fit.observed_information(theta),
        here.readings,
        steps,
        converged,
        tuple(bool(at) for at in (theta <= low) | (theta >= high)),
    )


def _step(here: Likelihood, damping: float, ends: tuple[NDArray[np.bool_], NDArray[np.bool_]]) -> Floats:
    """One step, none longer than LONGEST_STEP; parameters at an end of the range that would leave it stay."""
    free = ~((ends[0] & (here.gradient < 0.0)) | (ends[1] & (here.gradient > 0.0)))
    step = np.zeros(len(free))
    if not free.any():
        return step
    I = here.information[np.ix_(free, free)]  # noqa: E741
    diagonal = np.diag(I)
    damped = I + np.diag(damping * diagonal + 1e-12 * diagonal.max(initial=0.0) + 1e-300)
    step[free] = np.linalg.lstsq(damped, here.gradient[free], rcond=None)[0]
    return np.clip(step, -LONGEST_STEP, LONGEST_STEP)
