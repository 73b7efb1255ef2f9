"""Consecutive cycles as arrays: how readings and results come into the records and out of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from softsensor.readings_of_cycle import CycleReadings

Floats = NDArray[np.float64]
Codes = NDArray[np.int8]


@dataclass(frozen=True)
class ReadingsBlock:
    """The readings of consecutive cycles as they were used, all under one revision of the model.

    :param first_cycle: the number of the first cycle.
    :param decisions: per cycle, what was decided before it ran, in the service's own form; empty where
        nothing was.
    """

    revision_id: int
    first_cycle: int
    readings: CycleReadings
    decisions: tuple[bytes, ...] = ()

    def __len__(self) -> int:
        return len(self.readings)


@dataclass(frozen=True)
class ResultsBlock:
    """The results of N consecutive cycles as they were published.

    Shapes: estimate, sd (N, n_estimates) float64 and status likewise int8 (0 Good, 1 Uncertain, 2 Bad);
    predicted, innovation, innovation_sd (N, n_sensors) float64 and used likewise int8 (0 or 1);
    sums (N, any) float64; reasons N texts; digests N chained digests of 32 bytes. Units of the tags.
    """

    first_cycle: int
    estimate: Floats
    sd: Floats
    status: Codes
    predicted: Floats
    innovation: Floats
    innovation_sd: Floats
    used: Codes
    sums: Floats
    reasons: tuple[str, ...]
    digests: tuple[bytes, ...]

    def __len__(self) -> int:
        return len(self.digests)


FLOAT_FIELDS = ("estimate", "sd", "predicted", "innovation", "innovation_sd", "sums")
CODE_FIELDS = ("status", "used")


@dataclass(frozen=True)
class RevisedEstimates:
    """What a late laboratory result makes of N consecutive cycles.

    :param revised_at_cycle: the cycle at which the result had arrived.
    Shapes: estimate, sd (N, n_estimates) float64, in the units of the tags.
    """

    first_cycle: int
    revised_at_cycle: int
    estimate: Floats
    sd: Floats


@dataclass(frozen=True, slots=True)
class Checkpoint:
    """The estimator's state before cycle ``cycle`` runs, as bytes of the given format version."""

    cycle: int
    format_version: int
    state: bytes


@dataclass(frozen=True, slots=True)
class Rollup:
    """Minimum, mean and maximum of a quantity of a tag in ``start_us <= time < start_us + width_us``.

    :param quantity: what of the tag, such as ``reading``, ``value``, ``lower``, ``upper``.
    :param count: how many cycles had a value; a stretch without any has no rollup.
    """

    tag: str
    quantity: str
    width_us: int
    start_us: int
    minimum: float
    mean: float
    maximum: float
    count: int
