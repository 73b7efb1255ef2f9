"""Which explanations cannot be told apart from a fault of a sensor: the diagnosis asked about that fault, many times over.

A fault leaves the whitened means x in the innovations that the diagnosis looks at; noise eps ~ N(0, I) is added to them. Of
each explanation, with signature v begun a cycles ago, the diagnosis takes N = v'(x + eps) and D = v'v, from these its
evidence, and from all evidence probabilities per name (``softsensor.detection.diagnosis``, the same formulas and priors). N
is linear: v'eps is computed once for every draw of the noise and serves every fault, and each fault adds its own v'x.

The draws are seeded, so the same model gives the same shares. With DRAWS of them a share of 90 % has a standard error of
1.5 %. Every sensor is taken to be in use and every reading to be there, and the diagnosis is asked once.

Source: Willsky & Jones, IEEE Trans. AC-21 (1976) 108-112, for signatures and their likelihoods.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numba import njit
from scipy.special import logsumexp

from softsensor.detection.diagnosis import NAMING_RATIO, onset_ages
from softsensor.detection.follow_up import DetectionDesign
from softsensor.detection.signatures import Hypothesis, Shape, signatures
from softsensor.estimation.kernel import Floats, Ints

DRAWS = 400
SEED = 20261201
ALIKE = 0.1
"""An explanation is like the fault where it stands beside it, or in its place, in this share of the draws or more."""
NOTHING = "nothing"


@dataclass(frozen=True, slots=True)
class SensorFault:
    """A fault to be told apart: ``size`` in the sensor's unit, for a ramp per cycle; ``age``: cycles since its onset."""

    index: int
    shape: Shape
    size: float
    age: int


@dataclass(frozen=True, slots=True)
class Isolation:
    """``named``: probability that the sensor is named, and alone; ``alike``: what it cannot be told apart from
    (instruments, disturbances, nothing at all), with the share of draws in which it stands beside the sensor or in its
    place, the largest first.
    """

    named: float
    alike: tuple[tuple[str, float], ...]


class Diagnostician:
    """The diagnosis of one unit with its noise drawn; ask it about any number of faults."""

    def __init__(self, design: DetectionDesign) -> None:
        self._design = design
        self._use = np.ones(design.kernel.n_sensors, dtype=np.int64)
        self._steady, self._table = design.table(self._use)
        self._ages = onset_ages(design.window)
        self.names = (*dict.fromkeys(suspect.name for suspect in design.suspects), NOTHING)

    def ask(self, fault: SensorFault) -> Isolation:
        """How often is the fault's sensor named alone, and what stands beside it otherwise?"""
        tag = self._design.model.spec.sensors[fault.index].tag
        logs = self.log_weights(fault)
        best = logs.max(axis=1)
        alone = best >= np.log(NAMING_RATIO) + np.array(
            [logsumexp(np.delete(row, row.argmax())) for row in logs]
        )
        own = self.names.index(tag)
        close = logs + np.log(NAMING_RATIO) > best[:, None]
        beside = np.where(alone[:, None], logs == best[:, None], close).mean(axis=0)
        order = sorted(range(len(self.names)), key=lambda place: -beside[place])
        alike = [
            (self.names[place], float(beside[place]))
            for place in order
            if place != own and beside[place] >= ALIKE
        ]
        return Isolation(float(np.mean(alone & (logs.argmax(axis=1) == own))), tuple(alike))

    def log_weights(self, fault: SensorFault) -> Floats:
        """(draws, names) log of what each name's probability is in proportion to."""
        energy, noise = self._noise
        scored = noise + projections(self._table, self._means(fault), self._ages)
        precision = np.array([suspect.prior_sd**-2 for suspect in self._design.suspects])[:, None]
        evidence = 0.5 * scored**2 / (energy + precision) - 0.5 * np.log1p(energy / precision)
        averaged = logsumexp(evidence, axis=2) - np.log(len(self._ages)) + np.log(0.5)
        logs = np.zeros((len(noise), len(self.names)))
        for place, name in enumerate(self.names[:-1]):
            chosen = [suspect.name == name for suspect in self._design.suspects]
            logs[:, place] = logsumexp(averaged[:, chosen], axis=1)
        return logs

    @cached_property
    def _noise(self) -> tuple[Floats, Floats]:
        """v'v (hypotheses, ages) and v'eps (draws, hypotheses, ages)."""
        window, m = self._design.window, self._table.shape[2]
        draw = np.random.default_rng(SEED)
        drawn = [
            projections(self._table, draw.standard_normal((window, m)), self._ages) for _ in range(DRAWS)
        ]
        energies = np.cumsum(np.sum(self._table**2, axis=2), axis=1)[:, self._ages - 1]
        return energies, np.array(drawn)

    def _means(self, fault: SensorFault) -> Floats:
        """(window, n_sensors) what the fault leaves in the whitened innovations, newest last; zero before its onset."""
        design = self._design
        truth = Hypothesis("sensor", fault.index, "", fault.shape, 1.0)
        left = signatures(design.model, design.kernel, (truth,), self._steady, self._use, fault.age)[0]
        rows = np.zeros((design.window, left.shape[1]))
        seen = left[-design.window :]
        rows[design.window - len(seen) :] = fault.size * seen
        return rows


@njit(cache=True)
def projections(table: Floats, rows: Floats, ages: Ints) -> Floats:
    """(hypotheses, ages) sum of each signature, begun so many cycles back, times the rows (window, n_sensors)."""
    window = rows.shape[0]
    out = np.zeros((table.shape[0], len(ages)))
    for h in range(table.shape[0]):
        for a in range(len(ages)):
            total = 0.0
            for lag in range(ages[a]):
                for i in range(rows.shape[1]):
                    total += table[h, lag, i] * rows[window - ages[a] + lag, i]
            out[h, a] = total
    return out
