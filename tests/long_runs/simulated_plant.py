"""Simulated plants that are exactly as their model file says, with faults put in: what the long runs are made of.

The plant is the dense one of ``independent.dense_filter``, written from the contract alone; the program only gets to see
inputs and readings, through its own cycle.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from functools import lru_cache
from itertools import pairwise

import numpy as np
from independent.dense_filter import operating_points, output_names, stochastic
from independent.transfer_paths import Array, continuous, step_response
from numba import njit

from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.cycle_results import CycleResults
from softsensor.detection.flags import Flag, Note
from softsensor.readings_of_cycle import CycleReadings
from softsensor.service.replay import Replay

BLOCK = 8192
MOVES = 0.005
"""Share of cycles in which an input changes."""


@dataclass(frozen=True)
class Case:
    """One stretch of plant life: N cycles of true inputs u (N, n_inputs), and what is wrong.

    bias (N, n_sensors) is added to the readings, input_bias (N, n_inputs) to the inputs' readings, jump (N,
    n_disturbances) to the disturbances; noise (N, n_sensors) is a factor on the sensors' noise; ``truth`` is the plant's
    own specification of its paths where it is not the model's.
    """

    u: Array
    bias: Array | None = None
    input_bias: Array | None = None
    jump: Array | None = None
    noise: Array | None = None
    truth: UnitSpec | None = None


@njit(cache=False)
def _course(
    A: Array, C: Array, root: Array, x: Array, jump: Array, at: Array, random: np.random.Generator
) -> Array:
    n, m = len(A), len(C)
    out, new = np.zeros((len(jump), m)), np.zeros(n)
    for k in range(len(jump)):
        for d in range(len(at)):
            x[at[d]] += jump[k, d]
        for i in range(m):
            total = 0.0
            for j in range(n):
                total += C[i, j] * x[j]
            out[k, i] = total
        for i in range(n):
            total = root[i] * random.standard_normal() if root[i] > 0.0 else 0.0
            for j in range(n):
                if A[i, j] != 0.0:
                    total += A[i, j] * x[j]
            new[i] = total
        x[:] = new
    return out


@lru_cache(maxsize=256)
def _unit_step(spec: UnitSpec, path: int, count: int) -> Array:
    return step_response(continuous(spec.paths[path], spec.sample_time), count)


def driven_by(spec: UnitSpec, u: Array) -> Array:
    """What the inputs (N, n_inputs) make of every output (N, n_outputs), from steady state; stable paths only."""
    names, out = output_names(spec), np.tile(operating_points(spec), (len(u), 1))
    for j, item in enumerate(spec.inputs):
        deviation = u[:, j] - item.operating_point
        changes = np.flatnonzero(np.diff(deviation, prepend=deviation[0]))
        for p, path in enumerate(spec.paths):
            if path.source != item.tag:
                continue
            rise, row = _unit_step(spec, p, len(u)), names.index(path.target)
            at_start = continuous(path, spec.sample_time)
            out[:, row] += deviation[0] * float(at_start.c @ at_start.steady + at_start.d)
            for k in changes:
                out[k:, row] += (deviation[k] - deviation[k - 1]) * rise[: len(u) - k]
    return out


@dataclass
class Plant:
    """Draws readings of a unit; one generator for everything, so that a seed gives the same plant life anywhere."""

    spec: UnitSpec
    seed: int
    system: tuple[Array, Array, Array, Array, Array] = field(init=False)

    def __post_init__(self) -> None:
        dense = stochastic(self.spec)
        values, vectors = np.linalg.eigh(dense.P0)
        start = vectors * np.sqrt(np.maximum(values, 0.0))
        noise = np.array([item.noise_sd for item in self.spec.sensors])
        self.random = np.random.default_rng(self.seed)
        self.system = (dense.A, dense.C, np.sqrt(np.diag(dense.Q)), start, noise)
        self.driven = np.flatnonzero(np.diag(dense.Q) > 0.0)

    def readings(self, case: Case) -> tuple[Array, Array]:
        """True outputs (N, n_sensors + n_estimates) and readings (N, n_sensors), from a stationary start."""
        A, C, root, start, noise = self.system
        n, m = len(case.u), len(noise)
        x = start @ self.random.standard_normal(len(A))
        jump = case.jump if case.jump is not None else np.zeros((n, len(self.driven)))
        truth = _course(A, C, root, x, jump, self.driven, self.random)
        truth += driven_by(case.truth or self.spec, case.u)
        spread = noise if case.noise is None else noise * case.noise
        y = truth[:, :m] + spread * self.random.standard_normal((n, m))
        return truth, y if case.bias is None else y + case.bias

    def life(self, cycles: int) -> Iterator[Array]:
        """Readings (up to BLOCK, n_sensors) of a plant without fault whose inputs stay where they are, block by block."""
        A, C, root, start, noise = self.system
        x, m = start @ self.random.standard_normal(len(A)), len(noise)
        still = operating_points(self.spec)[:m]
        for first in range(0, cycles, BLOCK):
            n = min(BLOCK, cycles - first)
            truth = _course(A, C, root, x, np.zeros((n, 0)), self.driven[:0], self.random)[:, :m] + still
            yield truth + noise * self.random.standard_normal((n, m))


@dataclass(frozen=True)
class Seen:
    """What the program said: flags in the order of their changes, notes, and the results in stretches."""

    flags: list[Flag]
    notes: list[Note]
    parts: list[CycleResults]


def moving_inputs(spec: UnitSpec, cycles: int, random: np.random.Generator, share: float = 0.5) -> Array:
    """(cycles, n_inputs) Steps within ``share`` of each input's working range, on average every 200 cycles."""
    u = np.empty((cycles, len(spec.inputs)))
    for j, item in enumerate(spec.inputs):
        low, high = item.validated_range or item.range
        half = 0.5 * share * (high - low)
        changes = np.flatnonzero(random.random(cycles) < MOVES)
        edges = [0, *changes.tolist(), cycles]
        for first, stop in pairwise(edges):
            u[first:stop, j] = item.operating_point + random.uniform(-half, half)
    return u


def still_inputs(spec: UnitSpec, cycles: int) -> Array:
    """(cycles, n_inputs) Every input at its operating point."""
    return np.tile([item.operating_point for item in spec.inputs], (cycles, 1))


def replay_of(design: UnitDesign, blocks: Iterable[tuple[Array, Array]]) -> Replay:
    """The program's replay of blocks of inputs and readings."""

    def parts() -> Iterator[tuple[CycleReadings, tuple[()]]]:
        first, sample = 0, design.detection.sample_us
        for u, y in blocks:
            times = sample * (first + np.arange(len(y), dtype=np.int64))
            quality = np.where(np.isfinite(y), 0, 3).astype(np.int8)
            yield CycleReadings(times, u, np.zeros(u.shape, dtype=np.int8), y, quality), ()
            first += len(y)

    return Replay(design, parts())


def seen_by(design: UnitDesign, case: Case, y: Array, keep: bool = False) -> Seen:
    """Run the program's cycle over the readings of a case."""
    u = case.u if case.input_bias is None else case.u + case.input_bias
    rows = [slice(first, first + BLOCK) for first in range(0, len(y), BLOCK)]
    found = Seen([], [], [])
    for stretch in replay_of(design, ((u[row], y[row]) for row in rows)).stretches():
        found.flags.extend(stretch.results.flags)
        found.notes.extend(stretch.results.notes)
        if keep:
            found.parts.append(stretch.results)
    return found
