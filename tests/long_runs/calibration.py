"""Is the conformance probability calibrated? Steps and ramps of all sizes, and how often the bias is beyond tolerance.

    python tests/long_runs/calibration.py [plants] [picture.png]

Twice, on three models. First as many faults as plants, with sizes up to twice the tolerance. Then as the program supposes:
sizes from its own prior, as many plants without a fault as with one, and each kind weighted by how often it would occur
at the program's own rate of faults. A picture needs matplotlib.
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
from softsensor.detection.conformance import BLOCK, FAULTS_PER_YEAR, LOOK_EVERY_BLOCKS, YEAR_S

EDGES = (0.0, 0.01, 0.05, 0.2, 0.4, 0.6, 0.8, 0.95, 0.99, 1.0)
CYCLES = 4000
EVERY = BLOCK * LOOK_EVERY_BLOCKS
Sizes = Literal["uniform", "prior", "none"]
PRIOR_SD = 3.0
"""Of a size, in tolerances: the program's own."""


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


def fault_of(design: UnitDesign, number: int, sizes: Sizes) -> tuple[Array, int]:
    """The bias put into a plant (CYCLES, n_sensors), and the sensor: steps and ramps in turn."""
    spec = design.model.spec
    random = np.random.default_rng([number, 11])
    onset, i = int(random.integers(300, CYCLES // 2)), number % len(spec.sensors)
    size = random.uniform(-2.0, 2.0) if sizes == "uniform" else PRIOR_SD * random.standard_normal()
    course = np.ones(CYCLES - onset)
    if number % 2:
        course = np.arange(CYCLES - onset) / random.uniform(300.0, CYCLES)
    bias = np.zeros((CYCLES, len(spec.sensors)))
    if sizes != "none":
        bias[onset:, i] = size * spec.sensors[i].tolerance * course
    return bias, i


def moments(design: UnitDesign, plants: int, sizes: Sizes = "uniform") -> Moments:
    """Every plant has a fault of one sensor, or none. With the prior's sizes only that sensor's moments count."""
    spec, parts = design.model.spec, []
    tolerance = np.array([item.tolerance for item in spec.sensors])
    chance = FAULTS_PER_YEAR * CYCLES * spec.sample_time / YEAR_S
    weight = {"uniform": 1.0, "prior": chance * len(spec.sensors), "none": 1.0 - chance}[sizes]
    for number in range(plants):
        bias, i = fault_of(design, number, sizes)
        case = replace(Case(still_inputs(spec, CYCLES)), bias=bias)
        _, y = Plant(spec, (70_000 if sizes != "none" else 90_000) + number).readings(case)
        seen = seen_by(design, case, y, keep=True).parts
        said = np.concatenate([part.beyond for part in seen])[EVERY - 1 :: EVERY]
        true = (np.abs(bias) > tolerance)[EVERY - 1 :: EVERY]
        if sizes == "prior":
            said, true = said[:, i : i + 1], true[:, i : i + 1]
        told = np.isfinite(said)
        parts.append(Moments(said[told], true[told], np.full(int(told.sum()), weight)))
    return together(parts)


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
    rare = together([moments(design, plants, kind) for design in designs for kind in ("prior", "none")])
    views = {"a fault in every plant": everywhere, "faults as rare as the program supposes": rare}
    for name, found in views.items():
        print(f"{name}:\n\n{table(found)}\n", flush=True)
    if picture is not None:
        draw(views, Path(picture))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 300, sys.argv[2] if len(sys.argv) > 2 else None)
