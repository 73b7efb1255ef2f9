"""What the tests and the diagnosis of one unit need, and one look at all explanations of the latest innovations."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from plant_models.plant_model import PlantModel
from softsensor.detection.beginning import Forgetting
from softsensor.detection.conformance import Standing, standing
from softsensor.detection.diagnosis import (
    Likelihoods,
    Verdict,
    judge,
    likelihoods,
    onset_ages,
    sharp_ages,
)
from softsensor.detection.flags import (
    FlagBook,
)
from softsensor.detection.gain_changes import gain_likelihoods
from softsensor.detection.long_memory import LongMemory, block_table, look_back, with_paths
from softsensor.detection.signatures import Hypothesis, SteadyFilter, signatures, steady_filter
from softsensor.detection.state_of_tests import TestDesign, TestState
from softsensor.estimation.kernel import Floats, Ints, Kernel


@dataclass(frozen=True)
class DetectionDesign:
    """Everything the tests and the diagnosis of one unit need; tables are computed once per set of sensors in use."""

    model: PlantModel
    kernel: Kernel
    tests: TestDesign
    suspects: tuple[Hypothesis, ...]
    paths: tuple[Hypothesis, ...]
    """Transfer functions whose gain may have changed."""
    window: int
    sample_us: int
    leave_out: bool
    back_by_itself: bool
    armed: bool
    forgetting: Forgetting
    long_memory: LongMemory | None = None
    settled_after: int = 0
    """Cycles from the start before the filter is the settled one that signatures suppose."""
    tables: dict[tuple[int, ...], tuple[SteadyFilter, Floats]] = field(default_factory=dict, repr=False)
    standings: dict[tuple[int, ...], Standing] = field(default_factory=dict, repr=False)
    settled: dict[tuple[str, tuple[int, ...]], Floats] = field(default_factory=dict, repr=False)

    def table(self, use: Ints) -> tuple[SteadyFilter, Floats]:
        """Settled filter and whitened signatures with these sensors in use."""
        key = tuple(int(value) for value in use)
        if key not in self.tables:
            steady = steady_filter(self.model, self.kernel, use)
            self.tables[key] = (
                steady,
                signatures(self.model, self.kernel, self.suspects, steady, use, self.window),
            )
        return self.tables[key]

    def look_back(self, tests: TestState, use: Ints) -> tuple[Verdict, Likelihoods] | None:
        """Weigh all explanations in the long memory; None where there is none, or nothing in it yet."""
        memory, (steady, _) = self.long_memory, self.table(use)
        if memory is None:
            return None
        key = tuple(int(value) for value in use)
        if key not in memory.tables:
            memory.tables[key] = block_table(self.model, self.kernel, memory, steady, use)
        seen = look_back(memory, memory.tables[key], steady, tests, use)
        if seen is None or seen[0].best < 0:
            return seen
        verdict, found = seen
        return with_paths(self.paths, self.suspects[verdict.best].name, verdict), found

    def standing(self, use: Ints) -> Standing:
        """What the conformance probability needs with these sensors in use."""
        key = tuple(int(value) for value in use)
        if key not in self.standings:
            steady, table = self.table(use)
            tolerance = np.array([item.tolerance for item in self.model.scaled.sensors])
            sample_time = self.model.spec.sample_time
            self.standings[key] = standing(
                self.suspects, table, steady.whitening, use, sample_time, tolerance
            )
        return self.standings[key]


def sensors_in_use(design: DetectionDesign, book: FlagBook, tests: TestState, cycle: int) -> Ints:
    """(n_sensors,) 0 for a sensor that is left out or lost."""
    return np.array(
        [int(not book.excluded(i, cycle) and tests.lost[i] == 0) for i in range(design.kernel.n_sensors)],
        dtype=np.int64,
    )


def explanations(design: DetectionDesign) -> tuple[Hypothesis, ...]:
    """All that a verdict may name: instruments and disturbances, then transfer functions."""
    return design.suspects + design.paths


def look(
    design: DetectionDesign, tests: TestState, use: Ints, gains: bool = True, only: Hypothesis | None = None
) -> tuple[Verdict, Likelihoods]:
    """Weigh all explanations of the innovations since the tests were last restarted; after an outage of
    inputs, what they explain may be older. A step from before the innovations that are kept is among the explanations.

    ``gains``: wrong gains of transfer functions too, which costs several times as much; ``only`` those of the paths that
    concern one sensor or input.
    """
    steady, table = design.table(use)
    newest = int(tests.cycle[0]) - 1
    available = max(min(newest + 1 - int(tests.valid_from[0]), design.window), 1)
    remembered = max(min(newest + 1, design.window), 1)
    grid = onset_ages(remembered if tests.resumed[0] != 0 else available)
    ages = np.union1d(grid, sharp_ages(tests.ring, newest, steady.sd, available))
    prior_sd = np.array([suspect.prior_sd for suspect in design.suspects])
    forgotten = available == design.window
    older = np.array([int(forgotten and item.shape == "step") for item in design.suspects], dtype=np.int64)
    found = likelihoods(table, prior_sd, tests.ring, newest, steady.whitening, use, ages, available, older)
    if not (gains and design.paths):
        return judge(design.suspects, found), found
    rings = (tests.ring, tests.moves)
    more = gain_likelihoods(design.kernel, design.paths, steady, use, rings, newest, available, only)
    together = Likelihoods(*(np.concatenate(parts) for parts in zip(found, more, strict=True)))
    return judge(explanations(design), together), together
