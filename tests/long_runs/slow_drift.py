"""A drift that the filter follows: a usual pair of sums with k = 0.5 beside the patient pair, on the demonstration's model.

    python tests/long_runs/slow_drift.py [runs] [picture.png]

TI2102 of the reactor drifts as fast as the sheet says is found within 7 d where the model file names it as ``patient``. Both
pairs keep the same promise, one false flag in 30 d, on the same innovations. The usual pair is run here, in numpy, from the
recursion of Page (1954); its decision interval has the average run length of the promise. A picture needs matplotlib.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
from independent.transfer_paths import Array
from long_runs.simulated_plant import Case, Plant, seen_by, still_inputs

from plant_models.building import build_plant_model
from plant_models.model_file import read_model_file
from plant_models.simulators import reactor_model_path
from softsensor.cycle import UnitDesign
from softsensor.detection.detectability import DAY, HORIZONS
from softsensor.detection.detection_design import DetectionDesign
from softsensor.detection.flags import Flag
from softsensor.detection.run_length import decision_interval
from softsensor.detection.sheet import findable_by_own_sums
from softsensor.unit_design import design_unit

TAG, INDEX, LAST = "TI2102", 2, 3
USUAL_K = 0.5
LEAD_IN = 20_000
"""Cycles before the onset: sums with so small a reference value need days until they are at rest."""


@dataclass(frozen=True)
class Run:
    """One plant: shares of the decision interval, cycle by cycle, of the whole bank, of its patient pair and of the usual
    pair; the flags opened."""

    bank: Array
    patient: Array
    usual: Array
    flags: tuple[Flag, ...]

    def found(self, sums: Array) -> int | None:
        """Cycles from the onset until the sum passes its interval; None where it does not."""
        up = np.flatnonzero(sums[LEAD_IN:] > 1.0)
        return int(up[0]) if up.size else None

    @property
    def counts(self) -> bool:
        """Nothing up at the onset already."""
        return bool(self.bank[LEAD_IN - 1] < 1.0 and self.usual[LEAD_IN - 1] < 1.0)


def patient_reactor() -> UnitDesign:
    """The demonstration's model with TI2102 watched patiently."""
    spec = read_model_file(reactor_model_path())
    return design_unit(build_plant_model(replace(spec, leave_out_isolated=False, patient=(TAG,))))


def sheet_drift(design: DetectionDesign) -> float:
    """The slowest drift, per day, that the sheet says is found within 7 d."""
    size = findable_by_own_sums(design, INDEX).ramps[LAST]
    assert size is not None
    return size


def shares(z: Array, reference: float, interval: float) -> Array:
    """The larger sum of a pair over innovations z, as a share of its interval; nan is passed over."""
    high = low = 0.0
    out = np.empty(len(z))
    for k, value in enumerate(z.tolist()):
        if value == value:
            high, low = max(0.0, high + value - reference), max(0.0, low - value - reference)
        out[k] = max(high, low) / interval
    return out


def run_one(design: UnitDesign, per_day: float, seed: int, days: float = HORIZONS[LAST] / DAY) -> Run:
    """A plant whose TI2102 begins to drift after the lead-in."""
    spec = design.model.spec
    after = round(days * DAY / spec.sample_time)
    bias = np.zeros((LEAD_IN + after, len(spec.sensors)))
    bias[LEAD_IN:, INDEX] = per_day * spec.sample_time / DAY * np.arange(1, after + 1)
    case = Case(still_inputs(spec, len(bias)), bias=bias)
    seen = seen_by(design, case, Plant(spec, 3000 + seed).readings(case)[1], keep=True)
    z = np.concatenate([(part.innovation / part.innovation_sd)[:, INDEX] for part in seen.parts])
    bank = np.concatenate([np.maximum(part.high, part.low)[:, INDEX] for part in seen.parts])
    own = design.detection.tests
    patient = shares(
        np.clip(z, -own.clip, own.clip), float(own.reference[INDEX, 0]), float(own.interval[INDEX, 0])
    )
    usual = shares(z, USUAL_K, decision_interval(USUAL_K, spec.false_flag_interval / spec.sample_time))
    onset = LEAD_IN * design.detection.sample_us
    opened = tuple(flag for flag in seen.flags if flag.cleared is None and flag.detected >= onset)
    return Run(bank, patient, usual, opened)


def report(design: UnitDesign, runs: list[Run], per_day: float) -> str:
    """As Markdown."""
    rows = [
        f"{len(runs)} plants, {TAG} drifting by {per_day:.3g} K/d for 7 d:",
        "",
        "| sums | found within 7 d | half of those found within |",
        "|---|---|---|",
    ]
    for name in ("bank", "usual"):
        found = [run.found(getattr(run, name)) for run in runs]
        times = [cycles * design.model.spec.sample_time / DAY for cycles in found if cycles is not None]
        median = f"{np.median(times):.1f} d" if times else ""
        title = "bank with its patient pair" if name == "bank" else f"one usual pair, k = {USUAL_K:g}"
        rows.append(f"| {title} | {100.0 * len(times) / len(runs):.1f} % | {median} |")
    flagged = [
        [flag for flag in run.flags if TAG in flag.group and flag.kind in ("bias", "drift")] for run in runs
    ]
    first = sum(bool(flags) and flags[0].tag == TAG for flags in flagged)
    other = sum(any(TAG not in flag.group for flag in run.flags) for run in runs)
    rows += [
        "",
        f"Flagged within 7 d with {TAG} in the group: {100.0 * np.mean([bool(f) for f in flagged]):.1f} %, first in it "
        f"{100.0 * first / len(runs):.1f} %; a flag without it: {100.0 * other / len(runs):.1f} %.",
    ]
    return "\n".join(rows)


def draw(design: UnitDesign, run: Run, per_day: float, path: Path) -> None:
    """Bias and both sums of one plant, as a picture."""
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot

    spec = design.model.spec
    days = (np.arange(len(run.bank)) - LEAD_IN) * spec.sample_time / DAY
    figure, (top, bottom) = pyplot.subplots(2, 1, sharex=True, figsize=(9.0, 5.4), height_ratios=(1, 2))
    sensor = spec.sensors[INDEX]
    top.plot(days, np.maximum(days, 0.0) * per_day, color="#1c2226", label="bias put in")
    top.axhline(sensor.tolerance, color="#b34700", linestyle=":", label="tolerance")
    top.set_ylabel(f"{TAG}, K")
    bottom.plot(days, run.usual, color="#8a9499", linewidth=0.6, label=f"one usual pair, k = {USUAL_K:g}")
    bottom.plot(days, run.patient, color="#2f6f8f", linewidth=0.9, label="the patient pair")
    bottom.axhline(1.0, color="#b34700", label="decision interval: one false flag in 30 d")
    found = run.found(run.patient)
    if found is not None:
        bottom.axvline(found * spec.sample_time / DAY, color="#2f6f8f", linestyle="--", label="found")
    bottom.axvline(
        HORIZONS[LAST] / DAY, color="#4b5459", linestyle=":", label="90 % found by here, says the sheet"
    )
    bottom.set_ylabel("sum / decision interval")
    bottom.set_xlabel("days after the drift began")
    for axes in (top, bottom):
        axes.legend(loc="upper left", fontsize="small")
    figure.suptitle(f"{TAG} drifts by {per_day:.3g} K/d, and the filter follows")
    figure.tight_layout()
    figure.savefig(path, dpi=110)
    pyplot.close(figure)


def main(count: int = 300, picture: str | None = None) -> None:
    """Run all plants, print the table, draw the first in which chance does not set off the usual pair."""
    design = patient_reactor()
    per_day = sheet_drift(design.detection)
    runs = [run for run in (run_one(design, per_day, seed) for seed in range(count)) if run.counts]
    print(report(design, runs, per_day), flush=True)
    if picture is not None:
        quiet = [run for run in runs if run.found(run.usual) is None]
        draw(design, (quiet or runs)[0], per_day, Path(picture))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 300, sys.argv[2] if len(sys.argv) > 2 else None)
