"""How often the true onset of a step lies within the interval that its flag gives.

python tests/long_runs/onsets.py [steps] [model ...]
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from long_runs.models import FRACTIONATOR, design_named
from long_runs.simulated_plant import Case, Plant, seen_by, still_inputs

from softsensor.cycle import UnitDesign
from softsensor.detection.flags import Flag

FIRST, LAST, AFTER = 200, 900, 400
"""Cycles between which the step begins, and for which the plant goes on."""
SIZES = (1.0, 3.0)
"""Noise sd of the sensor."""


@dataclass(frozen=True)
class Dated:
    """One step: its onset, the first flag after it that names the sensor and has an interval, None where there is none."""

    onset: int
    flag: Flag | None

    @property
    def inside(self) -> bool:
        """The true onset lies within the interval."""
        if self.flag is None or self.flag.onset_to is None:
            return False
        early = self.flag.onset_from
        return (early is None or early <= self.onset) and self.onset <= self.flag.onset_to

    def width(self, sample_us: int) -> float:
        """Cycles between the interval's ends; nan where it has none."""
        if self.flag is None or self.flag.onset_from is None or self.flag.onset_to is None:
            return float("nan")
        return (self.flag.onset_to - self.flag.onset_from) / sample_us


def dated(design: UnitDesign, number: int, shape: str = "step") -> Dated:
    """Put a step into one sensor of one plant; ``shape`` ramp: an error that grows to the step's size in 300 cycles."""
    spec = design.model.spec
    random = np.random.default_rng([number, 41])
    onset, i = int(random.integers(FIRST, LAST)), number % len(spec.sensors)
    size = random.choice([-1.0, 1.0]) * random.uniform(*SIZES) * spec.sensors[i].noise_sd
    n = onset + AFTER
    bias = np.zeros((n, len(spec.sensors)))
    bias[onset:, i] = size * (np.ones(AFTER) if shape == "step" else np.arange(1.0, AFTER + 1.0) / 300.0)
    case = Case(still_inputs(spec, n), bias)
    _, y = Plant(spec, 90_000 + number).readings(case)
    sample_us = design.detection.sample_us
    named = [
        flag
        for flag in seen_by(design, case, y).flags
        if flag.cleared is None
        and flag.detected >= onset * sample_us
        and flag.tag == spec.sensors[i].tag
        and flag.onset_to is not None
    ]
    return Dated(onset * sample_us, named[0] if named else None)


def report(count: int, models: tuple[str, ...], shape: str = "step") -> str:
    """As Markdown: how many were flagged, the share inside, the median width in cycles, how many have no beginning."""
    lines = [
        f"| {shape}s | flagged | inside | median width, cycles | without a beginning |",
        "|---|---|---|---|---|",
    ]
    for name in models:
        design = design_named(name)
        found = [item for item in (dated(design, k, shape) for k in range(count)) if item.flag is not None]
        widths = [item.width(design.detection.sample_us) for item in found]
        inside = sum(item.inside for item in found)
        lines.append(
            f"| {name} | {len(found)} of {count} | {100.0 * inside / max(len(found), 1):.1f} % | "
            f"{np.nanmedian(widths):.0f} | {int(np.isnan(widths).sum())} |"
        )
    return "\n".join(lines)


if __name__ == "__main__":
    number = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    for form in ("step", "ramp"):
        print(report(number, tuple(sys.argv[2:]) or (FRACTIONATOR,), form))
