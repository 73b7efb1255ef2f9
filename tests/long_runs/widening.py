"""Commissioning on published models whose disturbances have time constants wrong by 3 and by 1/3: what a widened test keeps.

Run as a script from the repository: ``python tests/long_runs/widening.py [model ...]``; some minutes. For each model,
factor and seed a stretch of the true plant is judged with the wrong model, and the widened bank is then run over many
promised intervals of the true plant. A table in Markdown comes out: the times between false flags as shares of the
promise.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.dense_filter import stochastic
from long_runs.models import REACTOR, path_of

from plant_models.building import build_plant_model
from plant_models.specification import UnitSpec
from softsensor.commissioning.bank_run import Bank, BankRun
from softsensor.commissioning.widening import WIDEST, widening
from softsensor.cycle import UnitDesign, rerun, start
from softsensor.detection.design_of_tests import SPREAD_SHARE
from softsensor.detection.flags import FlagBook
from softsensor.estimation.kernel import Floats
from softsensor.readings_of_cycle import CycleReadings
from softsensor.unit_design import design_unit, load_model

MODELS = (
    ("wood_berry", 30.0, 14.0),
    ("heavy_oil_fractionator", 30.0, 14.0),
    ("quadruple_tank", 2.0, 1.5),
    (REACTOR, 30.0, 14.0),
)
"""Name, promised interval and length of the stretch in days."""
FACTORS = (1.0, 3.0, 1.0 / 3.0)
SEEDS = (1, 2)
PROMISES = 20
PIECE, LEAD_IN = 20_000, 500


class Truth:
    """Readings of a true plant with steady inputs, in pieces."""

    def __init__(self, spec: UnitSpec, seed: int) -> None:
        self._spec = spec
        self._rng = np.random.default_rng([seed, 21])
        self._model: Any = stochastic(spec)
        values, vectors = np.linalg.eigh(self._model.P0)
        self._x = vectors @ (np.sqrt(np.clip(values, 0.0, None)) * self._rng.standard_normal(values.size))

    def readings(self, cycles: int) -> Floats:
        """(cycles, n_sensors)"""
        sensors = self._spec.sensors
        walk = np.sqrt(np.diag(self._model.Q))
        A, C = self._model.A, self._model.C[: len(sensors)]
        noise = self._rng.standard_normal((cycles, walk.size)) * walk
        out = np.empty((cycles, len(sensors)))
        for k in range(cycles):
            out[k] = C @ self._x
            self._x = A @ self._x + noise[k]
        own = self._rng.standard_normal(out.shape) * [item.noise_sd for item in sensors]
        readings: Floats = out + own + [item.operating_point for item in sensors]
        return readings


def innovations(design: UnitDesign, truth: Truth, cycles: int) -> Floats:
    """Standardised innovations (cycles, n_sensors) of the live cycle's filter, the lead-in left away."""
    estimator, parts, done = start(design).estimator, [], 0
    u = np.array([item.operating_point for item in design.model.spec.inputs])
    while done < cycles + LEAD_IN:
        count = min(PIECE, cycles + LEAD_IN - done)
        y = truth.readings(count)
        still = np.tile(u, (count, 1))
        good = np.zeros(still.shape, dtype=np.int8), np.zeros(y.shape, dtype=np.int8)
        readings = CycleReadings(np.arange(count, dtype=np.int64), still, good[0], y, good[1])
        estimator, out = rerun(design, estimator, FlagBook(), done, readings, ())
        parts.append(out.innovation / out.innovation_sd)
        done += count
    found: Floats = np.concatenate(parts)[LEAD_IN:]
    return found


def with_time_constants(spec: UnitSpec, factor: float) -> UnitSpec:
    """The same unit with the time constants of all disturbances so many times as long."""
    changed = tuple(
        replace(item, time_constant=(item.time_constant or 0.0) * factor) for item in spec.disturbances
    )
    return replace(spec, disturbances=changed)


def main(names: tuple[str, ...] = ()) -> None:
    """Print the table, a line per sensor, and the worst case; of these models, or of all."""
    print("| model | time constants x | sensor | factor | before | promised by the simulation | achieved |")
    print("|---|---|---|---|---|---|---|")
    worst = np.inf
    for name, promised_days, days in MODELS:
        if names and name not in names:
            continue
        truth = replace(load_model(path_of(name)).spec, false_flag_interval=promised_days * 86400.0)
        promise = truth.false_flag_interval / truth.sample_time
        for factor in FACTORS:
            design = design_unit(build_plant_model(with_time_constants(truth, factor)))
            tests = design.detection.tests
            long = innovations(design, Truth(truth, 99), int(PROMISES * promise))
            for seed in SEEDS:
                seen = innovations(design, Truth(truth, seed), int(days * 86400.0 / truth.sample_time))
                for i, sensor in enumerate(truth.sensors):
                    bank = Bank(tests.reference[i], tests.interval[i], tests.clip)
                    _, wider = widening(
                        np.ascontiguousarray(seen[:, i]), bank, promise / (1.0 - SPREAD_SHARE)
                    )
                    widths = np.array([1.0, max(wider.factor or WIDEST, 1.0 + 1e-9)])
                    run = BankRun(bank, widths)
                    run.add(np.ascontiguousarray(long[:, i]))
                    before, after = run.cycles / np.maximum(run.counts, 0.5) / promise
                    worst = min(worst, after) if wider.factor is not None else worst
                    text = "disarmed" if wider.factor is None else f"{wider.factor:.2f}"
                    said = "" if wider.after is None else f"{wider.after / promise:.2f}"
                    print(
                        f"| {name} | {factor:.2g} | {sensor.tag} | {text} | {before:.2f} | {said} | {after:.2f} |",
                        flush=True,
                    )
    print(f"\nshortest time between false flags of an armed sensor: {worst:.2f} of the promised")


if __name__ == "__main__":
    main(tuple(sys.argv[1:]))
