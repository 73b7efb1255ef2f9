"""Recorded runs of a unit, drawn from the model itself: frames as a user has them, and the same as plain arrays."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from independent.dense_filter import LabRow, course, input_driven
from independent.transfer_paths import Array, Mask

from plant_models.specification import UnitSpec

START = pd.Timestamp("2026-03-02T00:00:00Z")
UNCERTAIN_SHARE = 0.1


@dataclass(frozen=True)
class Run:
    """N cycles: u (N, n_inputs), y (N, n_sensors) with nan for gaps, uncertain (N, n_sensors), true outputs."""

    spec: UnitSpec
    u: Array
    y: Array
    uncertain: Mask
    truth: Array

    @property
    def times(self) -> pd.DatetimeIndex:
        return moments(self.spec, np.arange(len(self.u), dtype=float))

    def history(self) -> pd.DataFrame:
        """The frame that a user hands in."""
        columns: dict[str, object] = {"time": self.times}
        for j, item in enumerate(self.spec.inputs):
            columns[item.tag] = self.u[:, j]
        for i, sensor in enumerate(self.spec.sensors):
            columns[sensor.tag] = self.y[:, i]
            columns[f"{sensor.tag}.quality"] = np.where(self.uncertain[:, i], "Uncertain", "Good")
        return pd.DataFrame(columns)


def moments(spec: UnitSpec, cycles: Array) -> pd.DatetimeIndex:
    """Times of cycles, fractions of a cycle allowed, to the microsecond."""
    after = np.round(cycles * spec.sample_time * 1e6).astype(np.int64)
    return pd.DatetimeIndex(START + pd.to_timedelta(after, unit="us"))


def record(spec: UnitSpec, cycles: int, seed: int, gaps: float = 0.0, move: float = 1.0) -> Run:
    """Draw a run from the model: steps of the inputs, noise as the model says, a share of gaps, Uncertain readings.

    :param gaps: share of a sensor's readings that are missing.
    :param move: standard deviation of an input's steps, in its unit.
    """
    rng = np.random.default_rng([77, seed])
    operating = np.array([item.operating_point for item in spec.inputs])
    moves = rng.random((cycles, operating.size)) < 0.08
    u = operating + np.cumsum(np.where(moves, rng.normal(0.0, move, moves.shape), 0.0), axis=0)
    systems = course(spec, u)
    values, vectors = np.linalg.eigh(systems[0].P0)
    x = vectors @ (np.sqrt(np.clip(values, 0.0, None)) * rng.standard_normal(values.size))
    walk = np.sqrt(np.diag(systems[0].Q))
    z = np.zeros((cycles, len(systems[0].C)))
    for k, model in enumerate(systems):
        z[k] = model.C @ x
        x = model.A @ x + walk * rng.standard_normal(walk.size)
    truth = input_driven(spec, u) + z
    n = len(spec.sensors)
    doubt = rng.random((cycles, n)) < UNCERTAIN_SHARE
    noise = np.array([item.noise_sd for item in spec.sensors]) * np.where(doubt, 3.0, 1.0)
    y = truth[:, :n] + noise * rng.standard_normal((cycles, n))
    y[rng.random((cycles, n)) < gaps] = np.nan
    return Run(spec, u, y, doubt, truth)


def spoilt(run: Run, seed: int) -> Run:
    """The run with single impossible readings, short rows of them and, on some sensors, a step that stays."""
    rng = np.random.default_rng([31, seed])
    y, cycles = run.y.copy(), len(run.y)
    for i, sensor in enumerate(run.spec.sensors):
        size = 100.0 * sensor.noise_sd
        for at in rng.integers(5, cycles, 4):
            y[at, i] += size * float(rng.choice([-1.0, 1.0, 4.0]))
        begin = int(rng.integers(5, cycles - 10))
        y[begin : begin + int(rng.integers(2, 6)), i] -= size
        if rng.random() < 0.6:
            y[int(rng.integers(cycles // 2, cycles)) :, i] += size
    return replace(run, y=y)


def late_labs(run: Run, count: int, seed: int, latest: int) -> tuple[pd.DataFrame, list[LabRow]]:
    """Laboratory results of the run's estimates, sampled anywhere and reported up to ``latest`` cycles later.

    Both forms of the same results: the frame that a user hands in, and rows for the dense filter.
    """
    rng = np.random.default_rng([99, seed])
    with_lab = [e for e, item in enumerate(run.spec.estimates) if item.lab is not None]
    cycles = len(run.u)
    rows = []
    for _ in range(count):
        sampled = float(rng.uniform(0.0, cycles - 2.0))
        if rng.random() < 0.3:
            sampled = float(np.floor(sampled))
        reported = min(sampled + float(rng.uniform(0.0, latest)), cycles - 1.0)
        e = int(rng.choice(with_lab))
        lab = run.spec.estimates[e].lab
        assert lab is not None
        counts_at = int(np.ceil(sampled))
        value = run.truth[counts_at, len(run.spec.sensors) + e] + lab.sd * rng.standard_normal()
        rows.append((sampled, reported, e, lab.tag, float(value), lab.sd))
    rows.sort(key=lambda row: row[1])
    labs = [LabRow(int(np.ceil(row[0])), int(np.ceil(row[1])), row[2], row[4], row[5]) for row in rows]
    return lab_frame(run.spec, [(row[0], row[1], row[3], row[4]) for row in rows]), labs


def lab_frame(spec: UnitSpec, rows: Sequence[tuple[float, float, str, float]]) -> pd.DataFrame:
    """Rows of (sampled, reported, tag, value), times in cycles."""
    return pd.DataFrame(
        {
            "sampled_at": moments(spec, np.array([row[0] for row in rows], dtype=float)),
            "reported_at": moments(spec, np.array([row[1] for row in rows], dtype=float)),
            "tag": [row[2] for row in rows],
            "value": np.array([row[3] for row in rows], dtype=float),
        }
    )


def by_cycle(table: pd.DataFrame, column: str, tags: Sequence[str]) -> Array:
    """One column of a result table as (N, n_tags)."""
    return np.column_stack([table.loc[table["tag"] == tag, column].to_numpy(dtype=float) for tag in tags])
