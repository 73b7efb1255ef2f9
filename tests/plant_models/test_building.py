"""A specification to the discrete model: layout, covariances, disturbances treated like inputs, digest."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from plant_models.building import build_plant_model
from plant_models.errors import RealisationError
from plant_models.plant_model import DiscretePath, PlantModel
from plant_models.specification import (
    DisturbanceSpec,
    EstimateSpec,
    InputSpec,
    LabSpec,
    PathSpec,
    SensorSpec,
    UnitSpec,
)
from plant_models.stochastic import stationary_covariance

H = 60.0
WANDERING = DisturbanceSpec("feed", sd=0.8, time_constant=5400.0)
WALKING = DisturbanceSpec("fouling", walk_sd=0.05, initial_sd=0.3)
AT_INPUT = DisturbanceSpec("leak", sd=0.4, time_constant=1200.0, at_input="U")
OWN_PATHS = (
    PathSpec("feed", "S", -2.0, (300.0,), (), 150.0),
    PathSpec("feed", "E", numerator=(1.0,), denominator=(9e4, 300.0, 1.0)),
    PathSpec("fouling", "S", 1.5, (900.0,), (200.0,), 60.0),
    PathSpec("fouling", "E", 0.01, (120.0,), (), 20.0, integrating=True),
)
INPUT_PATHS = (
    PathSpec("U", "S", 2.0, (250.0, 36.0), (-20.0,), 90.0),
    PathSpec("U", "E", 0.002, (100.0,), (), 0.0, integrating=True),
)


def unit(*disturbances: DisturbanceSpec, paths: tuple[PathSpec, ...]) -> UnitSpec:
    span = (0.0, 10.0)
    return UnitSpec(
        name="R-210",
        title="Reactor",
        sample_time=H,
        inputs=(InputSpec("U", "m3/h", 5.0, span),),
        sensors=(SensorSpec("S", "degC", 4.0, span, noise_sd=0.1, tolerance=0.4, bias_walk_sd=0.02),),
        estimates=(EstimateSpec("E", "mol/L", 3.0, span, bias_initial_sd=0.2, lab=LabSpec("L", 0.02)),),
        disturbances=disturbances,
        paths=paths,
        false_flag_interval=2.6e6,
    )


def full() -> UnitSpec:
    return unit(WANDERING, WALKING, AT_INPUT, paths=(*INPUT_PATHS, *OWN_PATHS))


def block(model: PlantModel, name: str) -> NDArray[np.intp]:
    """State indices of one disturbance: those whose names begin with its name."""
    names = model.stochastic.state_names
    return np.array([i for i, text in enumerate(names) if text.startswith(name)], dtype=np.intp)


def test_states_stand_in_the_documented_order() -> None:
    assert build_plant_model(full()).stochastic.state_names == (
        "feed",
        "feed, 1 sample ago",
        "feed, 2 samples ago",
        "feed, 3 samples ago",
        "feed -> S, state 1",
        "feed -> E, state 1",
        "feed -> E, state 2",
        "fouling",
        "fouling, 1 sample ago",
        "fouling -> S, state 1",
        "fouling -> E, state 1",
        "fouling -> E, state 2",
        "leak",
        "leak, 1 sample ago",
        "leak, 2 samples ago",
        "leak -> S, state 1",
        "leak -> S, state 2",
        "leak -> E, state 1",
        "leak -> E, state 2",
        "offset of S",
        "offset of E",
    )


def test_disturbances_have_the_contract_s_coefficients_and_variances() -> None:
    part = build_plant_model(full()).stochastic
    feed, fouling, leak = part.disturbance_index
    phi = math.exp(-H / 5400.0)
    assert part.A[feed, feed] == phi
    assert part.q[feed] == pytest.approx(0.8**2 * (1 - phi**2), rel=1e-12)
    assert part.A[leak, leak] == math.exp(-H / 1200.0)
    assert part.A[fouling, fouling] == 1.0
    assert part.q[fouling] == pytest.approx(0.05**2 / 60.0, rel=1e-15)
    offset_s, offset_e = part.q.size - 2, part.q.size - 1
    assert part.q[offset_s] == pytest.approx(0.02**2 / 60.0, rel=1e-15)
    assert part.q[offset_e] == 0.0
    assert part.P0[offset_s, offset_s] == 0.0
    assert part.P0[offset_e, offset_e] == pytest.approx(0.04, rel=1e-15)
    assert part.C[:, offset_s:].tolist() == np.eye(2).tolist()
    assert np.count_nonzero(part.q) == 4


@pytest.mark.parametrize("name", ["feed", "leak"])
def test_the_start_covariance_solves_the_stationary_equation_as_a_linear_system(name: str) -> None:
    model = build_plant_model(full())
    part, here = model.stochastic, block(model, name)
    integrators = here[[part.A[i, i] == 1.0 for i in here]]
    moving = np.setdiff1d(here, integrators)
    A, noise = part.A[np.ix_(moving, moving)], np.diag(part.q[moving])
    n = moving.size
    solved = np.linalg.solve(np.eye(n * n) - np.kron(A, A), noise.ravel()).reshape(n, n)
    assert part.P0[np.ix_(moving, moving)] == pytest.approx(solved, rel=1e-9, abs=1e-15)
    assert not part.P0[integrators].any()
    assert integrators.size == (name == "leak")


def test_the_start_covariance_is_the_limit_of_the_recursion() -> None:
    model = build_plant_model(full())
    part, here = model.stochastic, block(model, "feed")
    A, noise = part.A[np.ix_(here, here)], np.diag(part.q[here])
    P = np.zeros_like(A)
    for _ in range(3000):
        P = A @ P @ A.T + noise
    assert part.P0[np.ix_(here, here)] == pytest.approx(P, rel=1e-11, abs=1e-15)
    lags = np.exp(-H / 5400.0 * np.abs(np.subtract.outer(np.arange(4), np.arange(4))))
    assert part.P0[:4, :4] == pytest.approx(0.64 * lags, rel=1e-12)


def test_a_walk_starts_in_steady_state_with_its_initial_value() -> None:
    model = build_plant_model(full())
    part, here = model.stochastic, block(model, "fouling")
    v = np.array([1.0, 1.0, 1.0, 1.0, 0.0])
    assert part.P0[np.ix_(here, here)] == pytest.approx(0.09 * np.outer(v, v), rel=1e-12)
    assert (part.A[np.ix_(here, here)] @ v)[:4] == pytest.approx(v[:4], rel=1e-14)
    assert part.C[0, here] @ v == pytest.approx(1.5, rel=1e-14)


def test_unrelated_blocks_are_independent_and_all_is_exactly_symmetric() -> None:
    model = build_plant_model(full())
    part = model.stochastic
    assert np.array_equal(part.P0, part.P0.T)
    assert np.linalg.eigvalsh(part.P0).min() > -1e-14
    names = ("feed", "fouling", "leak", "offset of S", "offset of E")
    for first in names:
        for second in names:
            if first != second:
                across = np.ix_(block(model, first), block(model, second))
                assert not part.A[across].any()
                assert not part.P0[across].any()


def test_slow_disturbances_and_long_dead_times_keep_their_covariance() -> None:
    slow = DisturbanceSpec("feed", sd=2.0, time_constant=30 * 86400.0)
    path = PathSpec("feed", "S", 1.0, (600.0,), (), 7230.0)
    part = build_plant_model(unit(slow, paths=(path,))).stochastic
    variance = np.diag(part.P0)
    assert part.A.shape == (1 + 121 + 1 + 2,) * 2
    assert variance[:122] == pytest.approx(np.full(122, 4.0), rel=1e-9)
    assert 3.99 < variance[122] < 4.0


def test_an_unstable_matrix_has_no_stationary_covariance() -> None:
    with pytest.raises(RealisationError, match="stationary covariance"):
        stationary_covariance(np.array([[1.0]]), np.array([[0.1]]))
    with pytest.raises(RealisationError, match="stationary covariance"):
        stationary_covariance(np.array([[1.2]]), np.array([[0.1]]))


def input_driven(paths: tuple[DiscretePath, ...], u: NDArray[np.float64], rows: int) -> NDArray[np.float64]:
    """Outputs (cycles, rows) of input-driven paths from rest."""
    z = np.zeros((u.size, rows))
    padded = np.concatenate([np.zeros(200), u])
    for path in paths:
        x = np.zeros(path.c.size)
        for k in range(u.size):
            recent, older = padded[200 + k - path.whole_delays], padded[199 + k - path.whole_delays]
            z[k, path.row] += path.c @ x + path.d * (recent if path.fraction == 0.0 else older)
            x = path.phi @ x + path.gamma_recent * recent + path.gamma_older * older
    return z


@st.composite
def driven_units(draw: st.DrawFn) -> UnitSpec:
    """One disturbance at an input that has a path to each output."""

    def path(target: str) -> PathSpec:
        lags = tuple(draw(st.lists(st.floats(5.0, 3000.0), max_size=3)))
        leads = tuple(draw(st.lists(st.floats(-500.0, -1e-3) | st.floats(1e-3, 500.0), max_size=len(lags))))
        gain, late = draw(st.floats(-5.0, 5.0)), draw(st.floats(0.0, 1000.0))
        return PathSpec("U", target, gain, lags, leads, late, draw(st.booleans()))

    walk = DisturbanceSpec("leak", walk_sd=1.0, at_input="U")
    return unit(draw(st.sampled_from([AT_INPUT, walk])), paths=(path("S"), path("E")))


@settings(max_examples=60, deadline=None)
@given(driven_units(), st.integers(0, 2**31))
def test_a_disturbance_at_an_input_moves_the_outputs_as_that_input_would(spec: UnitSpec, seed: int) -> None:
    model = build_plant_model(spec)
    part = model.stochastic
    d = np.random.default_rng(seed).normal(size=40)
    at = part.disturbance_index[0]
    x, z = np.zeros(part.q.size), np.zeros((d.size, 2))
    for k in range(d.size):
        x[at] = d[k]
        z[k] = part.C @ x
        x = part.A @ x
        assert x[at] == part.A[at, at] * d[k]
    expected = input_driven(model.paths, d, 2)
    assert z == pytest.approx(expected, rel=1e-9, abs=1e-9 * max(1.0, np.abs(expected).max()))


def test_arrays_are_contiguous_and_cannot_be_written() -> None:
    model = build_plant_model(full())
    for part in (*model.paths, model.stochastic):
        arrays = [value for value in vars(part).values() if isinstance(value, np.ndarray)]
        assert len(arrays) >= 4
        for array in arrays:
            assert array.dtype == np.float64
            assert array.flags.c_contiguous
            assert not array.flags.writeable


def test_input_paths_stand_in_file_order_with_their_indices() -> None:
    model = build_plant_model(full())
    assert [(path.source, path.row, path.whole_delays, path.fraction) for path in model.paths] == [
        (0, 0, 1, 0.5),
        (0, 1, 0, 0.0),
    ]


def test_commentary_does_not_change_the_digest() -> None:
    spec = full()
    digest = build_plant_model(spec).digest
    assert len(digest) == 64
    assert build_plant_model(replace(spec, title="other", source_text="# note")).digest == digest


def changed_units() -> dict[str, UnitSpec]:
    spec = full()
    sensor, estimate, source = spec.sensors[0], spec.estimates[0], spec.inputs[0]
    gain = replace(INPUT_PATHS[0], gain=math.nextafter(2.0, 3.0))
    return {
        "gain": replace(spec, paths=(gain, *spec.paths[1:])),
        "tag": replace(spec, estimates=(replace(estimate, lab=LabSpec("L2", 0.02)),)),
        "range": replace(spec, inputs=(replace(source, range=(0.0, 11.0)),)),
        "noise": replace(spec, sensors=(replace(sensor, noise_sd=0.11),)),
        "report": replace(spec, sensors=(replace(sensor, on_change=True),)),
        "disturbance": replace(spec, disturbances=(WALKING, WANDERING, AT_INPUT)),
        "interval": replace(spec, false_flag_interval=2.7e6),
        "sample time": replace(spec, sample_time=math.nextafter(H, 0.0)),
    }


def test_whatever_the_estimator_uses_changes_the_digest() -> None:
    digests = {build_plant_model(spec).digest for spec in (full(), *changed_units().values())}
    assert len(digests) == 1 + len(changed_units())


def test_every_unsound_path_is_named_at_once() -> None:
    paths = (
        PathSpec("U", "S", 1.0, (-5.0,)),
        PathSpec("U", "X", 1.0),
        PathSpec("V", "E", 1.0),
        PathSpec("feed", "S", numerator=(1.0,), denominator=(1.0, 0.0, 0.0)),
    )
    with pytest.raises(RealisationError) as caught:
        build_plant_model(unit(WANDERING, replace(AT_INPUT, at_input="W"), paths=paths))
    starts = [
        "U -> S: unstable",
        "U -> X: X is neither",
        "V -> E: V is neither",
        "feed -> S: more than one pole",
        "disturbance leak: at_input names W",
    ]
    assert [line[: len(start)] for line, start in zip(caught.value.lines, starts, strict=True)] == starts


@pytest.mark.parametrize("sample_time", [0.0, -1.0, math.nan, math.inf])
def test_a_sample_time_that_is_none_is_refused(sample_time: float) -> None:
    with pytest.raises(RealisationError, match="sample time"):
        build_plant_model(replace(full(), sample_time=sample_time))


def test_a_dead_time_of_too_many_samples_on_a_disturbance_is_refused() -> None:
    path = PathSpec("feed", "S", 1.0, (600.0,), (), 1000.0 * H)
    with pytest.raises(RealisationError, match="choose a longer sample time"):
        build_plant_model(unit(WANDERING, paths=(path,)))


def test_a_disturbance_without_its_numbers_is_refused() -> None:
    with pytest.raises(RealisationError, match="disturbance feed"):
        build_plant_model(unit(DisturbanceSpec("feed", sd=1.0), paths=()))


@pytest.mark.parametrize("sd", [1e200, -0.1, math.nan, math.inf])
def test_a_standard_deviation_that_cannot_be_squared_is_refused(sd: float) -> None:
    paths = OWN_PATHS[:2]
    sensor = full().sensors[0]
    for spec in (
        unit(replace(WANDERING, sd=sd), paths=paths),
        unit(replace(WALKING, initial_sd=sd), paths=()),
        unit(replace(WALKING, walk_sd=sd), paths=()),
        replace(unit(paths=()), sensors=(replace(sensor, bias_walk_sd=sd, bias_initial_sd=1.0),)),
    ):
        with pytest.raises(RealisationError, match="cannot be computed with"):
            build_plant_model(spec)
