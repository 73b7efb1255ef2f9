"""Commissioning's run length: what the fault tests' promise is worth on a fault-free stretch that tuning has not seen."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from connectors.history import History
from plant_models.building import build_plant_model
from plant_models.durations import format_duration
from plant_models.number_text import plain
from plant_models.plant_model import PlantModel
from softsensor.commissioning.bank_run import Bank, BankRun
from softsensor.commissioning.correlation import Character
from softsensor.commissioning.widening import WIDEST, Widening, widening
from softsensor.cycle import UnitDesign
from softsensor.detection.design_of_tests import SPREAD_SHARE
from softsensor.detection.flags import Flag, time_words
from softsensor.detection.state_of_tests import NO_PAIR
from softsensor.errors import ReplayError
from softsensor.estimation.kernel import Floats
from softsensor.estimation.lab_results import LabArrival
from softsensor.service.assembly import assemble_blocks
from softsensor.service.replay import Replay, horizon_of, parts_of
from softsensor.unit_design import design_unit

STRETCH = 5.0
"""Times that a patient sum needs from zero to its interval: the shortest stretch that can judge it."""
LARGE_MEAN = 0.2
"""Mean of the standardised innovations that, beyond chance, is named as the reason why tests stay disarmed."""
LEAST_READINGS = 2000
"""Innovations of a sensor below which nothing is said about its tests."""


@dataclass(frozen=True, slots=True)
class SensorRun:
    """One sensor; run lengths in seconds.

    :param before, after: mean time between false flags of its bank with the intervals as designed and with the factor.
    :param factor: of the decision intervals; None where the tests stay disarmed, ``reason`` then says why.
    :param ups_before, ups_after: how often the bank went up on the stretch itself.
    """

    tag: str
    character: Character
    before: float
    after: float | None
    factor: float | None
    reason: str
    ups_before: int
    ups_after: int


@dataclass(frozen=True, slots=True)
class RunLengths:
    """What a stretch says about all sensors of a unit; times in UTC microseconds, ``promised`` and ``span`` in seconds."""

    unit: str
    first_time: int
    last_time: int
    cycles: int
    span: float
    promised: float
    sensors: tuple[SensorRun, ...]
    flags: tuple[Flag, ...]
    unjudged: tuple[str, ...] = ()
    """Patient sums that the stretch is too short for."""

    @property
    def widening(self) -> dict[str, float]:
        """The factors to be written: those above 1."""
        return {
            item.tag: item.factor for item in self.sensors if item.factor is not None and item.factor > 1.0
        }

    @property
    def disarmed(self) -> dict[str, str]:
        """Sensors whose tests cannot keep the promise, with the reason."""
        return {item.tag: item.reason for item in self.sensors if item.factor is None}

    @property
    def notes(self) -> tuple[str, ...]:
        """What a person should look at."""
        return self.unjudged + tuple(
            f"{flag.tag} was flagged ({flag.kind}) at {time_words(flag.detected)}: if it was at fault, choose another "
            "stretch, for what its innovations were then counts as usual here"
            for flag in self.flags
        )


def commission(
    model: PlantModel, history: History, labs: Sequence[LabArrival] = (), seed: int = 1
) -> RunLengths:
    """Run the live cycle over a stretch with every sensor's tests as first designed, and judge each sensor's innovations.

    Earlier widenings of the file count for nothing: they are found anew.

    :raises ReplayError: too few readings of a sensor.
    """
    spec = replace(model.spec, widening=(), disarmed=(), leave_out_isolated=False)
    design = design_unit(build_plant_model(spec))
    replay = Replay(design, parts_of(assemble_blocks(spec, history), labs), horizon_of(labs))
    z, times = _innovations(design, replay)
    few = [
        f"{history.name}: {tag} has {int(np.isfinite(z[:, i]).sum())} innovations once the run has settled; expected at "
        f"least {LEAST_READINGS}"
        for i, tag in enumerate(model.sensor_tags)
        if np.isfinite(z[:, i]).sum() < LEAST_READINGS
    ]
    if few:
        raise ReplayError(*few)
    cycles = spec.false_flag_interval / spec.sample_time
    sensors = tuple(_sensor(design, z, i, cycles, seed) for i in range(len(spec.sensors)))
    short = (_too_short(design, i, len(z)) for i in range(len(spec.sensors)))
    unjudged = tuple(text for text in short if text is not None)
    span = len(z) * spec.sample_time
    flags = tuple(replay.totals.flags.values())
    ends = int(times[0]), int(times[-1])
    return RunLengths(spec.name, *ends, len(z), span, spec.false_flag_interval, sensors, flags, unjudged)


def _innovations(design: UnitDesign, replay: Replay) -> tuple[Floats, NDArray[np.int64]]:
    """Standardised innovations (N, n_sensors) of readings used while tests ran and the filter had settled; times (N,)."""
    skip = max(design.detection.settled_after, design.detection.forgetting.until)
    parts, times = [], []
    for stretch in replay.stretches():
        results = stretch.results
        with np.errstate(invalid="ignore"):
            z = results.innovation / results.innovation_sd
        counts = (results.used != 0) & (results.settling[:, None] == 0)
        counts &= (np.arange(results.first, results.first + len(results)) >= skip)[:, None]
        parts.append(np.where(counts, z, np.nan))
        times.append(results.times)
    whole = np.concatenate(parts) if parts else np.zeros((0, design.kernel.n_sensors))
    moments = np.concatenate(times) if times else np.zeros(1, dtype=np.int64)
    first = int(np.argmax(np.any(np.isfinite(whole), axis=1))) if len(whole) else 0
    return whole[first:], moments[first:] if len(moments) > first else moments


def _sensor(design: UnitDesign, z: Floats, i: int, cycles: float, seed: int) -> SensorRun:
    tests, spec = design.detection.tests, design.model.spec
    has = tests.interval[i] < NO_PAIR
    if _too_short(design, i, len(z)) is not None:
        has[0] = False
    bank = Bank(tests.reference[i][has], tests.interval[i][has], tests.clip)
    own = np.ascontiguousarray(z[:, i])
    found, wider = widening(own, bank, cycles / (1.0 - SPREAD_SHARE), seed + i)
    seen = BankRun(bank, np.array([1.0, max(wider.factor or WIDEST, 1.0 + 1e-9)]))
    seen.add(own)
    reason = "" if wider.factor is not None else _reason(found, len(z) * spec.sample_time)
    return SensorRun(
        spec.sensors[i].tag,
        found,
        wider.before * spec.sample_time,
        _seconds(wider, spec.sample_time),
        wider.factor,
        reason,
        int(seen.counts[0]),
        int(seen.counts[1]),
    )


def _too_short(design: UnitDesign, i: int, cycles: int) -> str | None:
    """Why a stretch cannot judge the patient sums of a sensor; None where it can, or where the sensor has none."""
    tests, spec = design.detection.tests, design.model.spec
    if spec.sensors[i].tag not in spec.patient:
        return None
    needed = STRETCH * float(tests.interval[i, 0] / tests.reference[i, 0])
    if cycles >= needed:
        return None
    days = spec.sample_time / 86400.0
    return (
        f"{spec.sensors[i].tag} is watched patiently, and {plain(cycles * days, 2)} d cannot judge sums that remember "
        f"so long: take a stretch of {plain(needed * days, 2)} d or more, or take it out of `patient`"
    )


def _seconds(wider: Widening, sample_time: float) -> float | None:
    return None if wider.after is None else wider.after * sample_time


def _reason(found: Character, span: float) -> str:
    days = max(span / 86400.0, 0.1)
    over = f"over {plain(days, 2)} d" if span >= 8640.0 else f"over {format_duration(round(span))}"
    chance = 2.576 * math.sqrt(max(found.slow, 0.0) / found.readings)
    if abs(found.mean) > max(LARGE_MEAN, chance):
        return f"innovations off by {found.mean:+.2f} of their standard deviation on average {over}"
    correlated = f"correlated {found.lag_one:.2f} at lag one {over}"
    if found.sd_ratio > 1.0 + abs(found.lag_one):
        return f"innovations {found.sd_ratio:.2f} times as wide as the model says, {correlated}"
    return f"innovations {correlated}"
