"""The continuous state space of a path, against its transfer function at single frequencies."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from plant_models.errors import RealisationError
from plant_models.realisation import Realisation, realise
from plant_models.specification import PathSpec
from plant_models.transfer_function import polynomials


def response(system: Realisation, s: complex) -> complex:
    """C (sI - A)^{-1} B + D."""
    return complex(system.C @ np.linalg.solve(s * np.eye(system.order) - system.A, system.B) + system.D)


def rational(path: PathSpec, s: complex) -> complex:
    numerator, denominator = polynomials(path)
    return complex(np.polyval(numerator, s) / np.polyval(denominator, s))


@st.composite
def paths(draw: st.DrawFn) -> PathSpec:
    integrating = draw(st.booleans())
    lags = draw(st.lists(st.floats(5.0, 5e3), max_size=4))
    most = len(lags) + integrating
    leads = draw(st.lists(st.floats(-4e3, 4e3).filter(lambda t: abs(t) > 1.0), max_size=most))
    return PathSpec("U", "Y", draw(st.floats(0.1, 20.0)), tuple(lags), tuple(leads), integrating=integrating)


@settings(deadline=None)
@given(paths(), st.floats(1e-4, 0.1))
def test_factored_and_polynomial_forms_have_the_path_s_frequency_response(path: PathSpec, w: float) -> None:
    numerator, denominator = polynomials(path)
    polynomial = PathSpec("U", "Y", numerator=tuple(numerator), denominator=tuple(denominator))
    expected = rational(path, 1j * w)
    assert response(realise(path), 1j * w) == pytest.approx(expected, rel=1e-9)
    assert response(realise(polynomial), 1j * w) == pytest.approx(expected, rel=1e-8)


@settings(deadline=None)
@given(paths())
def test_the_steady_state_is_one(path: PathSpec) -> None:
    system = realise(path)
    rates = system.A @ system.steady() + system.B
    stable = system.order - system.integrating
    assert rates[:stable] == pytest.approx(np.zeros(stable), abs=1e-12)
    assert system.steady()[:stable] == pytest.approx(np.ones(stable), rel=1e-9)
    assert not system.steady()[stable:].any()


@pytest.mark.parametrize(
    "path",
    [
        PathSpec("U", "Y", 0.4, (30.0, 8.0), (12.0,), integrating=True),
        PathSpec("U", "Y", 0.4, (30.0, 8.0), (12.0, -3.0), integrating=True),
        PathSpec("U", "Y", 0.4, (30.0,), (12.0, -3.0), integrating=True),
        PathSpec("U", "Y", 0.4, (), (12.0,), integrating=True),
        PathSpec("U", "Y", numerator=(1.0, 2.0, 0.5), denominator=(9.0, 2.0, 1.0, 0.0)),
    ],
)
def test_an_integrator_is_the_last_state_and_alone_reaches_the_output(path: PathSpec) -> None:
    numerator, denominator = polynomials(path)
    for form in (path, PathSpec("U", "Y", numerator=tuple(numerator), denominator=tuple(denominator))):
        system = realise(form)
        assert system.integrating
        assert not system.A[:, -1].any()
        assert not system.C[:-1].any()
        assert response(system, 0.03j) == pytest.approx(rational(path, 0.03j), rel=1e-12)
        slope = system.C[-1] * (system.A[-1] @ system.steady() + system.B[-1])
        assert slope == pytest.approx(numerator[-1] / denominator[-2], rel=1e-12)
        infinite = numerator[0] / denominator[0] if numerator.size == denominator.size else 0.0
        assert pytest.approx(infinite, rel=1e-14) == system.D


def test_a_static_gain_has_no_state() -> None:
    for path in (PathSpec("U", "Y", 2.5), PathSpec("U", "Y", numerator=(5.0,), denominator=(2.0,))):
        system = realise(path)
        assert system.order == 0
        assert system.D == 2.5


def test_time_constants_of_zero_are_no_sections() -> None:
    system = realise(PathSpec("U", "Y", 2.0, (0.0, 10.0), (0.0,)))
    assert system.order == 1
    assert response(system, 0.1j) == pytest.approx(2.0 / (1 + 1j), rel=1e-15)


@pytest.mark.parametrize("scale", [1e-3, 1.0, 3.6e5])
def test_polynomials_are_well_scaled_on_every_time_scale(scale: float) -> None:
    powers = scale ** np.arange(3.0, -1.0, -1.0)
    denominator = np.array([2.0, 3.0, 4.0, 1.0]) * powers
    path = PathSpec("U", "Y", numerator=(3.0,), denominator=tuple(denominator))
    system = realise(path)
    assert np.linalg.cond(system.A) < 100.0
    assert response(system, 0.7j / scale) == pytest.approx(rational(path, 0.7j / scale), rel=1e-13)


def test_an_unsound_path_is_refused() -> None:
    with pytest.raises(RealisationError, match="U -> Y: unstable"):
        realise(PathSpec("U", "Y", numerator=(1.0,), denominator=(1.0, -1.0)))


@pytest.mark.parametrize(
    "lags",
    [(60.0,) * 5, (60.0, 60.5, 61.0, 61.5), (0.05, 0.06, 7200.0, 7300.0), (1.0, 30.0, 900.0, 27000.0)],
    ids=["equal", "nearly equal", "two close pairs decades apart", "spread"],
)
def test_a_polynomial_is_the_product_of_its_factors_wherever_the_poles_lie(lags: tuple[float, ...]) -> None:
    lead, damping = -20.0, 0.2
    pair = [300.0**2, 2 * damping * 300.0, 1.0]
    denominator = np.array(pair)
    for lag in lags:
        denominator = np.convolve(denominator, [lag, 1.0])
    system = realise(PathSpec("U", "Y", numerator=(2.0 * lead, 2.0), denominator=tuple(denominator)))
    assert system.order == len(lags) + 2
    for s in (1e-6j, 1e-4j, 3e-3j, 0.02j, 0.5j):
        expected = 2.0 * (lead * s + 1) / complex(np.polyval(pair, s))
        for lag in lags:
            expected /= lag * s + 1
        assert response(system, s) == pytest.approx(expected, rel=1e-9, abs=1e-15)
