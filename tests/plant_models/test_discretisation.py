"""The exact hold with fractional dead time, against a differential equation solver."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.integrate import solve_ivp
from scipy.signal import tf2ss

from plant_models.discretisation import discretise, held_matrices, split_dead_time
from plant_models.plant_model import DiscretePath
from plant_models.realisation import realise
from plant_models.specification import PathSpec
from plant_models.transfer_function import polynomials


def outputs(path: DiscretePath, u: NDArray[np.float64]) -> NDArray[np.float64]:
    """y(k) of a path from rest, by the equations in DiscretePath; inputs before the first are zero."""

    def at(k: int) -> float:
        return float(u[k]) if k >= 0 else 0.0

    x, y, m = np.zeros(path.c.size), np.zeros(u.size), path.whole_delays
    for k in range(u.size):
        y[k] = path.c @ x + path.d * (at(k - m) if path.fraction == 0.0 else at(k - m - 1))
        x = path.phi @ x + path.gamma_recent * at(k - m) + path.gamma_older * at(k - m - 1)
    return y


def integrated(path: PathSpec, u: NDArray[np.float64], h: float) -> NDArray[np.float64]:
    """The same outputs by Runge-Kutta 8(5,3) on scipy's own state space, the held input delayed in time.

    The integration restarts at each instant where the delayed input jumps or a sample is taken.
    """
    A, B, C, D = tf2ss(*polynomials(path))

    def rates(_: float, state: NDArray[np.float64], held: float) -> NDArray[np.float64]:
        return np.asarray(A @ state + B[:, 0] * held)

    jumps = np.arange(u.size) * h + path.dead_time
    samples = np.arange(u.size) * h
    x, y = np.zeros(A.shape[0]), np.zeros(u.size)
    instants = np.unique(np.concatenate([samples, jumps[jumps <= samples[-1]]]))
    for begin, end in zip(instants, np.append(instants[1:], instants[-1] + h), strict=True):
        late = np.searchsorted(jumps, begin + 1e-9, side="right") - 1
        value = float(u[late]) if late >= 0 else 0.0
        k = round(begin / h)
        if abs(k * h - begin) < 1e-9:
            y[k] = (C @ x + D[:, 0] * value)[0]
        right = solve_ivp(rates, (begin, end), x, "DOP853", args=(value,), rtol=1e-12, atol=1e-13)
        x = right.y[:, -1]
    return y


@pytest.mark.parametrize(
    "path",
    [
        PathSpec("U", "Y", 2.0, (7.0, 3.0), (-4.0,), dead_time=5.3),
        PathSpec("U", "Y", -1.5, (12.0,), (5.0,), dead_time=1.25),
        PathSpec("U", "Y", 0.3, (4.0, 4.0, 4.0), (), dead_time=2.0),
        PathSpec("U", "Y", 0.1, (6.0,), (2.0,), dead_time=0.77, integrating=True),
        PathSpec("U", "Y", numerator=(3.0, 1.0), denominator=(9.0, 1.5, 1.0), dead_time=3.41),
        PathSpec("U", "Y", numerator=(1.0, -2.0, 1.0), denominator=(9.0, 11.0, 6.0, 1.0), dead_time=0.0),
        PathSpec("U", "Y", numerator=(2.0, 1.0), denominator=(8.0, 2.0, 1.0, 0.0), dead_time=1.9),
    ],
)
def test_outputs_agree_with_a_differential_equation_solver(path: PathSpec) -> None:
    u = np.random.default_rng(7).normal(size=25)
    h = 2.0
    assert outputs(discretise(path, 0, 0, h), u) == pytest.approx(integrated(path, u, h), abs=1e-9)


def test_a_direct_term_behind_a_fraction_shows_the_older_input() -> None:
    path = discretise(PathSpec("U", "Y", 3.0, dead_time=2.5), 0, 0, 1.0)
    assert path.c.size == 0
    assert (path.whole_delays, path.fraction) == (2, 0.5)
    assert outputs(path, np.arange(1.0, 7.0)).tolist() == [0.0, 0.0, 0.0, 3.0, 6.0, 9.0]


def test_a_static_gain_acts_in_the_same_cycle() -> None:
    assert outputs(discretise(PathSpec("U", "Y", 3.0), 0, 0, 1.0), np.array([1.0, 2.0])).tolist() == [
        3.0,
        6.0,
    ]


@settings(deadline=None)
@given(st.floats(0.0, 5000.0), st.floats(0.1, 100.0))
def test_a_dead_time_is_whole_samples_and_a_fraction(dead_time: float, sample_time: float) -> None:
    whole, fraction = split_dead_time(dead_time, sample_time)
    assert 0.0 <= fraction < 1.0
    assert (whole + fraction) * sample_time == pytest.approx(dead_time, abs=2e-9 * sample_time, rel=1e-12)


@pytest.mark.parametrize("whole", [0, 1, 3, 7, 29, 211])
@pytest.mark.parametrize("sample_time", [0.1, 0.3, 10.0, 60.0])
def test_a_dead_time_typed_in_decimal_stays_whole(whole: int, sample_time: float) -> None:
    for dead_time in (
        whole * sample_time,
        math.nextafter(whole * sample_time, 0.0),
        whole * sample_time * (1 + 2e-16),
    ):
        assert split_dead_time(dead_time, sample_time) == (whole, 0.0)


@settings(deadline=None)
@given(st.floats(0.01, 0.99), st.floats(0.5, 30.0))
def test_both_input_matrices_add_up_to_the_hold_without_dead_time(
    fraction: float, sample_time: float
) -> None:
    system = realise(PathSpec("U", "Y", 1.0, (9.0, 4.0), integrating=True))
    late = held_matrices(system.A, system.B, sample_time, fraction)
    whole = held_matrices(system.A, system.B, sample_time, 0.0)
    assert late.gamma_recent + late.gamma_older == pytest.approx(whole.gamma_recent, rel=1e-12)
    assert late.phi == pytest.approx(whole.phi, rel=1e-14)
    assert not whole.gamma_older.any()


def test_stiff_cascades_keep_their_accuracy() -> None:
    fast, slow, h = 0.2, 5.0e5, 60.0
    path = discretise(PathSpec("U", "Y", 4.0, (fast, slow)), 0, 0, h)
    k = np.arange(50)
    exact = 4.0 * (1 - (slow * np.exp(-k * h / slow) - fast * np.exp(-k * h / fast)) / (slow - fast))
    assert outputs(path, np.ones(50)) == pytest.approx(exact, rel=1e-10, abs=1e-15)
