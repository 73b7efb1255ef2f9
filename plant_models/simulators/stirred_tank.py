"""A jacketed stirred tank with one exothermic reaction A -> B: balances, steady states, linearisation.

Nonlinear and first-principles; a scenario of our own (unit R-210), to try the estimator on. Pure functions of frozen
values. Concentrations in mol/L, temperatures in degC, flows in m3/h. Balances of a perfectly mixed tank of constant
volume and a perfectly mixed jacket (any textbook on reactor dynamics)::

    dcA/dt = q/V (cF - cA) - k(T) cA                  k(T) = k_ref exp(E/R (1/T_ref - 1/T)), T in kelvin
    dcB/dt = -q/V cB + k(T) cA
    dT/dt  = q/V (TF - T) + H/(rho cp) k(T) cA - UA (T - Tj) / (rho cp V)
    dTj/dt = qc/Vj (Tc - Tj) + UA (T - Tj) / (rho_c cp_c Vj)
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import brentq

KELVIN = 273.15
SECONDS_PER_HOUR = 3600.0
STEP_SECONDS = 2.0
"""Fixed integration step: about a hundredth of the fastest time constant, the jacket's."""


@dataclass(frozen=True, slots=True)
class TankParameters:
    """What does not change while the plant runs. Heat capacities per volume, in kJ/(m3 K)."""

    volume: float = 7.5
    """Reacting volume, m3."""
    heat_capacity: float = 3100.0
    reaction_heat: float = 90_000.0
    """Released per kmol of A, kJ/kmol."""
    activation_temperature: float = 6000.0
    """E/R, K."""
    rate_constant: float = 3.5
    """First-order rate constant at ``reference_temperature``, 1/h."""
    reference_temperature: float = 92.4
    heat_transfer: float = 90_000.0
    """UA of the clean jacket, kJ/(h K)."""
    jacket_volume: float = 0.9
    coolant_heat_capacity: float = 4180.0


class TankInputs(NamedTuple):
    """What acts on the tank: m3/h, degC, mol/L, m3/h, degC, and UA as a share of the clean jacket's."""

    feed_flow: float = 11.5
    feed_temperature: float = 88.0
    feed_concentration: float = 1.9
    coolant_flow: float = 11.2
    coolant_temperature: float = 54.0
    heat_transfer_share: float = 1.0


class TankState(NamedTuple):
    """Concentrations of reactant and product (mol/L), temperatures of reactor and jacket (degC)."""

    reactant: float
    product: float
    temperature: float
    jacket: float


def rate_constant(parameters: TankParameters, temperature: float) -> float:
    """First-order rate constant at a temperature in degC, 1/h (Arrhenius)."""
    reciprocal = 1.0 / (parameters.reference_temperature + KELVIN) - 1.0 / (temperature + KELVIN)
    return parameters.rate_constant * math.exp(parameters.activation_temperature * reciprocal)


def derivatives(parameters: TankParameters, state: TankState, inputs: TankInputs) -> TankState:
    """The four balances: rates of change per second."""
    reactant, product, temperature, jacket = state
    dilution = inputs.feed_flow / parameters.volume
    reaction = rate_constant(parameters, temperature) * reactant
    heat = parameters.heat_transfer * inputs.heat_transfer_share * (temperature - jacket)
    jacket_capacity = parameters.coolant_heat_capacity * parameters.jacket_volume
    return TankState(
        (dilution * (inputs.feed_concentration - reactant) - reaction) / SECONDS_PER_HOUR,
        (reaction - dilution * product) / SECONDS_PER_HOUR,
        (
            dilution * (inputs.feed_temperature - temperature)
            + parameters.reaction_heat / parameters.heat_capacity * reaction
            - heat / (parameters.heat_capacity * parameters.volume)
        )
        / SECONDS_PER_HOUR,
        (
            inputs.coolant_flow / parameters.jacket_volume * (inputs.coolant_temperature - jacket)
            + heat / jacket_capacity
        )
        / SECONDS_PER_HOUR,
    )


def _moved(state: TankState, rates: TankState, seconds: float) -> TankState:
    return TankState(
        state.reactant + seconds * rates.reactant,
        state.product + seconds * rates.product,
        state.temperature + seconds * rates.temperature,
        state.jacket + seconds * rates.jacket,
    )


def step(
    parameters: TankParameters, state: TankState, inputs: TankInputs, seconds: float = STEP_SECONDS
) -> TankState:
    """One step of the classical fourth-order Runge-Kutta method, with the inputs held over it."""
    first = derivatives(parameters, state, inputs)
    second = derivatives(parameters, _moved(state, first, 0.5 * seconds), inputs)
    third = derivatives(parameters, _moved(state, second, 0.5 * seconds), inputs)
    fourth = derivatives(parameters, _moved(state, third, seconds), inputs)
    mean = TankState(
        *((a + 2.0 * b + 2.0 * c + d) / 6.0 for a, b, c, d in zip(first, second, third, fourth, strict=True))
    )
    return _moved(state, mean, seconds)


def _state_at(parameters: TankParameters, inputs: TankInputs, temperature: float) -> TankState:
    """Concentrations and jacket temperature in balance at a given reactor temperature."""
    dilution = inputs.feed_flow / parameters.volume
    reactant = dilution * inputs.feed_concentration / (dilution + rate_constant(parameters, temperature))
    transfer = parameters.heat_transfer * inputs.heat_transfer_share
    coolant = parameters.coolant_heat_capacity * inputs.coolant_flow
    jacket = (coolant * inputs.coolant_temperature + transfer * temperature) / (coolant + transfer)
    return TankState(reactant, inputs.feed_concentration - reactant, temperature, jacket)


def steady_states(parameters: TankParameters, inputs: TankInputs) -> tuple[TankState, ...]:
    """Every steady state for constant inputs, coldest first; an exothermic tank may have one or three.

    The heat balance is solved for the temperature between the coldest and the hottest that it can have.
    """

    def imbalance(temperature: float) -> float:
        return derivatives(parameters, _state_at(parameters, inputs, temperature), inputs).temperature

    adiabatic = parameters.reaction_heat / parameters.heat_capacity * inputs.feed_concentration
    lowest = min(inputs.feed_temperature, inputs.coolant_temperature) - 1.0
    grid = np.linspace(lowest, inputs.feed_temperature + adiabatic + 1.0, 401)
    values = [imbalance(float(temperature)) for temperature in grid]
    return tuple(
        _state_at(parameters, inputs, float(brentq(imbalance, grid[i], grid[i + 1], xtol=1e-12)))
        for i in range(len(grid) - 1)
        if values[i] > 0.0 >= values[i + 1] or values[i] <= 0.0 < values[i + 1]
    )


def inputs_holding(parameters: TankParameters, inputs: TankInputs, temperature: float) -> TankInputs:
    """The inputs with that coolant flow which keeps the reactor at the temperature (degC) in steady state.

    :raises ValueError: no coolant flow can do it (scipy's root finder finds no change of sign).
    """

    def imbalance(coolant_flow: float) -> float:
        trial = inputs._replace(coolant_flow=coolant_flow)
        return derivatives(parameters, _state_at(parameters, trial, temperature), trial).temperature

    return inputs._replace(coolant_flow=float(brentq(imbalance, 1e-3, 1e3, xtol=1e-12)))


def jacobians(
    parameters: TankParameters, state: TankState, inputs: TankInputs
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Central differences of the balances: (4, 4) by state and (4, 6) by input, per second."""

    def change(move_state: NDArray[np.float64], move_inputs: NDArray[np.float64]) -> NDArray[np.float64]:
        ahead = derivatives(parameters, TankState(*(state + move_state)), TankInputs(*(inputs + move_inputs)))
        behind = derivatives(
            parameters, TankState(*(state - move_state)), TankInputs(*(inputs - move_inputs))
        )
        return np.subtract(ahead, behind)

    small = 1e-5
    no_state, no_inputs = np.zeros(len(state)), np.zeros(len(inputs))
    by_state = [change(small * row, no_inputs) / (2.0 * small) for row in np.eye(len(state))]
    by_inputs = [change(no_state, small * row) / (2.0 * small) for row in np.eye(len(inputs))]
    return np.array(by_state).T, np.array(by_inputs).T
