"""The long memory of the diagnosis: innovations averaged over blocks of cycles, for faults that take days to show.

Where a sensor is watched patiently (``patient`` in the model file) its slowest sums go up on faults that are older than the
innovations kept one by one. Averages over BLOCK cycles are kept much longer. Of independent N(0, 1) innovations the mean of
BLOCK, times the square root of BLOCK, is N(0, 1) again; a slow signature loses next to nothing by being averaged in the
same way. So the diagnosis runs on blocks as it does on cycles, with onsets at the blocks' beginnings.

A block in which fewer than WHOLE of a sensor's readings count has no value for that sensor. With fewer than all of them
its variance is up to a quarter larger than is supposed.

A gain that does not fit and an instrument that is off leave the same in such slow averages; so what is found here is never
a single name: the transfer functions that lead to the sensor stand beside it.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from plant_models.plant_model import PlantModel
from softsensor.detection.diagnosis import Likelihoods, Verdict, judge, likelihoods, onset_ages, sharp_ages
from softsensor.detection.signatures import (
    Hypothesis,
    SteadyFilter,
    filter_response,
    hypotheses,
    signal_of,
    whiten,
)
from softsensor.detection.state_of_tests import TestState
from softsensor.estimation.compiling import inner
from softsensor.estimation.kernel import Floats, Ints, Kernel

BLOCK = 32
"""Cycles averaged."""
KEPT = 2048
"""Blocks kept: a week of cycles of 10 s."""
WHOLE = 0.75
SETTLED = 16_384
"""Cycles after an onset at which a step's signature is taken as settled."""


@dataclass(frozen=True)
class LongMemory:
    """What a look back over blocks needs; ``tables`` are made once per set of sensors in use."""

    suspects: tuple[Hypothesis, ...]
    kept: int
    tables: dict[tuple[int, ...], Floats] = field(default_factory=dict, repr=False)


def long_memory(model: PlantModel) -> LongMemory | None:
    """The long memory of a unit; none where no sensor is watched patiently."""
    return LongMemory(hypotheses(model, BLOCK * KEPT), KEPT) if model.spec.patient else None


@inner
def remember(state: TestState, slot: int) -> None:
    """Add the cycle's innovations, in ``slot`` of the ring, to the block under way; at its end the block is kept."""
    ends = (state.cycle[0] + 1) % BLOCK == 0
    place = (state.cycle[0] // BLOCK) % state.blocks.shape[0]
    for i in range(len(state.block_sum)):
        value = state.ring[slot, i]
        if value == value:
            state.block_sum[i] += value
            state.block_count[i] += 1.0
        if ends:
            count = state.block_count[i]
            state.blocks[place, i] = (
                state.block_sum[i] / count * np.sqrt(float(BLOCK)) if count >= WHOLE * BLOCK else np.nan
            )
            state.block_sum[i] = 0.0
            state.block_count[i] = 0.0


def block_table(
    model: PlantModel, kernel: Kernel, memory: LongMemory, steady: SteadyFilter, use: Ints
) -> Floats:
    """Whitened signatures of unit size in blocks (hypotheses, kept, n_sensors): steps, and ramps as their running sums."""
    n = kernel.n_sensors
    out = np.zeros((len(memory.suspects), memory.kept, n))
    for h, suspect in enumerate(memory.suspects):
        signal = signal_of(model, kernel, replace(suspect, shape="step"), SETTLED)
        step = filter_response(kernel, steady.gains, use, signal)
        course = np.concatenate([step, np.repeat(step[-1:], BLOCK * memory.kept - SETTLED, axis=0)])
        if suspect.shape == "ramp":
            course = np.cumsum(course, axis=0)
        averaged = course.reshape(memory.kept, BLOCK, n).mean(axis=1) * np.sqrt(float(BLOCK))
        whiten(steady.whitening, np.ascontiguousarray(averaged), out[h])
    return out


def look_back(
    memory: LongMemory, table: Floats, steady: SteadyFilter, tests: TestState, use: Ints
) -> tuple[Verdict, Likelihoods] | None:
    """Weigh all explanations of the blocks since the tests were last restarted; None before the first whole block.

    Ages and the sizes of ramps come back in cycles, like those of a look at single cycles.
    """
    now = int(tests.cycle[0])
    newest = now // BLOCK - 1
    first = -(-int(tests.valid_from[0]) // BLOCK)
    available = min(newest + 1 - first, memory.kept)
    if available < 1:
        return None
    prior_sd = np.array([suspect.prior_sd for suspect in memory.suspects])
    ages = np.union1d(onset_ages(available), sharp_ages(tests.blocks, newest, steady.sd, available))
    older = np.zeros(len(memory.suspects), dtype=np.int64)
    found = likelihoods(table, prior_sd, tests.blocks, newest, steady.whitening, use, ages, available, older)
    verdict = judge(memory.suspects, found)
    return verdict, found._replace(age=found.age * BLOCK + (now - (newest + 1) * BLOCK))


def with_paths(paths: tuple[Hypothesis, ...], name: str, verdict: Verdict) -> Verdict:
    """The verdict with the transfer functions to a sensor, or from an input, beside its name in the group."""
    beside = tuple(
        path.name for path in paths if name in path.name.split(" -> ") and path.name not in verdict.group
    )
    return verdict._replace(group=(*verdict.group, *beside))
