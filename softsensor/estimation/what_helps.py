"""What would make an estimate better or worse: a sensor lost, a second instrument, laboratory results more often.

All are compared by one figure: the estimate's standard deviation where it is largest, just before the next laboratory
result comes in, with results at a regular interval; for an estimate without laboratory results the settled standard
deviation. In the estimate's unit, times its interval_scale, its own walking offset included; inf where it grows without
limit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve

from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel, StochasticPart
from plant_models.second_instrument import SECOND, with_second
from softsensor.estimation.observability import after_result, shown_scale
from softsensor.estimation.steady_state import Rows, SteadyState, Stretch, measured_rows, settle

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

LAB_INTERVAL = 86400.0
"""Seconds between laboratory results where nothing else is said."""
GROWTH_TIMES = (3600.0, 8 * 3600.0, 86400.0)
"""Seconds after a laboratory result."""
_MOST_DOUBLINGS = 40
_SAME, _LEAST_SHARE = 1e-9, 1e-9


@dataclass(frozen=True, slots=True)
class Change:
    """One change of what is measured, in words, and the standard deviation that the estimate then has.

    ``loses``: it takes something away.
    """

    what: str
    sd: float
    loses: bool


@dataclass(frozen=True, slots=True)
class Prospects:
    """Of one estimate. ``lab_interval``: seconds between its laboratory results, None where it has none; ``sd``: as it is;
    ``changes``: the best first. ``after_result``: for each of GROWTH_TIMES (seconds) after one laboratory result on the
    settled filter, the standard deviation then; empty where it has none.
    """

    tag: str
    unit: str
    lab_interval: float | None
    sd: float
    changes: tuple[Change, ...]
    after_result: tuple[tuple[float, float], ...]


def prospects(model: PlantModel, lab_interval: float = LAB_INTERVAL) -> tuple[Prospects, ...]:
    """Of every estimate.

    :param lab_interval: seconds between two laboratory results of one estimate.
    :raises RealisationError: the filter does not settle.
    """
    spec, part = model.scaled, model.stochastic
    everything = settle(part, measured_rows(model))
    variants = _variants(model)
    found = []
    for index, estimate in enumerate(spec.estimates):
        place, scale = len(spec.sensors) + index, shown_scale(model, index)
        row = part.C[place]
        if estimate.lab is None:
            changes = [
                Change(item.what, scale * math.sqrt(item.state.variance(item.row_of(place))), item.loses)
                for item in variants
            ]
            sd = scale * math.sqrt(everything.variance(row))
            found.append(Prospects(estimate.tag, estimate.unit, None, sd, _sorted(changes), ()))
            continue
        result = _Result(part, row, estimate.lab.sd, scale)
        cycles = max(1, round(lab_interval / spec.sample_time))
        changes = [
            Change(
                item.what,
                replace(result, part=item.part, row=item.row_of(place)).sd_before_next(item.state, cycles),
                item.loses,
            )
            for item in variants
        ]
        oftener = result.sd_before_next(everything, max(1, cycles // 2))
        changes.append(Change("laboratory results twice as often", oftener, False))
        later = [max(1, round(time / spec.sample_time)) for time in GROWTH_TIMES]
        growth = tuple(zip(GROWTH_TIMES, result.sd_after(everything, later), strict=True))
        sd = result.sd_before_next(everything, cycles)
        found.append(Prospects(estimate.tag, estimate.unit, lab_interval, sd, _sorted(changes), growth))
    return tuple(found)


@dataclass(frozen=True, eq=False)
class _Variant:
    """What is measured otherwise: the stochastic part, its settled filter, and by how many rows the estimates move on."""

    what: str
    part: StochasticPart
    state: SteadyState
    loses: bool
    moved: int

    def row_of(self, place: int) -> Vector:
        """The row of an estimate that was at ``place`` among the outputs."""
        row: Vector = self.part.C[place + self.moved]
        return row


def _variants(model: PlantModel) -> list[_Variant]:
    """Each sensor lost; a second instrument beside each, with an offset of its own where the first one has one."""
    spec, part, sensors = model.spec, model.stochastic, range(len(model.spec.sensors))
    found = []
    for i, sensor in enumerate(spec.sensors):
        state = settle(part, measured_rows(model, [j for j in sensors if j != i]))
        found.append(_Variant(f"{sensor.tag} lost", part, state, True, 0))
    for i, sensor in enumerate(spec.sensors):
        what = SECOND.format(sensor.tag)
        if sensor.bias_walk_sd > 0.0 or sensor.bias_initial_sd > 0.0:
            larger = build_plant_model(with_second(spec, i))
            found.append(
                _Variant(what, larger.stochastic, settle(larger.stochastic, measured_rows(larger)), False, 1)
            )
        else:
            found.append(_Variant(what, part, settle(part, measured_rows(model, [*sensors, i])), False, 0))
    return found


def _sorted(changes: list[Change]) -> tuple[Change, ...]:
    return tuple(sorted(changes, key=lambda change: change.sd))


@dataclass(frozen=True, eq=False)
class _Reduced:
    """The filter of some rows after a laboratory result, in the directions that then have a finite variance."""

    powers: list[Stretch]
    rows: Rows
    seen: Vector

    def later(self, prior: Matrix, cycles: int) -> Matrix:
        """The prior covariance so many cycles later."""
        whole = self.stretch(cycles)
        return prior if whole is None else whole.after(prior)

    def stretch(self, cycles: int) -> Stretch | None:
        """So many cycles as one; None for none."""
        whole: Stretch | None = None
        for place in range(cycles.bit_length()):
            while len(self.powers) <= place:
                self.powers.append(self.powers[-1].doubled())
            if cycles >> place & 1:
                whole = self.powers[place] if whole is None else whole.then(self.powers[place])
        return whole

    def corrected(self, prior: Matrix) -> Matrix:
        """After the cycle's readings."""
        if not self.rows.r.size:
            return prior
        C = self.rows.C
        S = C @ prior @ C.T + np.diag(self.rows.r)
        return np.asarray(prior - prior @ C.T @ solve(S, C @ prior, assume_a="pos"), dtype=np.float64)


@dataclass(frozen=True, eq=False)
class _Result:
    """Laboratory results of one estimate: its row, their sd, the factor to the sd that is shown."""

    part: StochasticPart
    row: Vector
    sd: float
    scale: float

    def sd_after(self, seeing: SteadyState, cycles: list[int]) -> list[float]:
        """The estimate's sd so many cycles after one result on the settled filter."""
        reduced, posterior = self._reduced(seeing)
        if reduced is None:
            return [math.inf for _ in cycles]
        one = reduced.powers[0]
        first = one.A @ posterior @ one.A.T + one.H
        return [self._sd(reduced, reduced.corrected(reduced.later(first, count - 1))) for count in cycles]

    def sd_before_next(self, seeing: SteadyState, cycles: int) -> float:
        """... just before the next result, with a result every so many cycles for ever."""
        reduced, posterior = self._reduced(seeing)
        if reduced is None:
            return math.inf
        one = reduced.powers[0]
        prior = reduced.later(one.A @ posterior @ one.A.T + one.H, cycles - 1)
        with_result = Stretch(one.A, one.G + np.outer(reduced.seen, reduced.seen) / self.sd**2, one.H)
        between, sd = reduced.stretch(cycles - 1), self._sd(reduced, reduced.corrected(prior))
        periods = with_result if between is None else with_result.then(between)
        for _ in range(_MOST_DOUBLINGS):
            before, sd = sd, self._sd(reduced, reduced.corrected(periods.after(prior)))
            if abs(sd - before) <= _SAME * max(sd, _LEAST_SHARE * before):
                break
            periods = periods.doubled()
        return sd

    def _sd(self, reduced: _Reduced, P: Matrix) -> float:
        return self.scale * math.sqrt(max(0.0, float(reduced.seen @ P @ reduced.seen)))

    def _reduced(self, seeing: SteadyState) -> tuple[_Reduced | None, Matrix]:
        """None where the estimate still grows without limit."""
        basis, posterior, left_over = after_result(seeing, self.row, self.sd)
        A = basis.T @ self.part.A @ basis
        if left_over.size and np.abs(basis.T @ self.part.A @ left_over).max() > 1e-10:
            return None, posterior
        rows = Rows(seeing.rows.C @ basis, seeing.rows.r)
        Q = basis.T @ (self.part.q[:, None] * basis)
        one = Stretch(A, rows.C.T @ (rows.C / rows.r[:, None]), Q)
        return _Reduced([one], rows, basis.T @ self.row), posterior
