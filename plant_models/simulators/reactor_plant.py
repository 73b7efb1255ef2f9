"""Unit R-210 running: tank, instruments, controller and laboratory on one clock, from one seed."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from plant_models.simulators.control import Controller, ControllerState, control
from plant_models.simulators.instruments import Instrument, Measured, PlantReading, follow, measure, on_scale
from plant_models.simulators.scenario import Scenario
from plant_models.simulators.stirred_tank import (
    STEP_SECONDS,
    TankInputs,
    TankParameters,
    TankState,
    inputs_holding,
    steady_states,
    step,
)

MICROSECONDS = 1_000_000
THERMOWELL_LAG = 20.0

INSTRUMENTS = (
    Instrument("FI2103", "m3/h", (0.0, 20.0), 0.03, 0.005),
    Instrument("TI2105", "degC", (0.0, 150.0), 0.10, 0.01, THERMOWELL_LAG),
    Instrument("FI2104", "m3/h", (0.0, 25.0), 0.02, 0.005),
    Instrument("TI2101A", "degC", (0.0, 200.0), 0.25, 0.01, THERMOWELL_LAG),
    Instrument("TI2101B", "degC", (0.0, 200.0), 0.25, 0.01, THERMOWELL_LAG),
    Instrument("TI2102", "degC", (0.0, 150.0), 0.04, 0.01, THERMOWELL_LAG),
)
"""Flow meters and thermometers in the order of their readings."""

CONTROLLED_TAG = "TI2101A"


class TrueValues(NamedTuple):
    """What no instrument shows exactly, for scoring; the time in UTC microseconds."""

    time: int
    product: float
    reactant: float
    temperature: float
    jacket: float
    inputs: TankInputs


@dataclass(frozen=True, slots=True)
class LabResult:
    """A laboratory result. ``taken_at`` is the true sampling time, ``sampled_at`` what the label says."""

    tag: str
    value: float
    sampled_at: int
    reported_at: int
    taken_at: int


class StirredTank:
    """The plant, advanced to a wanted time in steps of two seconds.

    Every step draws the same number of random values whatever happens, so two runs of one seed differ only by
    what their scenarios say. ``start`` is UTC microseconds, a whole number of sample times since 1970.
    """

    def __init__(
        self,
        scenario: Scenario,
        start: int,
        parameters: TankParameters | None = None,
        controller: Controller | None = None,
    ) -> None:
        steps = scenario.sample_time / STEP_SECONDS
        if steps < 1.0 or steps != int(steps):
            raise ValueError(f"the sample time must be a multiple of {STEP_SECONDS:g} s")
        self.scenario = scenario
        self.start = start
        self.parameters = TankParameters() if parameters is None else parameters
        self._controller = Controller() if controller is None else controller
        self._steps_per_sample = int(steps)
        self._step = 0
        self._random = np.random.default_rng([scenario.seed, 0])
        self._lab_random = np.random.default_rng([scenario.seed, 1])
        self._wandering = [0.0] * len(scenario.wanders)
        self._begin()

    def _begin(self) -> None:
        """Start in the steady state of the design inputs, with the controller at its setpoint."""
        design = inputs_holding(self.parameters, TankInputs(), self.scenario.setpoint)
        self._design = design
        self._state = steady_states(self.parameters, design)[-1]
        self._control = ControllerState(self._state.temperature, design.coolant_flow)
        self._inputs = self._inputs_at(0.0)
        true = self._seen_by_instruments()
        self._measured = [Measured(value, value, 0) for value in true]
        self._lab_results: list[LabResult] = []
        self._scan(0.0)

    @property
    def time(self) -> int:
        """Where the plant is, UTC microseconds."""
        return self.start + round(self._seconds * MICROSECONDS)

    @property
    def _seconds(self) -> float:
        return self._step * STEP_SECONDS

    @property
    def truth(self) -> TrueValues:
        """True values now."""
        state = self._state
        return TrueValues(
            self.time, state.product, state.reactant, state.temperature, state.jacket, self._inputs
        )

    @property
    def tank_state(self) -> TankState:
        return self._state

    @property
    def readings_now(self) -> tuple[PlantReading, ...]:
        """What the instruments show at the latest scan, one reading per tag."""
        return tuple(
            PlantReading(instrument.tag, measured.shown, self.time, measured.status)
            for instrument, measured in zip(INSTRUMENTS, self._measured, strict=True)
        )

    def lab_results(self, since: int | None = None) -> tuple[LabResult, ...]:
        """Results reported up to now, oldest first; ``since`` leaves out those reported at or before it."""
        return tuple(
            result
            for result in self._lab_results
            if result.reported_at <= self.time and (since is None or result.reported_at > since)
        )

    def advance(self, until: int) -> None:
        """Run the plant to a time (UTC microseconds); what is not a whole step is left for the next call."""
        while self.time + round(STEP_SECONDS * MICROSECONDS) <= until:
            self._advance_one_step()

    def readings(self, until: int) -> Iterator[tuple[PlantReading, ...]]:
        """Run the plant to a time, giving the readings of every sample time on the way, both ends too."""
        while True:
            if self._step % self._steps_per_sample == 0 and self.time <= until:
                yield self.readings_now
            if self.time + round(STEP_SECONDS * MICROSECONDS) > until:
                return
            self._advance_one_step()

    def _advance_one_step(self) -> None:
        self._state = step(self.parameters, self._state, self._inputs)
        self._step += 1
        self._wander()
        self._inputs = self._inputs_at(self._seconds)
        self._scan(STEP_SECONDS)

    def _wander(self) -> None:
        normals = self._random.standard_normal(len(self._wandering))
        for index, wander in enumerate(self.scenario.wanders):
            kept = math.exp(-STEP_SECONDS / wander.time_constant)
            fresh = wander.sd * math.sqrt(1.0 - kept * kept) * float(normals[index])
            self._wandering[index] = kept * self._wandering[index] + fresh

    def _inputs_at(self, seconds: float) -> TankInputs:
        scenario, design = self.scenario, self._design
        moved = {
            name: getattr(design, name) + scenario.shift(name, seconds)
            for name in ("feed_flow", "feed_temperature", "feed_concentration", "coolant_temperature")
        }
        for wander, value in zip(scenario.wanders, self._wandering, strict=True):
            moved[wander.quantity] += value
        coolant = self._control.output + (
            0.0 if scenario.automatic else scenario.shift("coolant_flow", seconds)
        )
        return TankInputs(
            coolant_flow=coolant, heat_transfer_share=scenario.heat_transfer_share(seconds), **moved
        )

    def _seen_by_instruments(self) -> tuple[float, ...]:
        state, inputs = self._state, self._inputs
        return (
            inputs.feed_flow,
            inputs.feed_temperature,
            inputs.coolant_flow,
            state.temperature,
            state.temperature,
            state.jacket,
        )

    def _scan(self, seconds: float) -> None:
        """Read every instrument, let the controller act on what it is shown, take a sample if one is due."""
        normals = self._random.standard_normal(2 * len(INSTRUMENTS)).tolist()
        now = self._seconds
        for index, (instrument, true) in enumerate(
            zip(INSTRUMENTS, self._seen_by_instruments(), strict=True)
        ):
            before = self._measured[index]
            pair = (normals[2 * index], normals[2 * index + 1])
            lagged = follow(instrument, before.lagged, true, seconds)
            self._measured[index] = measure(
                instrument, self.scenario.faults, before, lagged, now, pair, self.scenario.sample_time
            )
        if self.scenario.automatic:
            shown = next(r.value for r in self.readings_now if r.tag == CONTROLLED_TAG)
            self._control = control(self._controller, self._control, shown, self.scenario.setpoint, seconds)
        self._take_sample(now)

    def _take_sample(self, now: float) -> None:
        laboratory = self.scenario.laboratory
        number = (now - laboratory.first) / laboratory.interval
        if number < 0.0 or number != int(number):
            return
        value = self._state.product + laboratory.noise_sd * float(self._lab_random.standard_normal())
        stamp = self.time
        if laboratory.mistaken_sample == int(number):
            stamp += round(laboratory.mistake * MICROSECONDS)
        self._lab_results.append(
            LabResult(
                laboratory.tag,
                on_scale(value, laboratory.resolution),
                stamp,
                self.time + round(laboratory.delay * MICROSECONDS),
                self.time,
            )
        )
