"""Step tests on the simulated reactor, and the model file that comes of them.

``python -m plant_models.identification.reactor_step_tests --out DIR`` puts the temperature controller in
manual, moves one input after another (and the feed's concentration with a feed of known composition, and the jacket's
heat transfer), fits transfer functions to what the instruments show, and writes ``jacketed_reactor.toml`` and
``misfit.csv`` into DIR.
"""

from __future__ import annotations

import argparse
import csv
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from plant_models.identification.reactor_model_text import model_text
from plant_models.identification.step_response import Structure, Vector
from plant_models.identification.step_test import FittedPair, fit_step_response
from plant_models.simulators.reactor_plant import MICROSECONDS, StirredTank
from plant_models.simulators.scenario import HOUR, Move, Scenario
from plant_models.simulators.stirred_tank import TankInputs, TankParameters, inputs_holding

ANALYSER_SD = 0.005
"""Noise of the product analyser on loan during the tests, mol/L."""

STRUCTURES = (Structure(1), Structure(2), Structure(2, 1), Structure(3), Structure(3, 1), Structure(3, 2))
LONGEST_DEAD_TIME = 60.0
"""There is no long pipe between the tank and its instruments."""


@dataclass(frozen=True, slots=True)
class StepSource:
    """One source of movement: its name in the model file, the plant's quantity, the step's size.

    ``scale`` is in the model's unit per unit of the plant's quantity.
    """

    name: str
    quantity: str
    size: float
    scale: float = 1.0


@dataclass(frozen=True, slots=True)
class PlanOfTests:
    """How long each level is held and how often values are taken, in seconds."""

    hold: float = 4.0 * HOUR
    interval: float = 20.0
    seed: int = 210


SOURCES = (
    StepSource("FI2103", "feed_flow", 0.6),
    StepSource("TI2105", "feed_temperature", 2.0),
    StepSource("FI2104", "coolant_flow", 1.4),
    StepSource("feed concentration", "feed_concentration", 0.10),
    StepSource("heat transfer", "heat_transfer_share", 0.05, 100.0),
)
TARGETS = ("TI2101A and TI2101B", "TI2102", "AY2101")
"""The two thermocouples are in one liquid and share the transfer functions fitted to their mean."""


def run_step_test(
    source: StepSource, plan: PlanOfTests, number: int
) -> tuple[Vector, Vector, dict[str, Vector]]:
    """Baseline, step up, step down past the baseline, back: time, the source's move, and the outputs.

    The move is the one asked for (a controller's setpoint, the feed's laboratory value), without meter noise.
    """
    start = 0.25 * plan.hold
    moves = (
        Move(source.quantity, start, source.size),  # type: ignore[arg-type]
        Move(source.quantity, start + plan.hold, -2.0 * source.size),  # type: ignore[arg-type]
        Move(source.quantity, start + 2.0 * plan.hold, source.size),  # type: ignore[arg-type]
    )
    scenario = Scenario(seed=plan.seed + number, moves=moves, automatic=False, sample_time=plan.interval)
    plant = StirredTank(scenario, 0)
    analyser = np.random.default_rng([plan.seed, number])
    time, move, outputs = [], [], []
    for tick in plant.readings(round((start + 3.0 * plan.hold) * MICROSECONDS)):
        shown = {reading.tag: reading.value for reading in tick}
        time.append(plant.time / MICROSECONDS)
        move.append(source.scale * scenario.shift(source.quantity, time[-1]))
        product = plant.truth.product + ANALYSER_SD * float(analyser.standard_normal())
        outputs.append((0.5 * (shown["TI2101A"] + shown["TI2101B"]), shown["TI2102"], product))
    columns = np.array(outputs).T
    return np.array(time), np.array(move), {tag: columns[i] for i, tag in enumerate(TARGETS)}


def identify(
    plan: PlanOfTests, sources: Sequence[StepSource] = SOURCES, structures: Sequence[Structure] = STRUCTURES
) -> tuple[FittedPair, ...]:
    """Run a test for each source and fit each output's transfer function."""
    pairs = []
    for number, source in enumerate(sources):
        time, move, outputs = run_step_test(source, plan, number)
        before = move == 0.0
        before[np.argmax(move != 0.0) :] = False
        for target, output in outputs.items():
            path = fit_step_response(time, move, output, structures, LONGEST_DEAD_TIME, (0.05 * plan.hold,))
            pairs.append(FittedPair(source.name, target, path, float(np.std(output[before], ddof=1))))
    return tuple(pairs)


def misfit_rows(pairs: Sequence[FittedPair]) -> list[dict[str, str]]:
    """Per path: gain with its 95 % interval, rms misfit as a share of the step response and of the noise.

    The misfit includes the noise: 100 % of the noise means that the linear model leaves nothing else.
    """
    rows = []
    for pair in pairs:
        lower, upper = pair.path.confidence_interval("gain")
        rows.append(
            {
                "from": pair.source,
                "to": pair.target,
                "gain": f"{pair.path.gain:.4g}",
                "gain_lower": f"{lower:.4g}",
                "gain_upper": f"{upper:.4g}",
                "poles": str(pair.path.structure.order),
                "zeros": str(pair.path.structure.zeros),
                "dead_time_s": f"{pair.path.dead_time:.1f}",
                "misfit_percent_of_response": f"{100.0 * pair.path.rms_misfit / pair.path.rms_response:.1f}",
                "misfit_percent_of_noise": f"{100.0 * pair.path.rms_misfit / pair.noise_sd:.0f}",
                "rms_misfit": f"{pair.path.rms_misfit:.4g}",
            }
        )
    return rows


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the tests, write the files, print the misfit table."""
    parser = argparse.ArgumentParser(
        description="Step tests on the simulated reactor; writes its model file."
    )
    parser.add_argument(
        "--out", type=Path, required=True, help="folder for jacketed_reactor.toml and misfit.csv"
    )
    out: Path = parser.parse_args(arguments).out
    pairs = identify(PlanOfTests())
    design = inputs_holding(TankParameters(), TankInputs(), Scenario().setpoint)
    rows = misfit_rows(pairs)
    out.mkdir(parents=True, exist_ok=True)
    (out / "jacketed_reactor.toml").write_text(model_text(pairs, design), encoding="utf-8", newline="\n")
    with (out / "misfit.csv").open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, fieldnames=list(rows[0]))
        writer.writeheader()
        writer.writerows(rows)
    for row in rows:
        sys.stdout.write("  ".join(f"{value:>20}" for value in row.values()) + "\n")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
