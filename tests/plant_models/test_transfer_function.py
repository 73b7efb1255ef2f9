"""Paths as rational functions, against python-control."""

from __future__ import annotations

import math
import subprocess
import sys

import control
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from plant_models.errors import RealisationError
from plant_models.specification import PathSpec
from plant_models.transfer_function import (
    dc_gain,
    faults,
    is_integrating,
    poles,
    polynomials,
    ramp_gain,
    transfer_function,
    zeros,
)

TIMES = st.floats(0.5, 5e4)
GAINS = st.floats(1e-3, 50.0) | st.floats(-50.0, -1e-3)


@st.composite
def factored_paths(draw: st.DrawFn) -> PathSpec:
    lags = draw(st.lists(TIMES, max_size=3))
    leads = draw(st.lists(st.floats(-5e3, 5e3).filter(lambda t: abs(t) > 0.1), max_size=len(lags)))
    return PathSpec("U", "Y", draw(GAINS), tuple(lags), tuple(leads))


@settings(deadline=None)
@given(factored_paths(), st.floats(1e-5, 1.0))
def test_the_python_control_object_is_the_product_of_its_factors(path: PathSpec, frequency: float) -> None:
    s = 1j * frequency
    expected = complex(path.gain or 0.0)
    for lead in path.lead_times:
        expected *= lead * s + 1
    for lag in path.time_constants:
        expected /= lag * s + 1
    assert complex(transfer_function(path)(s)) == pytest.approx(expected, rel=1e-9)


@settings(deadline=None)
@given(factored_paths())
def test_dc_gain_agrees_with_python_control(path: PathSpec) -> None:
    assert dc_gain(path) == pytest.approx(float(np.real(control.dcgain(transfer_function(path)))), rel=1e-12)


def test_poles_and_zeros_agree_with_python_control() -> None:
    path = PathSpec("U", "Y", numerator=(2.0, -0.4, 1.0), denominator=(3.0, 4.0, 5.0, 1.0))
    system = transfer_function(path)
    assert np.sort_complex(poles(path)) == pytest.approx(np.sort_complex(system.poles()), rel=1e-10)
    assert np.sort_complex(zeros(path)) == pytest.approx(np.sort_complex(system.zeros()), rel=1e-10)


def test_poles_and_zeros_of_factors_are_exact() -> None:
    path = PathSpec("U", "Y", -3.0, (252.0, 36.0), (-18.0,), integrating=True)
    assert poles(path).tolist() == [-1 / 252.0, -1 / 36.0, 0.0]
    assert zeros(path).tolist() == [1 / 18.0]


def test_roots_far_apart_are_found_accurately() -> None:
    fast, slow = 0.5, 40_000.0
    coefficients = np.convolve([fast, 1.0], [slow, 1.0])
    path = PathSpec("U", "Y", numerator=(1.0,), denominator=tuple(coefficients))
    assert np.sort(poles(path).real) == pytest.approx([-1 / fast, -1 / slow], rel=1e-13)


def test_an_integrating_path_has_infinite_gain_and_a_slope() -> None:
    factored = PathSpec("U", "Y", 0.02, (60.0,), integrating=True)
    polynomial = PathSpec("U", "Y", numerator=(0.04,), denominator=(120.0, 2.0, 0.0))
    for path in (factored, polynomial):
        assert is_integrating(path)
        assert dc_gain(path) == math.inf
        assert ramp_gain(path) == pytest.approx(0.02, rel=1e-15)
    assert ramp_gain(PathSpec("U", "Y", 2.0, (60.0,))) == 0.0


def test_common_powers_of_s_cancel() -> None:
    path = PathSpec("U", "Y", numerator=(0.0, 3.0, 0.0), denominator=(5.0, 1.0, 0.0))
    assert [part.tolist() for part in polynomials(path)] == [[3.0], [5.0, 1.0]]
    assert not is_integrating(path)
    washout = PathSpec("U", "Y", numerator=(3.0, 0.0), denominator=(5.0, 1.0))
    assert dc_gain(washout) == 0.0
    assert faults(washout) == ()


@pytest.mark.parametrize(
    ("path", "word"),
    [
        (PathSpec("U", "Y", 1.0, (5.0,), (1.0, 2.0)), "improper"),
        (PathSpec("U", "Y", numerator=(1.0, 0.0, 0.0), denominator=(1.0, 1.0)), "improper"),
        (PathSpec("U", "Y", 1.0, (-5.0,)), "unstable"),
        (PathSpec("U", "Y", numerator=(1.0,), denominator=(4.0, 0.0, 1.0)), "unstable"),
        (
            PathSpec("U", "Y", numerator=(1.0,), denominator=(4.0, 0.0, 0.0)),
            "more than one pole at the origin",
        ),
        (
            PathSpec("U", "Y", numerator=(1.0,), denominator=(0.0, 0.0)),
            "denominator of the transfer function is zero",
        ),
        (PathSpec("U", "Y", math.nan, (5.0,)), "not a finite number"),
        (PathSpec("U", "Y", 1.0, (5.0,), dead_time=-1.0), "dead time"),
        (PathSpec("U", "Y", 1.0, (5.0,), dead_time=math.inf), "dead time"),
        (PathSpec("U", "Y"), "neither a gain nor a numerator"),
        (PathSpec("U", "Y", integrating=True, numerator=(1.0,), denominator=(4.0, 1.0)), "said to integrate"),
    ],
)
def test_what_cannot_be_run_is_named(path: PathSpec, word: str) -> None:
    lines = faults(path)
    assert len(lines) == 1
    assert lines[0].startswith("U -> Y: ")
    assert word in lines[0]


def test_a_path_without_gain_raises_where_its_polynomials_are_asked_for() -> None:
    with pytest.raises(RealisationError, match="U -> Y"):
        polynomials(PathSpec("U", "Y"))


def test_importing_the_model_builder_does_not_import_python_control() -> None:
    code = "import sys, plant_models.building; sys.exit('control' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
