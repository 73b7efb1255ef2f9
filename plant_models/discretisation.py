"""The exact zero-order hold, with dead time exact to the fraction of a sample.

An input is held over each sample: u(t) = u(k) for t_k <= t < t_k + h. Behind a dead time of (m + f) samples,
0 <= f < 1, the path sees u(k - m - 1) over the first f h of the sample and u(k - m) over the rest, so that ::

    x(k+1) = phi x(k) + gamma_recent u(k - m) + gamma_older u(k - m - 1)
    phi          = e^{A h}
    gamma_recent = int_0^{(1-f) h} e^{A s} ds B
    gamma_older  = e^{A (1-f) h} int_0^{f h} e^{A s} ds B

(Astrom & Wittenmark, Computer-Controlled Systems, the section on sampling a system with a time delay.)
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from plant_models.plant_model import DiscretePath
from plant_models.realisation import realise
from plant_models.specification import PathSpec

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

WHOLE = 1e-9
"""A fraction of a sample closer than this to 0 or 1 is a whole sample: dead times are typed in decimal."""


class Held(NamedTuple):
    """x(k+1) = phi x(k) + gamma_recent u(k - m) + gamma_older u(k - m - 1)."""

    phi: Matrix
    gamma_recent: Vector
    gamma_older: Vector


def split_dead_time(dead_time: float, sample_time: float) -> tuple[int, float]:
    """Dead time as whole samples and the fraction of one, 0 <= fraction < 1.

    >>> split_dead_time(2.6, 1.0)
    (2, 0.6000000000000001)
    >>> split_dead_time(0.3, 0.1)
    (3, 0.0)
    """
    samples = dead_time / sample_time
    whole = math.floor(samples)
    fraction = samples - whole
    if fraction > 1.0 - WHOLE:
        return whole + 1, 0.0
    return whole, fraction if fraction >= WHOLE else 0.0


def hold(A: Matrix, B: Vector, duration: float) -> tuple[Matrix, Vector]:
    """e^{A t} (n, n) and int_0^t e^{A s} ds B (n,) for t = ``duration`` seconds, by one matrix exponential.

    The input comes first in the augmented matrix [[0, 0], [B, A]], which keeps a cascade lower triangular:
    the exponential then takes its diagonal from scalar exponentials.
    """
    order = B.size
    augmented = np.zeros((order + 1, order + 1))
    augmented[1:, 0] = B
    augmented[1:, 1:] = A
    exponential = linalg.expm(augmented * duration)
    return np.ascontiguousarray(exponential[1:, 1:]), np.ascontiguousarray(exponential[1:, 0])


def held_matrices(A: Matrix, B: Vector, sample_time: float, fraction: float) -> Held:
    """The three matrices of x' = A x + B u, with u held and late by ``fraction`` of a sample."""
    phi, gamma = hold(A, B, sample_time)
    if fraction == 0.0:
        return Held(phi, gamma, np.zeros_like(gamma))
    after, recent = hold(A, B, (1.0 - fraction) * sample_time)
    _, before = hold(A, B, fraction * sample_time)
    return Held(phi, recent, after @ before)


def discretise(path: PathSpec, source: int, row: int, sample_time: float) -> DiscretePath:
    """One path on the sample grid; ``source`` is its index among inputs or disturbances, ``row`` of outputs.

    :raises RealisationError: if the path cannot be realised.
    """
    system = realise(path)
    whole, fraction = split_dead_time(path.dead_time, sample_time)
    phi, recent, older = held_matrices(system.A, system.B, sample_time, fraction)
    if path.schedule is not None:
        phi = np.tril(phi)  # whatever rounding does: of a scheduled path the rest is known to be zero
    return DiscretePath(
        source=source,
        row=row,
        phi=phi,
        gamma_recent=recent,
        gamma_older=older,
        c=np.ascontiguousarray(system.C, dtype=np.float64),
        d=system.D,
        steady=system.steady(),
        whole_delays=whole,
        fraction=fraction,
        integrating=system.integrating,
    )
