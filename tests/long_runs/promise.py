"""Promise against reality: how often do the tests of a sensor go up, and how often is a flag raised, without any fault?

python tests/long_runs/promise.py [years] [model ...]
"""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

from independent.transfer_paths import Array
from long_runs.models import MODELS, design_named
from long_runs.simulated_plant import Plant, replay_of, still_inputs
from scipy.stats import chi2

from softsensor.cycle import UnitDesign

YEAR = 365.25 * 86400.0
SEED = 20261201


@dataclass(frozen=True)
class Kept:
    """One sensor: days promised between false alarms, how often a shift test went up, how often it was flagged, days in all.

    A flag of another kind than a shift's comes without a shift test: ``alarms`` counts both.
    """

    tag: str
    promised: float
    ups: int
    flags: int
    others: int
    days: float

    @property
    def alarms(self) -> int:
        return self.ups + self.others

    def interval(self) -> tuple[float, float]:
        """Garwood's 95 % interval of the achieved days between alarms."""
        low = 0.5 * chi2.ppf(0.025, 2 * self.alarms) if self.alarms else 0.0
        high = 0.5 * chi2.ppf(0.975, 2 * (self.alarms + 1))
        return self.days / high, self.days / low if low else float("inf")

    @property
    def kept(self) -> bool:
        """The promise lies in the 95 % interval, or what was achieved is longer by a factor of two at most."""
        low, high = self.interval()
        achieved = self.days / max(self.alarms, 1)
        return low <= self.promised <= high or self.promised <= achieved <= 2.0 * self.promised


def without_fault(design: UnitDesign, years: float, seed: int = SEED) -> list[Kept]:
    """Run a plant that is as its model says and has no fault."""
    spec = design.model.spec
    cycles = round(years * YEAR / spec.sample_time)
    plant = Plant(spec, seed)

    def blocks() -> Iterator[tuple[Array, Array]]:
        for y in plant.life(cycles):
            yield still_inputs(spec, len(y)), y

    running, flags, others = replay_of(design, blocks()), Counter[str](), Counter[str]()
    for stretch in running.stretches():
        for flag in stretch.results.flags:
            if flag.cleared is None:
                (flags if flag.kind in ("bias", "drift", "model") else others)[flag.tag] += 1
    days = cycles * spec.sample_time / 86400.0
    sensors = running.totals.as_dict(running.digest)["sensors"]
    found = []
    for tag in design.model.sensor_tags:
        achieved = sensors[tag]["achieved_run_length"]
        ups = 0 if achieved is None else round(cycles / achieved)
        promised = spec.false_flag_interval / 86400.0
        found.append(Kept(tag, promised, ups, flags[tag], others[tag], days))
    return found


def table(name: str, rows: list[Kept]) -> str:
    """As Markdown."""
    lines = [
        f"**{name}**, {rows[0].days / 365.25:.3g} years\n",
        "| sensor | promised | shift tests up | other alarms | achieved (95 % interval) | flags of a shift | kept |",
        "|---|---|---|---|---|---|---|",
    ]
    for row in rows:
        low, high = row.interval()
        achieved = f"{row.days / max(row.alarms, 1):.1f} d ({low:.1f} to {high:.1f})"
        lines.append(
            f"| {row.tag} | {row.promised:.0f} d | {row.ups} | {row.others} | {achieved} | {row.flags} | "
            f"{'yes' if row.kept else 'NO'} |"
        )
    return "\n".join(lines)


def report(years: float = 50.0, names: tuple[str, ...] = MODELS) -> str:
    """Every model."""
    return "\n\n".join(table(name, without_fault(design_named(name), years)) for name in names)


if __name__ == "__main__":
    print(report(float(sys.argv[1]) if len(sys.argv) > 1 else 50.0, tuple(sys.argv[2:]) or MODELS))
