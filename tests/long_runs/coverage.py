"""How often does the truth lie inside the 95 % interval: with a right model, a wrong one, and a wrong one after tuning?

    python tests/long_runs/coverage.py [seeds] [model ...]

Wrong: every gain and time constant of the model 20 % off, up or down at random; the inputs move within half of their
validated ranges. ``softsensor tune`` gets a history in whose later part 200 laboratory results lie, one every
CYCLES_A_RESULT; it fits the noise and finds the interval's factor. Where it refuses the noise, ``--interval-only`` finds
the factor. Judged is a later stretch with new moves and new noise, in cycles.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
import pandas as pd
from independent.transfer_paths import Array
from long_runs.models import path_of
from long_runs.simulated_plant import Case, Plant, moving_inputs, seen_by

from connectors.files import history_from_frame
from plant_models.building import build_plant_model
from plant_models.model_file import parse_model_text
from plant_models.plant_model import PlantModel
from plant_models.specification import PathSpec, UnitSpec
from softsensor.estimation.lab_results import LabArrival
from softsensor.service.assembly import rules_of
from softsensor.service.tuned_file import changed_text
from softsensor.service.tuning import tune, tune_intervals
from softsensor.service.tuning_report import TuningReport
from softsensor.unit_design import design_unit

MODELS = ("wood_berry", "heavy_oil_fractionator", "quadruple_tank")
OFF = 0.2
RESULTS = 200
CYCLES_A_RESULT = 120
"""A laboratory result so often: every two hours of one-minute cycles."""
JUDGED_SHARE = 0.4
"""Of the history, the part in which ``tune`` looks at laboratory results."""
LATER = 30_000


@dataclass(frozen=True)
class Coverage:
    """Shares of cycles of the later stretch with the truth inside, per model and seed."""

    right: float
    wrong: float
    tuned: float
    scaled: float
    results: int
    refused: str


def off(spec: UnitSpec, random: np.random.Generator) -> UnitSpec:
    """The specification with all gains and time constants OFF away, up or down."""

    def changed(path: PathSpec) -> PathSpec:
        up = np.where(random.random(1 + len(path.time_constants)) < 0.5, 1.0 - OFF, 1.0 + OFF)
        gain = None if path.gain is None else path.gain * float(up[0])
        times = tuple(float(value) for value in np.array(path.time_constants) * up[1:])
        return replace(path, gain=gain, time_constants=times)

    return replace(spec, paths=tuple(changed(path) for path in spec.paths))


def with_laboratory(text: str) -> str:
    """A model file in which every estimate has laboratory results, with a fifth of a sensor's noise at least."""
    spec, lines = parse_model_text(text, "model"), []
    lacking = {item.tag for item in spec.estimates if item.lab is None}
    for line in text.splitlines():
        lines.append(line)
        tag = line.partition('"')[2].partition('"')[0]
        if line.startswith("tag =") and tag in lacking:
            lines.append(f'lab = {{ tag = "{tag}.lab", sd = {spec.sensors[0].noise_sd / 5.0} }}')
    return "\n".join(lines) + "\n"


@dataclass(frozen=True)
class Stretch:
    """Inputs, readings and true estimates of a stretch of plant life."""

    case: Case
    y: Array
    truth: Array


def live(spec: UnitSpec, cycles: int, seed: int) -> Stretch:
    """A plant that is as ``spec`` says, its inputs moving."""
    case = Case(moving_inputs(spec, cycles, np.random.default_rng([seed, 5])))
    truth, y = Plant(spec, seed).readings(case)
    return Stretch(case, y, truth[:, len(spec.sensors) :])


def inside(model: PlantModel, stretch: Stretch) -> float:
    """Share of cycles, over all estimates, with the truth inside the published interval; the first 500 are left away."""
    parts = seen_by(design_unit(model), stretch.case, stretch.y, keep=True).parts
    value, sd = (np.concatenate([getattr(part, name) for part in parts]) for name in ("estimate", "sd"))
    return float(np.mean(np.abs(stretch.truth - value)[500:] <= 1.959963984540054 * sd[500:]))


def tuned(text: str, model: PlantModel, stretch: Stretch, seed: int) -> tuple[PlantModel, TuningReport]:
    """The model file after ``tune`` on this stretch."""
    spec, sample_us = model.spec, round(model.spec.sample_time * 1e6)
    times = pd.to_datetime(sample_us * np.arange(len(stretch.y), dtype=np.int64), unit="us", utc=True)
    columns = {item.tag: stretch.case.u[:, j] for j, item in enumerate(spec.inputs)}
    columns |= {item.tag: stretch.y[:, i] for i, item in enumerate(spec.sensors)}
    history = history_from_frame(pd.DataFrame({"time": times, **columns}), rules_of(spec).tags)
    random, labs = np.random.default_rng([seed, 6]), []
    first = len(stretch.y) - (RESULTS + 1) * CYCLES_A_RESULT + 1
    for e, item in enumerate(spec.estimates):
        for k in range(first + CYCLES_A_RESULT - 1, len(stretch.y), CYCLES_A_RESULT):
            assert item.lab is not None
            value = float(stretch.truth[k, e] + item.lab.sd * random.standard_normal())
            labs.append(LabArrival(e, item.lab.tag, k * sample_us, k * sample_us + 1, value))
    labs.sort(key=lambda lab: lab.sampled)
    report = tune(model, history, labs)
    if not report.accepted:
        report = replace(tune_intervals(model, history, labs), refusals=report.refusals)
    return build_plant_model(parse_model_text(changed_text(text, "model", report.changes), "model")), report


def without_scale(model: PlantModel) -> PlantModel:
    """The same with every interval_scale at 1."""
    estimates = tuple(replace(item, interval_scale=1.0) for item in model.spec.estimates)
    return build_plant_model(replace(model.spec, estimates=estimates))


def judged(name: str, seed: int) -> Coverage:
    """One model of the library and one seed."""
    text = with_laboratory(path_of(name).read_text(encoding="utf-8"))
    model = build_plant_model(parse_model_text(text, name))
    truth = off(model.spec, np.random.default_rng([seed, 7]))
    cycles = round((RESULTS + 1) * CYCLES_A_RESULT / JUDGED_SHARE)
    later = live(truth, LATER, 900 + seed)
    after, report = tuned(text, model, live(truth, cycles, 500 + seed), seed)
    return Coverage(
        inside(model, live(model.spec, LATER, 100 + seed)),
        inside(model, later),
        inside(without_scale(after), later),
        inside(after, later),
        sum(item.results for item in report.intervals) // len(model.spec.estimates),
        "; ".join(report.refusals),
    )


def row(name: str, seed: int, found: Coverage) -> str:
    """As Markdown."""
    shares = (found.right, found.wrong, found.tuned, found.scaled)
    return (
        f"| {name} | {seed} | "
        + " | ".join(f"{100.0 * share:.1f} %" for share in shares)
        + f" | {found.results} |"
        + (" noise refused |" if found.refused else " |")
    )


if __name__ == "__main__":
    print("| model | run | right model | wrong model | its noise tuned | and a factor | results | |")
    print("|---|---|---|---|---|---|---|---|")
    for chosen in sys.argv[2:] or MODELS:
        for number in range(1, 1 + (int(sys.argv[1]) if len(sys.argv) > 1 else 10)):
            print(row(chosen, number, judged(chosen, number)), flush=True)
