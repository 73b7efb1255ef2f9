"""What the sensors and the laboratory can tell about each estimate and each disturbance.

Known inputs move sensors and estimates alike and say nothing about the model's error; only disturbances
that reach both do. So for each estimate: its standard deviation without sensors, with all of them, with
each one lost, just after a laboratory result, and how long such a result keeps helping. All are of the
settled filter, after the readings of a cycle, in the estimate's unit, times its interval_scale; inf where
a walk that nothing sees makes it grow without limit.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr, solve
from scipy.sparse.csgraph import connected_components

from plant_models.model_scale import scale_at_operating_point
from plant_models.plant_model import PlantModel, StochasticPart
from softsensor.estimation.steady_state import Rows, SteadyState, Stretch, measured_rows, reaches, settle

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

LEAST_GAIN = 0.02
"""The sensors add something to an estimate when they take at least this share off its standard deviation."""
_LONGEST_DOUBLINGS = 40


@dataclass(frozen=True, slots=True)
class LabHelp:
    """A laboratory result of an estimate: sd just after it, and for how many seconds it keeps helping.

    ``lasting``: until half of the variance that it took off has come back; where the sd grows without
    limit between results (``growing``): until the sd is twice that just after one. inf: longer than the
    plant will stand.
    """

    sd: float
    lasting: float | None
    growing: bool


@dataclass(frozen=True, slots=True)
class EstimateKnowledge:
    """Standard deviations of one estimate.

    ``own_offset``: they leave out the estimate's own walking offset (bias_walk_sd), which no sensor ever
    sees and only laboratory results bound; ``lab`` includes it.
    """

    tag: str
    unit: str
    sd_without_sensors: float
    sd_with_sensors: float
    sd_without: tuple[tuple[str, float], ...]
    """Per sensor: the sd with that sensor lost."""
    sd_from: tuple[tuple[str, float], ...]
    """Per disturbance or offset that reaches the estimate: the sd that it causes where nothing is
    measured.
    """
    lab: LabHelp | None
    own_offset: bool

    @property
    def sensors_help(self) -> bool:
        """Do the sensors take at least LEAST_GAIN off the standard deviation?"""
        if math.isinf(self.sd_without_sensors):
            return math.isfinite(self.sd_with_sensors)
        return self.sd_with_sensors <= (1.0 - LEAST_GAIN) * self.sd_without_sensors


@dataclass(frozen=True, slots=True)
class DisturbanceKnowledge:
    """A disturbance's standard deviation without and with the sensors, in its own unit."""

    name: str
    sd_without_sensors: float
    sd_with_sensors: float

    @property
    def observable(self) -> bool:
        """Is it told apart at all: finite where it would wander off, or its sd taken down by LEAST_GAIN?"""
        if math.isinf(self.sd_without_sensors):
            return math.isfinite(self.sd_with_sensors)
        return self.sd_with_sensors <= (1.0 - LEAST_GAIN) * self.sd_without_sensors


def estimate_knowledge(model: PlantModel) -> tuple[EstimateKnowledge, ...]:
    """What can be known of each estimate.

    :raises RealisationError: the filter does not settle.
    """
    spec, part = model.scaled, model.stochastic
    everything = range(len(spec.sensors))
    blind, seeing = settle(part, measured_rows(model, ())), settle(part, measured_rows(model))
    lost = [settle(part, measured_rows(model, [j for j in everything if j != i])) for i in everything]
    found = []
    for index, estimate in enumerate(spec.estimates):
        whole = part.C[len(spec.sensors) + index]
        row, scale = np.where(_walking_offsets(part), 0.0, whole), shown_scale(model, index)
        without = zip(spec.sensors, lost, strict=True)
        lab = None
        if estimate.lab is not None:
            lab = lab_help(part, seeing, whole, estimate.lab.sd, spec.sample_time)
            lab = replace(lab, sd=scale * lab.sd)
        found.append(
            EstimateKnowledge(
                estimate.tag,
                estimate.unit,
                scale * math.sqrt(blind.variance(row)),
                scale * math.sqrt(seeing.variance(row)),
                tuple((sensor.tag, scale * math.sqrt(state.variance(row))) for sensor, state in without),
                tuple((name, scale * sd) for name, sd in _sources(part, blind, whole)),
                lab,
                bool((row != whole).any()),
            )
        )
    return tuple(found)


def shown_scale(model: PlantModel, estimate: int) -> float:
    """From a standard deviation in model scale to the one shown: interval_scale, in the estimate's engineering unit at its
    operating point.
    """
    item = model.spec.estimates[estimate]
    return item.interval_scale / scale_at_operating_point(item)


def _walking_offsets(part: StochasticPart) -> NDArray[np.bool_]:
    """States that are an output's own walking offset: no disturbance, driving nothing, seen by one output."""
    identity = np.eye(part.A.shape[0])
    alone = (identity == part.A).all(axis=0) & (identity == part.A).all(axis=1) & (part.q > 0.0)
    alone[list(part.disturbance_index)] = False
    return np.asarray(alone & (np.count_nonzero(part.C, axis=0) == 1))


def disturbance_knowledge(model: PlantModel) -> tuple[DisturbanceKnowledge, ...]:
    """What the sensors tell about each disturbance.

    :raises RealisationError: the filter does not settle.
    """
    part = model.stochastic
    blind, seeing = settle(part, measured_rows(model, ())), settle(part, measured_rows(model))
    unit = np.eye(part.A.shape[0])
    return tuple(
        DisturbanceKnowledge(
            item.name, math.sqrt(blind.variance(unit[place])), math.sqrt(seeing.variance(unit[place]))
        )
        for item, place in zip(model.spec.disturbances, part.disturbance_index, strict=True)
    )


def owners(part: StochasticPart) -> tuple[str, ...]:
    """Per state: the disturbance that drives it, or the offset that it is (by its state name)."""
    _, member = connected_components(part.A != 0.0, directed=False)
    names: dict[int, str] = {}
    for state, block in enumerate(member.tolist()):
        names.setdefault(block, part.state_names[state])
    return tuple(names[block] for block in member.tolist())


def lab_help(
    part: StochasticPart, seeing: SteadyState, row: Vector, sd: float, sample_time: float
) -> LabHelp:
    """What one laboratory result of sd ``sd`` on ``row`` adds to the settled filter, and for how long.

    The result counts in the same cycle as the sensors' readings; afterwards the sensors alone go on.
    """
    basis, P, left_over = after_result(seeing, row, sd)
    seen = basis.T @ row
    after = float(seen @ P @ seen)
    steady = seeing.variance(row)
    growing = math.isinf(steady)
    A = basis.T @ part.A @ basis
    if left_over.size and np.abs(basis.T @ part.A @ left_over).max() > 1e-10:
        return LabHelp(math.sqrt(after), None, growing)
    limit = 4.0 * after if growing else steady - 0.5 * (steady - after)
    if not growing and steady - after <= 1e-9 * steady:
        return LabHelp(math.sqrt(after), 0.0, growing)
    rows = Rows(seeing.rows.C @ basis, seeing.rows.r)
    Q = basis.T @ (part.q[:, None] * basis)
    cycles = _cycles_until(Stretch(A, rows.C.T @ (rows.C / rows.r[:, None]), Q), P, rows, seen, limit)
    return LabHelp(math.sqrt(after), cycles * sample_time, growing)


def after_result(seeing: SteadyState, row: Vector, sd: float) -> tuple[Matrix, Matrix, Matrix]:
    """Basis (n, s), posterior covariance in it after the result, and the directions still unbounded.

    Along an unbounded direction the result decides: with prior variance without limit, the row's value is the
    result's.
    """
    known = _known_basis(seeing)
    P, c = known.T @ seeing.P_posterior @ known, known.T @ row
    if not reaches(row, seeing.unbounded):
        gain = P @ c / float(c @ P @ c + sd * sd)
        return known, P - np.outer(gain, c @ P), seeing.unbounded
    along = seeing.unbounded.T @ row
    size = float(np.linalg.norm(along))
    rotated, _ = qr(along[:, None])
    new = seeing.unbounded @ (along / size)
    left_over = seeing.unbounded @ rotated[:, 1:]
    # the new coordinate is (result - noise - c x) / size, so that the row's value is the result's:
    # variance sd^2
    cross = -P @ c / size
    own = (sd * sd + float(c @ P @ c)) / size**2
    joint = np.block([[P, cross[:, None]], [cross[None, :], np.array([[own]])]])
    return np.hstack((known, new[:, None])), joint, left_over


def _known_basis(seeing: SteadyState) -> Matrix:
    """Orthonormal basis of every direction that has a steady variance."""
    n, unbounded = seeing.unbounded.shape
    if not unbounded:
        return np.eye(n)
    basis, _ = qr(seeing.unbounded)
    return np.asarray(basis[:, unbounded:], dtype=np.float64)


def _cycles_until(one: Stretch, posterior: Matrix, rows: Rows, row: Vector, limit: float) -> float:
    """Cycles after the result until the row's posterior variance passes ``limit``; inf where it does not."""

    def variance(prior: Matrix) -> float:
        S = rows.C @ prior @ rows.C.T + np.diag(rows.r)
        gained = solve(S, rows.C @ prior @ row, assume_a="pos") if rows.r.size else np.zeros(0)
        return float(row @ prior @ row - (rows.C @ prior @ row) @ gained)

    prior = one.A @ posterior @ one.A.T + one.H
    if variance(prior) >= limit:
        return 1.0
    powers = [one]
    for _ in range(_LONGEST_DOUBLINGS):
        if variance(powers[-1].after(prior)) >= limit:
            break
        powers.append(powers[-1].doubled())
    else:
        return math.inf
    passed = 1
    for exponent in range(len(powers) - 2, -1, -1):
        candidate = powers[exponent].after(prior)
        if variance(candidate) < limit:
            prior, passed = candidate, passed + 2**exponent
    return float(passed + 1)


def _sources(part: StochasticPart, blind: SteadyState, row: Vector) -> list[tuple[str, float]]:
    """What each disturbance and offset adds to the row where nothing is measured, as standard deviations."""
    owner = np.array(owners(part))
    found = []
    for name in dict.fromkeys(owner.tolist()):
        share = np.where(owner == name, row, 0.0)
        sd = math.sqrt(blind.variance(share)) if share.any() else 0.0
        if sd > 0.0:
            found.append((name, sd))
    return found
