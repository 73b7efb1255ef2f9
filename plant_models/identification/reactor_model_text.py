"""The reactor's model file as text: limits and noise chosen here, transfer functions from the fits."""

from __future__ import annotations

from collections.abc import Sequence

from plant_models.identification.step_test import FittedPair, FittedPath
from plant_models.simulators.stirred_tank import TankInputs, TankParameters, steady_states

HEADER = """\
# Jacketed stirred-tank reactor R-210, a scenario of our own.
#
# Written by python -m plant_models.identification.reactor_step_tests; change that script, not this file.
# Transfer functions: fitted by least squares to open-loop step tests on the simulator plant_models.simulators
# (controller in manual; each level held for 4 h: up, down past the start, back), with the instruments' noise.
#   FI2103, TI2105, FI2104   the flow, the preheat and the coolant were stepped
#   feed concentration       feed of known composition was stepped in
#   heat transfer            the simulator's heat transfer coefficient, in percent of the clean jacket's
# AY2101, the product's concentration, was read from an analyser on loan (sd 0.005 mol/L) during the tests.
# TI2101A and TI2101B stand in one liquid: one fit, to their mean, serves both.
# 95 % intervals of the gains and the misfit stand above each path; the misfit includes the noise.
# noise_sd of TI2102: a little above the transmitter's own, for what the linear model leaves out.
"""

SECTIONS = """\
[unit]
name = "R-210"
title = "Jacketed stirred-tank reactor"
sample_time = "10 s"

[[input]]
tag = "FI2103"
unit = "m3/h"
operating_point = {feed_flow:.5g}
range = [0.0, 20.0]
validated_range = [10.0, 13.0]

[[input]]
tag = "TI2105"
unit = "degC"
operating_point = {feed_temperature:.5g}
range = [0.0, 150.0]
validated_range = [84.0, 92.0]

[[input]]
tag = "FI2104"
unit = "m3/h"
operating_point = {coolant_flow:.5g}
range = [0.0, 25.0]
validated_range = [8.0, 15.0]

[[sensor]]
tag = "TI2101A"
unit = "degC"
operating_point = {temperature:.5g}
range = [0.0, 200.0]
noise_sd = 0.25
tolerance = 0.6

[[sensor]]
tag = "TI2101B"
unit = "degC"
operating_point = {temperature:.5g}
range = [0.0, 200.0]
noise_sd = 0.25
tolerance = 0.6

[[sensor]]
tag = "TI2102"
unit = "degC"
operating_point = {jacket:.5g}
range = [0.0, 150.0]
noise_sd = 0.045
tolerance = 0.4

[[estimate]]
tag = "AY2101"
unit = "mol/L"
operating_point = {product:.5g}
range = [0.0, 4.0]
validated_range = [1.05, 1.60]
bias_walk_sd = 0.0045
bias_initial_sd = 0.006
lab = {{ tag = "AL2101", sd = 0.01 }}

[[disturbance]]
name = "feed concentration"
sd = 0.07
time_constant = "1.5 h"

[[disturbance]]
name = "heat transfer"
sd = 0.5
time_constant = "72 h"

[fault_tests]
false_flag_interval = "30 d"
leave_out_isolated = true
"""


def _numbers(values: Sequence[float]) -> str:
    return "[" + ", ".join(f"{value:.5g}" for value in values) + "]"


def _times(values: Sequence[float]) -> str:
    return "[" + ", ".join(f'"{value:.4g} s"' for value in values) + "]"


def _dynamics(path: FittedPath) -> list[str]:
    """Gain and dynamics: factored where every pole and zero is real, else polynomials in minutes."""
    constants, leads = path.time_constants, path.lead_times
    if constants is not None and leads is not None:
        lines = [f"gain = {path.gain:.5g}", f"time_constants = {_times(constants)}"]
        return lines + ([f"lead_times = {_times(leads)}"] if leads else [])
    numerator, denominator = (
        [
            coefficient / 60.0**power
            for power, coefficient in zip(range(len(row) - 1, -1, -1), row, strict=True)
        ]
        for row in (path.gain * path.numerator, path.denominator)
    )
    return [
        f"numerator = {_numbers(numerator)}",
        f"denominator = {_numbers(denominator)}",
        'time_unit = "min"',
    ]


def path_text(pair: FittedPair) -> str:
    """The [[transfer_function]] tables of one fit: two where both thermocouples share it."""
    path = pair.path
    lower, upper = path.confidence_interval("gain")
    comment = (
        f"# gain {path.gain:.4g} (95 %: {lower:.4g} to {upper:.4g}); rms misfit {path.rms_misfit:.2g}, "
        f"{100.0 * path.rms_misfit / path.rms_response:.0f} % of the response, "
        f"{100.0 * path.rms_misfit / pair.noise_sd:.0f} % of the noise"
    )
    tables = []
    for target in pair.target.split(" and "):
        lines = [
            comment,
            "[[transfer_function]]",
            f'from = "{pair.source}"',
            f'to = "{target}"',
            *_dynamics(path),
        ]
        if path.dead_time >= 0.05:
            lines.append(f'dead_time = "{path.dead_time:.1f} s"')
        tables.append("\n".join(lines) + "\n")
    return "\n".join(tables)


def model_text(pairs: Sequence[FittedPair], design: TankInputs) -> str:
    """The whole file; the operating point is the steady state of the design inputs."""
    state = steady_states(TankParameters(), design)[-1]
    sections = SECTIONS.format(**design._asdict(), **state._asdict())
    return "\n".join([HEADER, sections, *(path_text(pair) for pair in pairs)])
