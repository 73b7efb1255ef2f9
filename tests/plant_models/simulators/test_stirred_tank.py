"""The tank's balances, steady states and integration against independent computations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from plant_models.simulators.stirred_tank import (
    TankInputs,
    TankParameters,
    TankState,
    derivatives,
    inputs_holding,
    jacobians,
    rate_constant,
    steady_states,
    step,
)

PARAMETERS = TankParameters()
DESIGN = inputs_holding(PARAMETERS, TankInputs(), 92.4)


def test_the_design_point_is_the_only_steady_state_and_stable() -> None:
    states = steady_states(PARAMETERS, DESIGN)
    assert len(states) == 1
    assert states[0].temperature == pytest.approx(92.4, abs=1e-9)
    assert np.abs(derivatives(PARAMETERS, states[0], DESIGN)).max() < 1e-12
    poles = np.linalg.eigvals(jacobians(PARAMETERS, states[0], DESIGN)[0])
    assert poles.real.max() < 0.0
    time_constants = np.sort(-1.0 / poles.real) / 60.0
    assert 10.0 < time_constants[-1] < 40.0
    assert np.abs(poles.imag / poles.real).max() < 1.0


def test_the_heat_balance_closes_over_the_whole_unit() -> None:
    """Heat released = heat taken up by the feed + heat taken up by the coolant, added up without the equations."""
    (state,) = steady_states(PARAMETERS, DESIGN)
    released = PARAMETERS.reaction_heat * DESIGN.feed_flow * state.product
    feed = PARAMETERS.heat_capacity * DESIGN.feed_flow * (state.temperature - DESIGN.feed_temperature)
    rise = state.jacket - DESIGN.coolant_temperature
    coolant = PARAMETERS.coolant_heat_capacity * DESIGN.coolant_flow * rise
    assert released == pytest.approx(feed + coolant, rel=1e-9)


def test_an_exothermic_tank_can_have_three_steady_states() -> None:
    """References section 3.5 (READ in three files, steady states COMPUTED): Seborg et al.'s reactor, in our units.

    q 100 L/min, V 100 L, rho cp 0.239 kJ/(L K), H 50 kJ/mol, E/R 8750 K, k0 7.2e10 1/min, UA 50 kJ/(min K), feed
    1 mol/L at 350 K; the jacket is held at 300 K by an immense coolant flow.
    """
    kelvin = 273.15
    parameters = TankParameters(
        volume=0.1,
        heat_capacity=239.0,
        reaction_heat=50_000.0,
        activation_temperature=8750.0,
        rate_constant=60.0 * 7.2e10 * float(np.exp(-8750.0 / 350.0)),
        reference_temperature=350.0 - kelvin,
        heat_transfer=3000.0,
        jacket_volume=0.01,
    )
    inputs = TankInputs(6.0, 350.0 - kelvin, 1.0, 1e9, 300.0 - kelvin)
    states = steady_states(parameters, inputs)
    assert [s.temperature + kelvin for s in states] == pytest.approx([324.475, 350.0055, 369.705], abs=2e-3)
    assert [s.reactant for s in states] == pytest.approx([0.8773, 0.499918, 0.2088], abs=1e-4)


def test_the_fixed_step_agrees_with_an_adaptive_solver() -> None:
    state = TankState(0.9, 1.0, 85.0, 70.0)
    reference = solve_ivp(
        lambda _, x: derivatives(PARAMETERS, TankState(*x), DESIGN),
        (0.0, 1200.0),
        state,
        rtol=1e-11,
        atol=1e-11,
    ).y[:, -1]
    for _ in range(600):
        state = step(PARAMETERS, state, DESIGN)
    assert np.allclose(state, reference, rtol=1e-9, atol=0.0)


def test_arrhenius() -> None:
    kelvin = 273.15
    ratio = rate_constant(PARAMETERS, 102.4) / rate_constant(PARAMETERS, 92.4)
    assert ratio == pytest.approx(np.exp(-6000.0 / (102.4 + kelvin) + 6000.0 / (92.4 + kelvin)), rel=1e-12)


def test_no_coolant_flow_can_hold_an_impossible_temperature() -> None:
    with pytest.raises(ValueError, match="sign"):
        inputs_holding(PARAMETERS, TankInputs(), 150.0)
