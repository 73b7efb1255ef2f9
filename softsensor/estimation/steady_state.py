"""What the estimator settles to: the stabilising solution of its Riccati equation, with its proof.

The filter of a stochastic part x(k+1) = A x(k) + w, w ~ N(0, Q), with rows y = C x + v, v ~ N(0, R)::

    P = A P+ A' + Q,   P+ = P - K S K',   S = C P C' + R,   K = P C' S^-1,   L = A K

found by doubling (Anderson 1978, Chu et al. 2004): step j holds the covariance of 2^j cycles. Sums and
products of positive terms only.

A walk or an integrator that no row sees has no steady variance: those directions are found first, split
off, and reported as such; what they reach has an infinite standard deviation. Nothing is added to a
covariance to make it behave. A constant (an offset without a walk) keeps the part of its initial variance
that no number of readings takes away.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import qr, schur, solve, svd
from scipy.sparse.csgraph import connected_components

from plant_models.errors import RealisationError
from plant_models.plant_model import PlantModel, StochasticPart

Vector = NDArray[np.float64]
Matrix = NDArray[np.float64]

_UNIT_CIRCLE = 1.0 - 1e-8
_REACHES = 1e-10
_DOUBLINGS = 60
_DOUBLINGS_OF_CONSTANTS = 30
_LARGEST_RESIDUAL = 1e-9


class Rows(NamedTuple):
    """Measured rows: C (m, n) and the variances of their noise r (m,)."""

    C: Matrix
    r: Vector


class Stretch(NamedTuple):
    """2^j cycles of the filter at once: P -> H + A P (I + G P)^-1 A', from prior to prior covariance."""

    A: Matrix
    G: Matrix
    H: Matrix

    def after(self, P: Matrix) -> Matrix:
        """The prior covariance at the end of the stretch, from the one at its beginning."""
        inner = solve(np.eye(P.shape[0]) + P @ self.G, P, check_finite=False)
        return _symmetric(self.H + self.A @ inner @ self.A.T)

    def doubled(self) -> Stretch:
        """A stretch of twice the length."""
        return self.then(self)

    def then(self, later: Stretch) -> Stretch:
        """This stretch and ``later`` after it, as one."""
        n = self.A.shape[0]
        identity = np.eye(n)
        carry = solve(identity + self.H @ later.G, np.hstack((self.A, self.H)), check_finite=False)
        inner = solve(identity + later.G @ self.H, later.G, check_finite=False)
        return Stretch(
            later.A @ carry[:, :n],
            _symmetric(self.G + self.A.T @ inner @ self.A),
            _symmetric(later.H + later.A @ carry[:, n:] @ later.A.T),
        )


@dataclass(frozen=True, eq=False)
class SteadyState:
    """The settled filter with m rows, in the coordinates of the n states.

    P_prior, P_posterior (n, n) are zero along ``unbounded``, an orthonormal basis (n, u) of the directions
    without a steady variance. K, L = A K (n, m); S (m, m) innovation covariance. ``settling`` (n, s) is a
    basis of the directions whose error the filter forgets; ``spectral_radius`` of A - L C there,
    ``stabilising`` where it is below one; ``residual`` of the Riccati equation, relative to the covariance.
    """

    rows: Rows
    P_prior: Matrix
    P_posterior: Matrix
    K: Matrix
    L: Matrix
    S: Matrix
    settling: Matrix
    unbounded: Matrix
    spectral_radius: float
    residual: float
    stabilising: bool

    def variance(self, row: Vector, prior: bool = False) -> float:
        """Variance of ``row`` (n,) times the state, after the readings of a cycle (or before); inf where
        unbounded.
        """
        if reaches(row, self.unbounded):
            return math.inf
        P = self.P_prior if prior else self.P_posterior
        return max(0.0, float(row @ P @ row))


def measured_rows(model: PlantModel, sensors: Sequence[int] | None = None, labs: Sequence[int] = ()) -> Rows:
    """The rows of some sensors (indices; None: all) and of the laboratory results of some estimates
    (indices).
    """
    spec, C = model.scaled, model.stochastic.C
    chosen = range(len(spec.sensors)) if sensors is None else sensors
    variances = [spec.sensors[i].noise_sd ** 2 for i in chosen]
    places = list(chosen)
    for index in labs:
        lab = spec.estimates[index].lab
        if lab is None:
            raise RealisationError(f"{spec.estimates[index].tag} has no laboratory results")
        variances.append(lab.sd**2)
        places.append(len(spec.sensors) + index)
    return Rows(C[places], np.array(variances, dtype=np.float64))


def steady_state(
    model: PlantModel, sensors: Sequence[int] | None = None, labs: Sequence[int] = ()
) -> SteadyState:
    """The settled filter with readings of ``sensors`` (indices; None: all) and of ``labs`` in every cycle.

    :raises RealisationError: the recursion does not settle, or settles to no solution of the equation.
    """
    return settle(model.stochastic, measured_rows(model, sensors, labs))


def settle(part: StochasticPart, rows: Rows) -> SteadyState:
    """As ``steady_state``, for a stochastic part and any rows."""
    n = part.A.shape[0]
    constant = constants(part)
    moving = np.flatnonzero(~constant)
    unseen = _unseen(part, rows, moving)
    settling = _complement(unseen, moving, n)
    T = np.hstack((settling, np.eye(n)[:, constant]))
    A, Q, C = T.T @ part.A @ T, T.T @ (part.q[:, None] * T), rows.C @ T
    first = Stretch(A, C.T @ (C / rows.r[:, None]), _symmetric(Q))
    P = _settled(first, T.T @ part.P0 @ T if part.P0[constant].any() else None)
    S = _symmetric(C @ P @ C.T + np.diag(rows.r))
    K = solve(S, C @ P, assume_a="pos", check_finite=False).T if rows.r.size else np.zeros((T.shape[1], 0))
    after = _symmetric(P - K @ S @ K.T)
    scale = np.abs(P).max(initial=0.0)
    residual = float(np.abs(A @ after @ A.T + Q - P).max(initial=0.0) / scale) if scale > 0.0 else 0.0
    if not residual < _LARGEST_RESIDUAL:
        raise RealisationError(f"the estimator's covariance does not settle: residual {residual:.2g}")
    s = settling.shape[1]
    closed = A[:s, :s] - A[:s, :s] @ K[:s] @ C[:, :s]
    radius = float(np.abs(np.linalg.eigvals(closed)).max()) if s else 0.0
    K_full = T @ K
    return SteadyState(
        rows,
        T @ P @ T.T,
        T @ after @ T.T,
        K_full,
        part.A @ K_full,
        S,
        settling,
        unseen,
        radius,
        residual,
        radius < 1.0,
    )


def constants(part: StochasticPart) -> NDArray[np.bool_]:
    """States that never change and drive no other: offsets without a walk."""
    identity = np.eye(part.A.shape[0])
    same = (identity == part.A).all(axis=0) & (identity == part.A).all(axis=1)
    return np.asarray(same & (part.q == 0.0))


def reaches(row: Vector, directions: Matrix) -> bool:
    """Does ``row`` see any of ``directions`` (n, u)?"""
    if not directions.shape[1]:
        return False
    return bool(np.abs(row @ directions).max() > _REACHES * np.linalg.norm(row))


def _settled(first: Stretch, initial: Matrix | None) -> Matrix:
    """The limit of the covariance; from ``initial`` where there are uncertain constants, which remember
    it.
    """
    stretch, quiet = first, 0
    least = 0 if initial is None else _DOUBLINGS_OF_CONSTANTS
    for number in range(1, _DOUBLINGS + 1):
        following = stretch.doubled()
        if not np.isfinite(following.H).all():
            raise RealisationError("the estimator's covariance does not settle: it grows without limit")
        scale = np.sqrt(np.abs(np.diag(following.H)))
        small = np.abs(following.H - stretch.H) <= 1e-14 * np.outer(scale, scale)
        quiet = quiet + 1 if small.all() else 0
        stretch = following
        if quiet >= 2 and number >= least:
            break
    if not quiet:
        raise RealisationError(f"the estimator's covariance does not settle within 2^{_DOUBLINGS} cycles")
    return stretch.H if initial is None else stretch.after(initial)


def _unseen(part: StochasticPart, rows: Rows, moving: NDArray[np.int64]) -> Matrix:
    """Orthonormal basis (n, u) of the walking or integrating directions that no row sees, ever."""
    n = part.A.shape[0]
    lasting = _lasting(part.A, moving)
    if not lasting.shape[1] or not rows.r.size:
        return lasting
    step = lasting.T @ part.A @ lasting
    seen = rows.C @ lasting
    stack = []
    for _ in range(lasting.shape[1]):
        size = np.linalg.norm(seen, axis=1)
        real = size > _REACHES * np.linalg.norm(rows.C, axis=1)
        stack.append(seen[real] / size[real, None])
        seen = seen @ step
    observed = np.vstack(stack)
    if not observed.shape[0]:
        return lasting
    _, values, directions = svd(observed)
    rank = int(np.count_nonzero(values > 1e-9 * values[0]))
    return np.asarray((lasting @ directions[rank:].T).reshape(n, -1), dtype=np.float64)


def _lasting(A: Matrix, moving: NDArray[np.int64]) -> Matrix:
    """Orthonormal basis of the invariant subspace with eigenvalues on or outside the unit circle, block by
    block.
    """
    n = A.shape[0]
    count, member = connected_components(A[np.ix_(moving, moving)] != 0.0, directed=False)
    found = [np.zeros((n, 0))]
    for block in range(count):
        states = moving[member == block]
        _, vectors, lasting = schur(
            A[np.ix_(states, states)], output="real", sort=lambda re, im: math.hypot(re, im) >= _UNIT_CIRCLE
        )
        directions = np.zeros((n, int(lasting)))
        directions[states] = vectors[:, : int(lasting)]
        found.append(directions)
    return np.hstack(found)


def _complement(unseen: Matrix, moving: NDArray[np.int64], n: int) -> Matrix:
    """Orthonormal basis (n, s) of the moving states without the unseen directions."""
    if not unseen.shape[1]:
        return np.eye(n)[:, moving]
    basis, _ = qr(unseen[moving])
    settling = np.zeros((n, moving.size - unseen.shape[1]))
    settling[moving] = basis[:, unseen.shape[1] :]
    return settling


def _symmetric(P: Matrix) -> Matrix:
    return np.asarray(0.5 * (P + P.T), dtype=np.float64)
