"""Naming on the heavy-oil fractionator: faults, disturbances and wrong gains, and what the program makes of them.

python tests/long_runs/naming.py [injections] [kind ...]
"""

from __future__ import annotations

import sys
from collections import Counter
from dataclasses import dataclass, replace
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from long_runs.models import FRACTIONATOR, design_named
from long_runs.simulated_plant import Case, Plant, moving_inputs, seen_by, still_inputs

from plant_models.specification import UnitSpec
from softsensor.cycle import UnitDesign
from softsensor.detection.flags import Flag

KINDS = ("step", "ramp", "disturbance", "flow meter", "gain", "gains of an input")
ONSET, AFTER, DAY = 600, 720, 1440
SIZE = 3.0
"""Noise sd of a sensor's fault, a ramp's in a day; sd of a disturbance's step."""
UNCERTAINTY = ((2.11, 0.39, 0.59), (3.29, 0.57, 0.89), (3.11, 0.73, 1.33), (2.73, 0.44, 0.67), (1.82, 0.37, 0.65),
               (2.75, 0.38, 0.48), (1.86, 0.28, 0.40))  # fmt: skip
"""Published bounds of the gains' uncertainty, outputs y1 to y7 by inputs u1 to u3 (Prett & Morari, Shell Process Control
Workshop, 1987, as printed in Maciejowski, Predictive Control, 2002, ch. 9; MEMORY)."""


@dataclass(frozen=True)
class Injected:
    """What was put in and what came of it: the first flag that a diagnosis opened after the onset."""

    name: str
    flag: Flag | None
    delay: float
    """Cycles from the onset to the flag."""

    def outcome(self, spec: UnitSpec) -> str:
        """right, wrong, model, group with, group without, none."""
        if self.flag is None:
            return "nothing flagged"
        sensors = [item.tag for item in spec.sensors]
        if self.flag.kind == "model":
            return "model"
        if self.flag.isolated and self.flag.tag == self.name:
            return "named right"
        if self.flag.isolated:
            return "a sensor named wrongly" if self.flag.tag in sensors else "an input named wrongly"
        told = any(name == self.name or " -> " in name for name in self.flag.group)
        return "group with it" if told else "group without it"


def _case(spec: UnitSpec, kind: str, number: int, random: np.random.Generator) -> tuple[str, Case]:
    sign = 1.0 if number % 2 else -1.0
    n = ONSET + (2 * DAY if kind == "ramp" else AFTER)
    # faults of gains and inputs show while the inputs move; for the others every second plant stands still
    moves = kind in ("gain", "gains of an input") or number % 4 < 2
    case = Case(moving_inputs(spec, n, random) if moves else still_inputs(spec, n))
    if kind in ("step", "ramp"):
        i = number % len(spec.sensors)
        bias = np.zeros((n, len(spec.sensors)))
        course = np.ones(n - ONSET) if kind == "step" else np.arange(n - ONSET) / DAY
        bias[ONSET:, i] = sign * SIZE * spec.sensors[i].noise_sd * course
        return spec.sensors[i].tag, replace(case, bias=bias)
    if kind == "disturbance":
        d = number % len(spec.disturbances)
        jump = np.zeros((n, len(spec.disturbances)))
        jump[ONSET, d] = sign * SIZE * (spec.disturbances[d].sd or 0.0)
        return spec.disturbances[d].name, replace(case, jump=jump)
    if kind == "flow meter":
        j = number % len(spec.inputs)
        low, high = spec.inputs[j].validated_range or spec.inputs[j].range
        error = np.zeros((n, len(spec.inputs)))
        error[ONSET:, j] = sign * 0.1 * (high - low)
        return spec.inputs[j].tag, replace(case, input_bias=error)
    return _wrong_gains(spec, kind, number, case)


def _wrong_gains(spec: UnitSpec, kind: str, number: int, case: Case) -> tuple[str, Case]:
    """One gain, or all gains of an input, off by the published bound; from the beginning, inputs moving."""
    outputs = [item.tag for item in spec.estimates[:1]] + ["y2"] + [item.tag for item in spec.sensors]
    inputs, sign = [item.tag for item in spec.inputs], 1.0 if number % 2 else -1.0
    j = number % 3
    row = 2 + number % 5
    paths = []
    for path in spec.paths:
        wrong = path.source == inputs[j] and (kind != "gain" or path.target == outputs[row])
        if wrong and path.target in outputs:
            gain = path.gain + sign * UNCERTAINTY[outputs.index(path.target)][j]
            path = replace(path, gain=gain)
        paths.append(path)
    name = f"{inputs[j]} -> {outputs[row]}" if kind == "gain" else inputs[j]
    return name, replace(case, truth=replace(spec, paths=tuple(paths)))


def injected(design: UnitDesign, kind: str, number: int) -> Injected:
    """Put one fault into one plant."""
    spec = design.model.spec
    random = np.random.default_rng([number, KINDS.index(kind), 7])
    name, case = _case(spec, kind, number, random)
    _, y = Plant(spec, 1000 * (1 + KINDS.index(kind)) + number).readings(case)
    onset = 0 if kind.startswith("gain") else ONSET * design.detection.sample_us
    opened = [
        flag
        for flag in seen_by(design, case, y).flags
        if flag.cleared is None and flag.detected >= onset and flag.kind in ("bias", "drift", "model")
    ]
    first = opened[0] if opened else None
    return Injected(name, first, (first.detected - onset) / design.detection.sample_us if first else np.nan)


def outcomes(kind: str, count: int) -> tuple[Counter[str], float]:
    """How often each outcome, and the median delay in cycles."""
    design = design_named(FRACTIONATOR)
    found = [injected(design, kind, number) for number in range(count)]
    delays = [item.delay for item in found if item.flag is not None]
    counted = Counter(item.outcome(design.model.spec) for item in found)
    return counted, float(np.median(delays)) if delays else float("nan")


def report(count: int = 200, kinds: tuple[str, ...] = KINDS) -> str:
    """As Markdown."""
    names = (
        "named right", "a sensor named wrongly", "an input named wrongly", "group with it", "group without it", "model",
        "nothing flagged",
    )  # fmt: skip
    lines = [
        f"| {count} of each | " + " | ".join(names) + " | median delay, cycles |",
        "|---" * (len(names) + 2) + "|",
    ]
    for kind in kinds:
        counted, delay = outcomes(kind, count)
        shares = [f"{100.0 * counted[name] / count:.1f} %" for name in names]
        when = f"{delay:.0f}" if np.isfinite(delay) else ""
        lines.append(f"| {kind} | " + " | ".join(shares) + f" | {when} |")
    return "\n".join(lines)


if __name__ == "__main__":
    print(report(int(sys.argv[1]) if len(sys.argv) > 1 else 200, tuple(sys.argv[2:]) or KINDS))
