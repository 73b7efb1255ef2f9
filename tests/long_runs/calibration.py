"""Is the conformance probability calibrated? Steps and ramps of all sizes, and how often the bias is beyond tolerance.

    python tests/long_runs/calibration.py [plants] [picture.png]

Twice, on three models. First as many faults as plants, with sizes up to twice the tolerance. Then as the program supposes:
a sensor at fault, an input's instrument at fault, a disturbance that moves out of what its model allows, or nothing; sizes
from the program's own prior, each kind weighted by how often it would occur. A picture needs matplotlib.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path
from typing import Literal

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.transfer_paths import Array, Mask
from long_runs.models import MODELS, design_named
from long_runs.simulated_plant import Case, Plant, seen_by, still_inputs

from softsensor.cycle import UnitDesign
from softsensor.detection.conformance import (
    BLOCK,
    FAULTS_PER_YEAR,
    LOOK_EVERY_BLOCKS,
    MOVES_PER_YEAR,
    YEAR_S,
)

EDGES = (0.0, 0.01, 0.05, 0.2, 0.4, 0.6, 0.8, 0.95, 0.99, 1.0)
CYCLES = 4000
EVERY = BLOCK * LOOK_EVERY_BLOCKS
Kind = Literal["uniform", "sensor", "input", "disturbance", "none"]
SUPPOSED: tuple[Kind, ...] = ("sensor", "input", "disturbance", "none")


@dataclass(frozen=True)
class Moments:
    """Every probability that was given, whether it was so, and how much the moment weighs."""

    said: Array
    true: Mask
    weight: Array

    def within(self, low: float, high: float) -> Mask:
        """Which of them say a probability from ``low`` up to ``high``."""
        return (self.said >= low) & ((self.said < high) | (high == 1.0))


def together(parts: list[Moments]) -> Moments:
    """All of them."""
    return Moments(
        *(np.concatenate([getattr(part, name) for part in parts]) for name in ("said", "true", "weight"))
    )


def course_of(random: np.random.Generator, number: int, onset: int) -> Array:
    """(CYCLES,) A step of unit size from the onset on, or a ramp that reaches one or more: in turn."""
    course = np.zeros(CYCLES)
    course[onset:] = 1.0
    if number % 2:
        course[onset:] = np.arange(CYCLES - onset) / random.uniform(300.0, CYCLES)
    return course


def prior_sd(design: UnitDesign, name: str) -> float:
    """Of the size of a step: the program's own."""
    steps = (item for item in design.detection.suspects if item.name == name and item.shape == "step")
    return next(steps).prior_sd


def plant_with(design: UnitDesign, number: int, kind: Kind) -> tuple[Case, Plant]:
    """One plant's life, and who draws its readings; ``bias`` of the case is what is true of the sensors."""
    spec = design.model.spec
    random = np.random.default_rng([number, 11])
    plant = Plant(spec, (70_000 if kind != "none" else 90_000) + number)
    course = course_of(random, number, int(random.integers(300, CYCLES // 2)))
    case = replace(Case(still_inputs(spec, CYCLES)), bias=np.zeros((CYCLES, len(spec.sensors))))
    if kind in ("uniform", "sensor"):
        item, bias = spec.sensors[number % len(spec.sensors)], np.zeros((CYCLES, len(spec.sensors)))
        relative = random.uniform(-2.0, 2.0) * item.tolerance if kind == "uniform" else None
        size = prior_sd(design, item.tag) * random.standard_normal() if relative is None else relative
        bias[:, number % len(spec.sensors)] = size * course
        return replace(case, bias=bias), plant
    if kind == "input":
        j, error = number % len(spec.inputs), np.zeros(case.u.shape)
        error[:, j] = prior_sd(design, spec.inputs[j].tag) * random.standard_normal() * course
        return replace(case, input_bias=error), plant
    if kind == "disturbance":
        d, jump = number % len(spec.disturbances), np.zeros((CYCLES, len(plant.driven)))
        size = prior_sd(design, spec.disturbances[d].name) * random.standard_normal()
        jump[:, d] = size * np.diff(course, prepend=0.0)
        return replace(case, jump=jump), plant
    return case, plant


def weight_of(design: UnitDesign, kind: Kind) -> float:
    """How often a plant's life would be of this kind, by the program's own rates."""
    spec = design.model.spec
    years = CYCLES * spec.sample_time / YEAR_S
    expected = {
        "sensor": FAULTS_PER_YEAR * years * len(spec.sensors),
        "input": FAULTS_PER_YEAR * years * len(spec.inputs),
        "disturbance": MOVES_PER_YEAR * years * len(spec.disturbances),
    }
    return {**expected, "none": 1.0 - sum(expected.values()), "uniform": 1.0}[kind]


def moments(design: UnitDesign, plants: int, kind: Kind = "uniform") -> Moments:
    """Every moment of every sensor, of plants of one kind."""
    tolerance = np.array([item.tolerance for item in design.model.spec.sensors])
    parts, weight = [], weight_of(design, kind)
    for number in range(plants):
        case, plant = plant_with(design, number, kind)
        seen = seen_by(design, case, plant.readings(case)[1], keep=True).parts
        said = np.concatenate([part.beyond for part in seen])[EVERY - 1 :: EVERY]
        bias = case.bias if case.bias is not None else np.zeros(said.shape)
        true = (np.abs(bias) > tolerance)[EVERY - 1 :: EVERY]
        told = np.isfinite(said)
        parts.append(Moments(said[told], true[told], np.full(int(told.sum()), weight)))
    return together(parts)


def share_true(found: Moments, low: float, high: float) -> float:
    """Of the moments that say a probability in a range, the share that was so, weighted."""
    chosen = found.within(low, high)
    return float(np.average(found.true[chosen], weights=found.weight[chosen]))


def rows(found: Moments) -> list[tuple[str, int, float, float]]:
    """Per range of probabilities: its name, moments, mean of what was said and share that was so, weighted."""
    out = []
    for low, high in pairwise(EDGES):
        chosen = found.within(low, high)
        if chosen.any():
            weight = found.weight[chosen]
            said, share = (
                float(np.average(part[chosen], weights=weight)) for part in (found.said, found.true)
            )
            out.append((f"{100 * low:g} to {100 * high:g} %", int(chosen.sum()), 100.0 * said, 100.0 * share))
    return out


def table(found: Moments) -> str:
    """Reliability, as Markdown."""
    lines = ["| probability given | moments | mean of it | beyond tolerance |", "|---|---|---|---|"]
    lines += [
        f"| {name} | {count} | {said:.1f} % | {share:.1f} % |" for name, count, said, share in rows(found)
    ]
    return "\n".join(lines)


def draw(views: dict[str, Moments], path: Path) -> None:
    """The reliability picture: what was said, and how often it was so."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot

    figure, axes = pyplot.subplots(figsize=(6.4, 5.6))
    axes.plot([0, 100], [0, 100], color="#8a9499", linewidth=0.8, label="as said")
    axes.fill_between(
        [80, 95], [75, 75], [97, 97], color="#c2cacd", label="80 to 95 % said: 75 to 97 % wanted"
    )
    for (name, found), colour in zip(views.items(), ("#2f6f8f", "#b34700"), strict=True):
        _, _, said, share = zip(*rows(found), strict=True)
        axes.plot(said, share, marker="o", markersize=4, linewidth=1.0, color=colour, label=name)
    axes.set_xlabel("probability given that the bias is beyond tolerance, %")
    axes.set_ylabel("how often it was, %")
    axes.legend(loc="lower right", fontsize="small")
    figure.tight_layout()
    figure.savefig(path, dpi=110)
    pyplot.close(figure)


def main(plants: int = 300, picture: str | None = None) -> None:
    """All three models, both views."""
    designs = [design_named(name) for name in MODELS]
    everywhere = together([moments(design, plants) for design in designs])
    rare = together([moments(design, plants, kind) for design in designs for kind in SUPPOSED])
    views = {"a fault in every plant": everywhere, "all as rare as the program supposes": rare}
    for name, found in views.items():
        print(f"{name}:\n\n{table(found)}\n", flush=True)
    if picture is not None:
        draw(views, Path(picture))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 300, sys.argv[2] if len(sys.argv) > 2 else None)
