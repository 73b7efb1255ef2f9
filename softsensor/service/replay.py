"""The live cycle over recorded data."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from plant_models.specification import UnitSpec
from softsensor.cycle import LabAtCycle, UnitDesign, start
from softsensor.cycle_results import CycleResults, join_results
from softsensor.detection.plant_states import StateChange
from softsensor.estimation.lab_results import LabArrival, LabOutcome
from softsensor.estimation.late_readings import LateReadings
from softsensor.estimation.past import Past
from softsensor.readings_of_cycle import CycleReadings, join_readings
from softsensor.service.assembly import DEFAULT_HORIZON_S, late_horizon
from softsensor.service.summary import RunSummary
from softsensor.service.unit_run import Came, UnitRun, slice_readings

Part = tuple[CycleReadings, Sequence[Came]]


@dataclass(frozen=True)
class Stretch:
    """Some consecutive cycles of a replay: what they saw and what came of it."""

    readings: CycleReadings
    results: CycleResults
    labs: tuple[LabOutcome, ...]


class Replay:
    """A replay under way: iterate over :meth:`stretches`, then ask for the summary.

    :param parts: consecutive cycles, each part with what comes before its first cycle: laboratory results, decisions.
    :param horizon_s: how far back, in seconds, a late result or reading reaches; what the model file says goes before it.
    :param first_cycle: the number of the first cycle, a multiple of the checkpoint interval.
    """

    def __init__(
        self,
        design: UnitDesign,
        parts: Iterable[Part],
        horizon_s: float = 0.0,
        first_cycle: int = 0,
    ) -> None:
        self.design = design
        self.first_cycle = first_cycle
        self._parts = parts
        past = Past(horizon_cycles(design.model.spec, horizon_s), design.kernel.n_estimates)
        past.next_cycle = first_cycle
        self.run = UnitRun(design, start(design, first_cycle), past)
        self.totals = RunSummary(design)
        self.late: list[LateReadings] = []
        """What past cycles came to see, in the order in which it was learnt."""

    def stretches(self) -> Iterator[Stretch]:
        """Run all cycles, a stretch at a time."""
        for part, came in self._parts:
            self.late += [item for item in came if isinstance(item, LateReadings)]
            advance = self.run.advance(part, came)
            self.totals.add_labs(advance.labs)
            row, labs = 0, advance.labs
            for results in advance.results:
                self.totals.add(results)
                yield Stretch(slice_readings(part, row, row + len(results)), results, labs)
                row, labs = row + len(results), ()

    @property
    def counted_labs(self) -> tuple[LabAtCycle, ...]:
        """All laboratory results counted so far, in order of their cycles, however long ago."""
        return tuple(self.run._labs)

    @property
    def digest(self) -> str:
        """The digest of all results so far."""
        return self.run.state.digest.hexdigest()


def horizon_cycles(spec: UnitSpec, needed_s: float = 0.0) -> int:
    """How many cycles a run remembers: as the model file says, else for seven days, or longer where a replay needs it."""
    seconds = late_horizon(spec) if spec.late_horizon is not None else max(needed_s, DEFAULT_HORIZON_S)
    return int(np.ceil(seconds / spec.sample_time)) + 2


def parts_of(
    blocks: Iterable[CycleReadings],
    labs: Iterable[LabArrival],
    changes: Iterable[tuple[int, StateChange]] = (),
) -> Iterator[Part]:
    """Cut blocks of cycles so that each part begins where laboratory results have arrived or the plant's state changes.

    :param changes: each with the time of the cycle that learns of it, in order.
    """
    return cut_parts(((block, ()) for block in blocks), labs, changes)


def cut_parts(
    blocks: Iterable[Part],
    labs: Iterable[LabArrival],
    changes: Iterable[tuple[int, StateChange]] = (),
) -> Iterator[Part]:
    """As :func:`parts_of`, for blocks with something that comes before the first cycle of each."""
    waiting: list[tuple[int, Came]] = [(lab.arrived, lab) for lab in labs]
    waiting = sorted([*waiting, *changes], key=lambda item: item[0])
    for block, before in blocks:
        row = 0
        while row < len(block):
            now: int = int(block.times[row])
            came: list[Came] = [] if row else list(before)
            while waiting and waiting[0][0] <= now:
                came.append(waiting.pop(0)[1])
            stop = len(block)
            if waiting:
                stop = max(row + 1, int(np.searchsorted(block.times, waiting[0][0], side="left")))
            yield slice_readings(block, row, min(stop, len(block))), came
            row = min(stop, len(block))


def horizon_of(labs: Iterable[LabArrival]) -> float:
    """The longest way back of these results, in seconds."""
    return max(((lab.arrived - lab.sampled) * 1e-6 for lab in labs), default=0.0)


def gathered(stretches: Iterable[Stretch], rows: int = 8192) -> Iterator[Stretch]:
    """The same cycles in longer stretches: tables cost by the piece."""
    waiting: list[Stretch] = []
    count = 0
    for stretch in stretches:
        waiting.append(stretch)
        count += len(stretch.results)
        if count >= rows:
            yield _joined(waiting)
            waiting, count = [], 0
    if waiting:
        yield _joined(waiting)


def _joined(parts: list[Stretch]) -> Stretch:
    if len(parts) == 1:
        return parts[0]
    return Stretch(
        join_readings([part.readings for part in parts]),
        join_results([part.results for part in parts]),
        tuple(lab for part in parts for lab in part.labs),
    )
