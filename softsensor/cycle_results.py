"""Results of cycles, and the digest of them: the same bits however the cycles were cut into blocks."""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from softsensor.detection.flags import Flag, Note, RestSpell
from softsensor.detection.outcomes import FollowUp
from softsensor.estimation.kernel import Floats, Kernel
from softsensor.readings_of_cycle import CycleReadings

DIGEST_CHUNK = 64
"""Cycles per link of the digest's chain."""
PACKED = 1024
"""Cycles whose bytes are put side by side at a time: they stay in the processor's cache."""


@dataclass(frozen=True)
class Digest:
    """A chained hash of every result row, the same however the cycles were cut into blocks."""

    chain: bytes = b""
    pending: bytes = b""
    rows: int = 0

    def add(self, rows: NDArray[np.uint8], tail: bytes = b"") -> Digest:
        """The digest after more rows (N, bytes); ``tail`` belongs to the last of them."""
        chain, pending, row = self.chain, self.pending, 0
        while row < len(rows):
            stop = min(row + DIGEST_CHUNK - (self.rows + row) % DIGEST_CHUNK, len(rows))
            after = tail if stop == len(rows) else b""
            if (self.rows + stop) % DIGEST_CHUNK == 0:
                link = hashlib.sha256(chain + pending)
                link.update(rows[row:stop].data)
                link.update(after)
                chain, pending = link.digest(), b""
            else:
                pending += rows[row:stop].tobytes() + after
            row = stop
        return Digest(chain, pending, self.rows + len(rows))

    def mix(self, data: bytes) -> Digest:
        """The digest after bytes that belong to the coming row: what a laboratory result did."""
        return replace(self, pending=self.pending + data)

    def hexdigest(self) -> str:
        """The digest so far, as text."""
        return hashlib.sha256(self.chain + self.pending).hexdigest()


@dataclass(frozen=True)
class CycleResults:
    """Results of N cycles as known at each of them, row k for cycle ``first + k``.

    estimate, sd, predicted, innovation and innovation_sd are in model scale (:mod:`plant_models.model_scale`): a reader
    carries them back (:mod:`softsensor.published`). ``reading`` is in the sensor's engineering unit.

    Shapes: times (N,); estimate, sd, status (N, n_estimates), sd with the interval scale in it, status 0 Good,
    1 Uncertain, 2 Bad; predicted, innovation, innovation_sd, used, left_out, high, low, reading
    (N, n_sensors). lab_predicted and lab_sd: one entry per laboratory result that counts within these cycles, the
    prediction before the cycle's readings and the sd of the result's innovation.
    """

    first: int
    times: NDArray[np.int64]
    reading: Floats
    estimate: Floats
    sd: Floats
    status: NDArray[np.int8]
    predicted: Floats
    innovation: Floats
    innovation_sd: Floats
    used: NDArray[np.int8]
    left_out: NDArray[np.int8]
    """1 where a sensor is kept from the estimate, whether or not it has a reading."""
    doubts: NDArray[np.object_]
    """(N, n_estimates) What speaks against an estimate besides its inputs, in words: flags, laboratory results."""
    settling: NDArray[np.int8]
    """(N,) The tests rest and the estimates are Uncertain: 1 while inputs are missing and for a while after, 2 where the
    plant was moving when the run began."""
    high: Floats
    low: Floats
    beyond: Floats
    """(N, n_sensors) Probability that a sensor's bias lies beyond its tolerance."""
    lab_predicted: Floats
    lab_sd: Floats
    flags: tuple[Flag, ...] = ()
    notes: tuple[Note, ...] = ()
    rests: tuple[RestSpell, ...] = ()
    rewind: FollowUp | None = None
    """Set where a sensor is to be left out from an earlier cycle on: the caller goes back and forward again."""

    def __len__(self) -> int:
        return len(self.times)


ROW_FIELDS = (
    "times", "reading", "estimate", "sd", "status", "predicted", "innovation", "innovation_sd", "used", "left_out",
    "doubts", "settling", "high", "low", "beyond",
)  # fmt: skip


def join_results(parts: Sequence[CycleResults]) -> CycleResults:
    """The results of consecutive stretches as one; flags and notes in order."""
    rows: dict[str, Any] = {
        name: np.concatenate([getattr(part, name) for part in parts]) for name in ROW_FIELDS
    }
    return CycleResults(
        first=parts[0].first,
        **rows,
        lab_predicted=np.concatenate([part.lab_predicted for part in parts]),
        lab_sd=np.concatenate([part.lab_sd for part in parts]),
        flags=tuple(flag for part in parts for flag in part.flags),
        notes=tuple(note for part in parts for note in part.notes),
        rests=tuple(spell for part in parts for spell in part.rests),
    )


def outside(values: Floats, limits: tuple[float, float] | None) -> NDArray[np.bool_]:
    """Which values lie outside the limits; none where there are no limits."""
    if limits is None:
        return np.zeros(len(values), dtype=np.bool_)
    return (values < limits[0]) | (values > limits[1])


def digest_of(before: Digest, results: CycleResults) -> Digest:
    """The digest after these cycles and what was flagged at the last of them."""
    tail, n, digest = b"".join(flag_bytes(flag) for flag in results.flags), len(results), before
    for row in range(0, n, PACKED):
        stop = min(row + PACKED, n)
        digest = digest.add(result_rows(results, row, stop), tail if stop == n else b"")
    return digest


def result_rows(results: CycleResults, start: int, stop: int) -> NDArray[np.uint8]:
    """Every result of cycles start to stop as bytes (cycles, bytes), for the digest."""
    parts: list[NDArray[Any]] = [
        results.times.reshape(-1, 1),
        results.estimate,
        results.sd,
        results.status,
        results.predicted,
        results.innovation,
        results.innovation_sd,
        results.used,
        results.high,
        results.low,
        results.beyond,
    ]
    return np.concatenate(
        [np.ascontiguousarray(part[start:stop]).view(np.uint8).reshape(stop - start, -1) for part in parts],
        axis=1,
    )


def flag_bytes(flag: Flag) -> bytes:
    """A flag as bytes, for the digest."""
    moments = (flag.cleared, flag.onset_from, flag.onset_to)
    times = np.array(
        [flag.onset, flag.detected, *(-1 if time is None else time for time in moments)], dtype="<i8"
    )
    weighed = (probability for _, probability in flag.hypotheses)
    sizes = np.array([flag.size, flag.size_sd, flag.probability, *weighed], dtype="<f8")
    names = (name for name, _ in flag.hypotheses)
    text = "\x1f".join((flag.flag, flag.tag, flag.kind, *flag.group, "\x1e", *names))
    return text.encode() + times.tobytes() + sizes.tobytes()


def waiting_results(kernel: Kernel, readings: CycleReadings) -> CycleResults:
    """Cycles before every input has had a value: Bad, and nothing estimated."""
    n = len(readings)
    sensors, estimates = np.full((n, kernel.n_sensors), np.nan), np.full((n, kernel.n_estimates), np.nan)
    zeros, none = np.zeros((n, kernel.n_sensors)), np.zeros((n, kernel.n_sensors), dtype=np.int8)
    return CycleResults(
        -1,
        readings.times,
        readings.y,
        estimates,
        estimates,
        np.full((n, kernel.n_estimates), 2, dtype=np.int8),
        sensors,
        sensors,
        sensors,
        none,
        none,
        np.full((n, kernel.n_estimates), "", dtype=object),
        np.zeros(n, dtype=np.int8),
        zeros,
        zeros,
        zeros,
        np.zeros(0),
        np.zeros(0),
    )
