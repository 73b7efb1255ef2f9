"""Which explanations cannot be told apart from an instrument's fault: the diagnosis asked about that fault, many times over.

A fault leaves the whitened means x in the innovations that the diagnosis looks at; noise eps ~ N(0, I) is added to them. Of
each explanation, with signature v begun a cycles ago, the diagnosis takes N = v'(x + eps) and D = v'v, from these its
evidence, and from all evidence probabilities per name (``softsensor.detection.diagnosis``, the same formulas and priors). N
is linear: v'eps is computed once for every draw of the noise and serves every fault, and each fault adds its own v'x.

The diagnosis looks when a test goes up and again while it is undecided. The first look that finds one instrument ten times
as probable as all else names it; after the last one stands whatever is within ten to one of the first. The inputs are
taken to be at rest, so that no transfer function is in doubt; every sensor is in use and every reading there.

The draws are seeded, so the same model gives the same shares. With DRAWS of them a share of 90 % has a standard error of
2 %.

Source: Willsky & Jones, IEEE Trans. AC-21 (1976) 108-112, for signatures and their likelihoods.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numba import njit
from numpy.typing import NDArray
from scipy.special import logsumexp

from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.diagnosis import NAMING_RATIO, onset_ages
from softsensor.detection.outcomes import PATIENCE
from softsensor.detection.signatures import Hypothesis, Shape, signatures
from softsensor.detection.step_signatures import Instrument
from softsensor.estimation.kernel import Floats, Ints

DRAWS = 200
SEED = 20261201
LOOKS = (0, 6, 12, 24, PATIENCE)
"""Cycles after a test went up at which the diagnosis looks here; in the service it looks every few cycles."""
ALIKE = 0.1
"""An explanation is like the fault where it stands beside it, or in its place, in this share of the draws or more."""
NOTHING = "nothing"


@dataclass(frozen=True, slots=True)
class InstrumentFault:
    """A fault to be told apart: ``size`` in the instrument's unit, for a ramp per cycle; ``age``: cycles since its onset
    when a test goes up.
    """

    instrument: tuple[Instrument, int]
    shape: Shape
    size: float
    age: int


@dataclass(frozen=True, slots=True)
class Isolation:
    """``named``: probability that the instrument is named, and alone; ``alike``: what it cannot be told apart from
    (instruments, disturbances, nothing at all), with the share of draws in which it stands beside it or in its
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
        self._known: dict[tuple[tuple[Instrument, int], Shape, int], Floats] = {}
        self.names = (*dict.fromkeys(suspect.name for suspect in design.suspects), NOTHING)

    def ask(self, fault: InstrumentFault) -> Isolation:
        """How often is the fault's instrument named alone, and what stands beside it otherwise?"""
        source, index = fault.instrument
        spec = self._design.model.spec
        tag = spec.sensors[index].tag if source == "sensor" else spec.inputs[index].tag
        told = np.zeros((DRAWS, len(self.names)), dtype=bool)
        waiting = np.ones(DRAWS, dtype=bool)
        for look in range(len(LOOKS)):
            logs = self.log_weights(fault, look)
            first = logs.argmax(axis=1)
            best = logs.max(axis=1)
            rest = logs.copy()
            rest[np.arange(DRAWS), first] = -np.inf
            alone = best >= np.log(NAMING_RATIO) + logsumexp(rest, axis=1)
            close = np.where(
                alone[:, None], logs == best[:, None], logs + np.log(NAMING_RATIO) > best[:, None]
            )
            told[waiting] = close[waiting]
            waiting &= ~(alone & self._instrument[first])
        own = self.names.index(tag)
        shares = told.mean(axis=0)
        order = np.argsort(-shares, kind="stable").tolist()
        alike = [
            (self.names[place], float(shares[place]))
            for place in order
            if place != own and shares[place] >= ALIKE
        ]
        return Isolation(float(np.mean(told[:, own] & (told.sum(axis=1) == 1))), tuple(alike))

    def log_weights(self, fault: InstrumentFault, look: int) -> Floats:
        """(draws, names) at one of LOOKS the log of what each name's probability is in proportion to."""
        energy, noise = self._noise
        scored = noise[look] + projections(self._table, self._means(fault, LOOKS[look]), self._ages)
        precision = np.array([suspect.prior_sd**-2 for suspect in self._design.suspects])[:, None]
        evidence = 0.5 * scored**2 / (energy + precision) - 0.5 * np.log1p(energy / precision)
        averaged = logsumexp(evidence, axis=2) - np.log(len(self._ages)) + np.log(0.5)
        logs = np.zeros((DRAWS, len(self.names)))
        for place, name in enumerate(self.names[:-1]):
            chosen = [suspect.name == name for suspect in self._design.suspects]
            logs[:, place] = logsumexp(averaged[:, chosen], axis=1)
        return logs

    @cached_property
    def _instrument(self) -> NDArray[np.bool_]:
        """(names,) which names are instruments: only they are flagged."""
        sources = {suspect.name: suspect.source for suspect in self._design.suspects}
        return np.array([sources.get(name) in ("sensor", "input") for name in self.names])

    @cached_property
    def _noise(self) -> tuple[Floats, Floats]:
        """v'v (hypotheses, ages), and v'eps (looks, draws, hypotheses, ages): from look to look the window moves on."""
        window, m = self._design.window, self._table.shape[2]
        noise = np.random.default_rng(SEED).standard_normal((DRAWS, window + LOOKS[-1], m))
        drawn = np.zeros((len(LOOKS), DRAWS, len(self._table), len(self._ages)))
        for place, age in enumerate(self._ages.tolist()):
            begun = self._table[:, :age].reshape(len(self._table), -1).T
            for look, later in enumerate(LOOKS):
                seen = noise[:, later + window - age : later + window].reshape(DRAWS, -1)
                drawn[look, :, :, place] = seen @ begun
        energies = np.cumsum(np.sum(self._table**2, axis=2), axis=1)[:, self._ages - 1]
        return energies, drawn

    def _means(self, fault: InstrumentFault, look: int) -> Floats:
        """(window, n_sensors) what the fault leaves in the whitened innovations, newest last; zero before its onset."""
        left = self._courses(fault)[: fault.age + look]
        rows = np.zeros((self._design.window, left.shape[1]))
        seen = left[-self._design.window :]
        rows[self._design.window - len(seen) :] = fault.size * seen
        return rows

    def _courses(self, fault: InstrumentFault) -> Floats:
        """(cycles, n_sensors) whitened signature of a unit fault, up to the last look."""
        key = (fault.instrument, fault.shape, fault.age)
        if key not in self._known:
            design, truth = self._design, Hypothesis(*fault.instrument, "", fault.shape, 1.0)
            cycles = fault.age + LOOKS[-1]
            found = signatures(design.model, design.kernel, (truth,), self._steady, self._use, cycles)
            self._known[key] = found[0]
        return self._known[key]


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
