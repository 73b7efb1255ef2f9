"""A reactor on record, for tests of the pages: eight hours of cycles, flags, laboratory results, events."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

import numpy as np

from softsensor.readings_of_cycle import CycleQuality, CycleReadings
from softsensor.records import happenings, storing
from softsensor.records.blocks import ReadingsBlock, ResultsBlock, RevisedEstimates
from softsensor.records.engine import Database, open_database
from softsensor.records.happenings import Event, Flag, LabOutcome, LabResult
from softsensor.records.plant import Deed, Revision, register_revision, register_unit, set_revision_state
from softsensor.records.upgrade import upgrade_database

NOW = 1_796_137_200_000_000
"""2026-12-01T15:00:00Z: the plant's clock."""
MINUTE, HOUR = 60_000_000, 3_600_000_000
STEP = 10_000_000
CYCLES = 2880
UNIT = "R-210"
FLAG_ID = "R-210 TI2101B drift 2026-12-01T14:20:00Z"
OLD_FLAG_ID = "R-210 TI2105 spike 2026-12-01T10:12:00Z"

MODEL = """
[unit]
name = "R-210"
title = "{title}"
sample_time = "10 s"

[[input]]
tag = "FI2103"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]
validated_range = [9.0, 14.0]

[[input]]
tag = "FI2107"
unit = "m3/h"
operating_point = 24.0
range = [0.0, 60.0]

[[sensor]]
tag = "TI2101A"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 1.0

[[sensor]]
tag = "TI2101B"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 1.0

[[sensor]]
tag = "TI2105"
unit = "degC"
operating_point = 61.0
range = [0.0, 150.0]
noise_sd = 0.2

[[estimate]]
tag = "AY2101"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
validated_range = [0.9, 1.8]
lab = {{ tag = "AL2101", sd = 0.02 }}

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "FI2103"
to = "TI2101A"
gain = -1.9
time_constants = ["4.2 min"]

[[transfer_function]]
from = "FI2107"
to = "TI2105"
gain = -0.7
time_constants = ["2 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI2101A"
gain = 9.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI2101B"
gain = 9.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed concentration"
to = "TI2105"
gain = 4.0
time_constants = ["8 min"]

[[transfer_function]]
from = "feed concentration"
to = "AY2101"
gain = 1.1
time_constants = ["5 min"]
"""


@dataclass(frozen=True)
class Course:
    """What the cycles read and gave; rows are cycles."""

    times: np.ndarray
    readings: CycleReadings
    estimate: np.ndarray
    sd: np.ndarray
    predicted: np.ndarray
    innovation: np.ndarray
    sums: np.ndarray


@cache
def course(cycles: int = CYCLES) -> Course:
    """A concentration that wanders, one thermometer that drifts over the last hour, ten minutes without cycles."""
    rng = np.random.default_rng(210)
    n = np.arange(cycles)
    times = NOW - (cycles - 1 - n) * STEP
    swing = 0.1 * np.sin(n / 420.0) + 0.04 * np.sin(n / 97.0)
    estimate = (1.32 + swing)[:, None]
    sd = (0.018 + 0.012 * np.mod(n, 360) / 360.0)[:, None]
    predicted = np.stack([92.4 + 8.0 * swing, 92.4 + 8.0 * swing, 61.0 + 3.0 * swing], axis=1)
    noise = rng.normal(0.0, 1.0, (cycles, 3)) * np.array([0.15, 0.15, 0.2])
    noise[:, 1] += np.clip((n - (cycles - 360)) / 300.0, 0.0, 1.2)
    y = predicted + noise
    y[-1, 2] = np.nan
    innovation = y - predicted
    sums = np.zeros((cycles, 6))
    for k in range(1, cycles):
        z = np.nan_to_num(innovation[k] / np.array([0.16, 0.16, 0.21])).clip(-4.0, 4.0)
        sums[k, :3] = np.clip(sums[k - 1, :3] + z - 0.9, 0.0, 14.0)
        sums[k, 3:] = np.clip(sums[k - 1, 3:] - z - 0.9, 0.0, 14.0)
    u = np.stack([11.5 + 0.2 * np.sin(n / 60.0), 24.0 + np.sin(n / 75.0)], axis=1)
    y_quality = np.zeros((cycles, 3), dtype=np.int8)
    y_quality[-1, 2] = CycleQuality.BAD
    readings = CycleReadings(times, u, np.zeros((cycles, 2), dtype=np.int8), y, y_quality)
    return Course(times, readings, estimate, sd, predicted, innovation, sums)


def _put_cycles(
    database: Database, unit: int, revision: int, course: Course, rows: slice, status: int
) -> None:
    readings = course.readings
    part = CycleReadings(
        *(
            np.ascontiguousarray(getattr(readings, name)[rows])
            for name in ("times", "u", "u_quality", "y", "y_quality")
        )
    )
    first, count = rows.start, len(part)
    used = np.isfinite(part.y).astype(np.int8)
    reason = json.dumps({"AY2101": "FI2103 is too old, its last value is held"}) if status else ""
    block = ResultsBlock(
        first,
        course.estimate[rows],
        course.sd[rows],
        np.full((count, 1), status, dtype=np.int8),
        course.predicted[rows],
        course.innovation[rows],
        np.tile([0.16, 0.16, 0.21], (count, 1)),
        used,
        course.sums[rows],
        (reason,) * count,
        tuple(bytes([i % 256]) * 32 for i in range(count)),
    )
    with database.write() as connection:
        storing.store_readings(connection, unit, ReadingsBlock(revision, first, part))
        storing.store_results(connection, unit, block)


def put_cycle(database: Database, cycle: int, time_us: int, jacket: float) -> None:
    """Put one more cycle on record, in which the jacket's thermometer reads ``jacket``."""
    y = np.array([[92.0, 93.0, jacket]])
    good = np.zeros((1, 3), dtype=np.int8)
    part = CycleReadings(np.array([time_us]), np.array([[11.5, 24.0]]), good[:, :2].copy(), y, good)
    predicted = np.array([[92.1, 92.1, 61.0]])
    results = ResultsBlock(
        cycle,
        np.array([[1.3]]),
        np.array([[0.03]]),
        good[:, :1].copy(),
        predicted,
        y - predicted,
        np.array([[0.16, 0.16, 0.21]]),
        good + 1,
        np.zeros((1, 6)),
        ("",),
        (b"\x01" * 32,),
    )
    with database.write() as connection:
        storing.store_readings(connection, 1, ReadingsBlock(1, cycle, part))
        storing.store_results(connection, 1, results)


def _put_happenings(database: Database, unit: int) -> None:
    drift = Flag(
        FLAG_ID,
        "TI2101B",
        "drift",
        NOW - 60 * MINUTE,
        NOW - 40 * MINUTE,
        1.21,
        0.07,
        0.994,
        ("TI2101B",),
        NOW - 66 * MINUTE,
        NOW - 53 * MINUTE - 10_000_000,
        (
            ("TI2101B", 0.994),
            ("feed concentration", 0.0041),
            ("FI2103 -> TI2101A", 0.0018),
            ("nothing", 2e-7),
        ),
    )
    spike = Flag(
        OLD_FLAG_ID,
        "TI2105",
        "spike",
        NOW - 288 * MINUTE,
        NOW - 288 * MINUTE,
        np.nan,
        np.nan,
        0.7,
        ("TI2105", "FI2107"),
    )
    with database.write() as connection:
        happenings.open_flag(connection, unit, spike)
        happenings.clear_flag(connection, OLD_FLAG_ID, NOW - 280 * MINUTE, "its test has come down")
        happenings.open_flag(connection, unit, drift)
        told = [
            ("connection", "connected: opc.tcp://plant-server:4840 answers", 480),
            ("test up", "TI2101A: feed concentration moved", 200),
            ("connection", "disconnected: the server closed the session", 122),
            ("connection", "connected: opc.tcp://plant-server:4840 answers", 112),
        ]
        for kind, text, ago in told:
            happenings.record_event(connection, Event(unit, NOW - ago * MINUTE, kind, text))


def _put_labs(database: Database, unit: int, course: Course) -> None:
    for hours in range(1, 8):
        sampled = NOW - hours * HOUR
        k = int(np.searchsorted(course.times, sampled))
        value = float(course.estimate[k, 0] + 0.015 * (-1) ** hours)
        status, reason = "used", ""
        if hours == 2:
            status, value = "waiting for a person", value - 0.19
            reason = "sampling time: fits the estimate 45 min earlier than stated"
        if hours == 5:
            status, value = "left out", value + 0.12
            reason = "value: fits the estimate at no time within 12 h of its sampling time"
        with database.write() as connection:
            lab = happenings.store_lab(
                connection, unit, LabResult("AL2101", sampled, sampled + 40 * MINUTE, value)
            )
            predicted = float(course.estimate[k, 0])
            outcome = LabOutcome(status, reason, k + 240, k, predicted, value - predicted, 0.031)
            happenings.settle_lab(connection, lab, outcome)


def put_unit(database: Database, title: str = "Jacketed stirred-tank reactor") -> int:
    """Put everything on record; returns the unit's id."""
    deed = Deed("softsensor", "started with this model file", NOW - 8 * HOUR)
    with database.write() as connection:
        unit = register_unit(connection, UNIT, title, NOW - 8 * HOUR)
        text = MODEL.format(title=title)
        revision = register_revision(connection, unit, Revision("ab" * 32, text, b"\x00"), deed)
        set_revision_state(connection, revision, "in service", deed)
    made = course()
    gap = slice(CYCLES - 732, CYCLES - 672)
    _put_cycles(database, unit, revision, made, slice(0, gap.start), 0)
    _put_cycles(database, unit, revision, made, slice(gap.stop, CYCLES), 0)
    revised = made.estimate[1080:2100] + 0.012 * np.sin(np.arange(1020) / 160.0)[:, None]
    with database.write() as connection:
        storing.store_revised(connection, unit, RevisedEstimates(1080, 2300, revised, made.sd[1080:2100]))
    _put_happenings(database, unit)
    _put_labs(database, unit, made)
    return unit


@cache
def _made(title: str) -> bytes:
    """The file of a database with the reactor on record; made once."""
    with tempfile.TemporaryDirectory() as folder:
        file = Path(folder) / "records.db"
        url = f"sqlite:///{file.as_posix()}"
        upgrade_database(url)
        with open_database(url) as database:
            put_unit(database, title)
        return file.read_bytes()


@contextmanager
def recorded_unit(folder: Path, title: str = "Jacketed stirred-tank reactor") -> Iterator[Database]:
    """An SQLite database with the reactor on record; its clock stands at ``NOW``."""
    file = folder / "records.db"
    file.write_bytes(_made(title))
    with open_database(f"sqlite:///{file.as_posix()}") as opened:
        yield replace(opened, clock=lambda: NOW)
