"""Step responses against the analytic ones at the sampling instants, gains against python-control's.

The formulas are inverse Laplace transforms of G(s)/s, as any control text has them (for instance Seborg,
Edgar, Mellichamp, Process Dynamics and Control, on first- and second-order processes): MEMORY, derived here.
Source of the second computation: python-control (COMPUTED in the same run).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import control
import numpy as np
import pytest
from numpy.typing import NDArray

from plant_models.discretisation import discretise
from plant_models.specification import PathSpec
from plant_models.transfer_function import transfer_function

Vector = NDArray[np.float64]
Response = Callable[[Vector], Vector]

H = 10.0
DEAD_TIMES = [0.0, 10.0, 4.0, 25.0, 97.3, 180.0]


def step(path: PathSpec, cycles: int = 200) -> Vector:
    """y(k) of the discrete path from rest to a unit step at k = 0."""
    p = discretise(path, 0, 0, H)
    x, y = np.zeros(p.c.size), np.zeros(cycles)
    for k in range(cycles):
        recent, older = float(k >= p.whole_delays), float(k >= p.whole_delays + 1)
        y[k] = p.c @ x + p.d * (recent if p.fraction == 0.0 else older)
        x = p.phi @ x + p.gamma_recent * recent + p.gamma_older * older
    return y


def first_order(gain: float, lag: float, lead: float) -> Response:
    return lambda t: gain * (1 + (lead / lag - 1) * np.exp(-t / lag))


def second_order(gain: float, one: float, two: float, lead: float) -> Response:
    return lambda t: (
        gain * (1 - ((one - lead) * np.exp(-t / one) - (two - lead) * np.exp(-t / two)) / (one - two))
    )


def two_equal_lags(gain: float, lag: float, lead: float) -> Response:
    return lambda t: gain * (1 - (1 + t / lag - lead * t / lag**2) * np.exp(-t / lag))


def underdamped(gain: float, period: float, damping: float, lead: float) -> Response:
    """gain (lead s + 1)/(period^2 s^2 + 2 damping period s + 1)."""
    w = np.sqrt(1 - damping**2) / period

    def response(t: Vector) -> Vector:
        decay = np.exp(-damping * t / period)
        plain = 1 - decay * (np.cos(w * t) + damping / (w * period) * np.sin(w * t))
        slope = decay * np.sin(w * t) / (w * period**2)
        return np.asarray(gain * (plain + lead * slope))

    return response


def integrator(gain: float, lag: float, lead: float) -> Response:
    return lambda t: gain * (t + (lead - lag) * (1 - np.exp(-t / lag)))


SHAPES: dict[str, tuple[PathSpec, Response]] = {
    "first order": (PathSpec("U", "Y", -1.9, (252.0,)), first_order(-1.9, 252.0, 0.0)),
    "first order with lead": (PathSpec("U", "Y", 3.0, (80.0,), (30.0,)), first_order(3.0, 80.0, 30.0)),
    "first order, large lead": (PathSpec("U", "Y", 3.0, (80.0,), (240.0,)), first_order(3.0, 80.0, 240.0)),
    "first order, inverse": (PathSpec("U", "Y", 2.0, (80.0,), (-40.0,)), first_order(2.0, 80.0, -40.0)),
    "second order": (PathSpec("U", "Y", 4.0, (252.0, 36.0)), second_order(4.0, 252.0, 36.0, 0.0)),
    "second order, lead": (
        PathSpec("U", "Y", 4.0, (252.0, 36.0), (70.0,)),
        second_order(4.0, 252.0, 36.0, 70.0),
    ),
    "second order, inverse": (
        PathSpec("U", "Y", 4.0, (90.0, 36.0), (-50.0,)),
        second_order(4.0, 90.0, 36.0, -50.0),
    ),
    "two equal": (PathSpec("U", "Y", 0.7, (120.0, 120.0)), two_equal_lags(0.7, 120.0, 0.0)),
    "two equal, lead": (PathSpec("U", "Y", 0.7, (120.0, 120.0), (-45.0,)), two_equal_lags(0.7, 120.0, -45.0)),
    "two equal, polynomial": (
        PathSpec("U", "Y", numerator=(21.0, 0.7), denominator=(120.0**2, 240.0, 1.0)),
        two_equal_lags(0.7, 120.0, 30.0),
    ),
    "distinct, polynomial": (
        PathSpec("U", "Y", numerator=(210.0, 3.0), denominator=(252.0 * 36.0, 288.0, 1.0)),
        second_order(3.0, 252.0, 36.0, 70.0),
    ),
    "underdamped": (
        PathSpec("U", "Y", numerator=(5.0,), denominator=(3600.0, 36.0, 1.0)),
        underdamped(5.0, 60.0, 0.3, 0.0),
    ),
    "underdamped, inverse": (
        PathSpec("U", "Y", numerator=(-100.0, 5.0), denominator=(3600.0, 36.0, 1.0)),
        underdamped(5.0, 60.0, 0.3, -20.0),
    ),
    "integrating": (PathSpec("U", "Y", 0.01, (45.0,), (), integrating=True), integrator(0.01, 45.0, 0.0)),
    "integrating, lead": (
        PathSpec("U", "Y", 0.01, (45.0,), (15.0,), integrating=True),
        integrator(0.01, 45.0, 15.0),
    ),
    "integrating, polynomial": (
        PathSpec("U", "Y", numerator=(-0.2, 0.01), denominator=(45.0, 1.0, 0.0)),
        integrator(0.01, 45.0, -20.0),
    ),
    "static": (PathSpec("U", "Y", 2.5), lambda t: np.full_like(t, 2.5)),
}


@pytest.mark.parametrize("dead_time", DEAD_TIMES)
@pytest.mark.parametrize("shape", SHAPES)
def test_the_step_response_is_the_analytic_one_at_the_sampling_instants(shape: str, dead_time: float) -> None:
    path, response = SHAPES[shape]
    t = np.arange(200) * H - dead_time
    expected = np.where(t >= 0, response(np.maximum(t, 0.0)), 0.0)
    assert step(replace(path, dead_time=dead_time)) == pytest.approx(expected, rel=1e-10, abs=1e-10)


@pytest.mark.parametrize("shape", [name for name, (path, _) in SHAPES.items() if "integrating" not in name])
def test_the_realised_gain_is_python_control_s(shape: str) -> None:
    path = SHAPES[shape][0]
    p = discretise(path, 0, 0, H)
    settled = np.linalg.solve(np.eye(p.c.size) - p.phi, p.gamma_recent + p.gamma_older)
    expected = float(np.real(control.dcgain(transfer_function(path))))
    assert p.c @ settled + p.d == pytest.approx(expected, rel=1e-12)
    assert p.c @ p.steady + p.d == pytest.approx(expected, rel=1e-12)


def test_an_inverse_response_first_goes_the_wrong_way() -> None:
    y = step(replace(SHAPES["second order, inverse"][0], dead_time=25.0))
    assert not y[:3].any()
    assert y[3] < 0 < y[-1]


def test_sampled_responses_agree_with_python_control_s_own_hold() -> None:
    """python-control discretises a whole-sample hold by its own route (scipy.signal.cont2discrete)."""
    path = PathSpec("U", "Y", numerator=(90.0, -4.0, 1.5), denominator=(9.1e4, 7.0e3, 150.0, 1.0))
    theirs = control.sample_system(control.tf2ss(transfer_function(path)), H, method="zoh")
    _, expected = control.step_response(theirs, np.arange(200) * H)
    assert step(path) == pytest.approx(np.squeeze(expected), rel=1e-9, abs=1e-9)
