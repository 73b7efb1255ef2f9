"""Is the conformance probability calibrated? Steps and ramps of all sizes, and how often the bias is beyond tolerance.

python tests/long_runs/calibration.py [plants]
"""

from __future__ import annotations

import sys
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.transfer_paths import Array, Mask
from long_runs.models import MODELS, design_named
from long_runs.simulated_plant import Case, Plant, seen_by, still_inputs

from softsensor.cycle import UnitDesign
from softsensor.detection.conformance import BLOCK, LOOK_EVERY_BLOCKS

EDGES = (0.0, 0.01, 0.05, 0.2, 0.4, 0.6, 0.8, 0.95, 0.99, 1.0)
CYCLES = 4000
EVERY = BLOCK * LOOK_EVERY_BLOCKS


def moments(design: UnitDesign, plants: int) -> tuple[Array, Mask]:
    """Every probability that was given, and whether it was so. Sizes up to twice the tolerance, one sensor a plant."""
    spec, said, true = design.model.spec, [], []
    tolerance = np.array([item.tolerance for item in spec.sensors])
    for number in range(plants):
        random = np.random.default_rng([number, 11])
        onset, i = int(random.integers(300, CYCLES // 2)), number % len(spec.sensors)
        size = random.uniform(-2.0, 2.0) * tolerance[i]
        course = np.ones(CYCLES - onset)
        if number % 2:
            course = np.arange(CYCLES - onset) / random.uniform(300.0, CYCLES)
        bias = np.zeros((CYCLES, len(spec.sensors)))
        bias[onset:, i] = size * course
        case = replace(Case(still_inputs(spec, CYCLES)), bias=bias)
        _, y = Plant(spec, 70_000 + number).readings(case)
        parts = seen_by(design, case, y, keep=True).parts
        said.append(np.concatenate([part.beyond for part in parts])[EVERY - 1 :: EVERY].ravel())
        true.append((np.abs(bias) > tolerance)[EVERY - 1 :: EVERY].ravel())
    told, so = np.concatenate(said), np.concatenate(true)
    return told[np.isfinite(told)], so[np.isfinite(told)]


def table(said: Array, true: Mask) -> str:
    """Reliability, as Markdown."""
    lines = ["| probability given | moments | mean of it | beyond tolerance |", "|---|---|---|---|"]
    for low, high in pairwise(EDGES):
        chosen = (said >= low) & ((said < high) | (high == 1.0))
        if chosen.any():
            share, mean = 100.0 * true[chosen].mean(), 100.0 * said[chosen].mean()
            lines.append(
                f"| {100 * low:g} to {100 * high:g} % | {chosen.sum()} | {mean:.1f} % | {share:.1f} % |"
            )
    return "\n".join(lines)


def gathered(plants: int) -> tuple[Array, Mask]:
    """All three models."""
    pairs = [moments(design_named(name), plants) for name in MODELS]
    return np.concatenate([said for said, _ in pairs]), np.concatenate([true for _, true in pairs])


if __name__ == "__main__":
    print(table(*gathered(int(sys.argv[1]) if len(sys.argv) > 1 else 300)))
