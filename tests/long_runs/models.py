"""The three models of the long runs."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache
from pathlib import Path

from plant_models.building import build_plant_model
from plant_models.library import published_model_path
from plant_models.model_file import read_model_file
from plant_models.simulators import reactor_model_path
from softsensor.cycle import UnitDesign
from softsensor.unit_design import design_unit

FRACTIONATOR, COLUMN, REACTOR = "heavy_oil_fractionator", "wood_berry", "demo reactor"
MODELS = (FRACTIONATOR, COLUMN, REACTOR)


def path_of(name: str) -> Path:
    """Where a model's file is."""
    return reactor_model_path() if name == REACTOR else published_model_path(name)


@lru_cache(maxsize=4)
def design_named(name: str) -> UnitDesign:
    """Everything a unit of this model runs on; no sensor is left out, so that all of them are watched all the time."""
    spec = read_model_file(path_of(name))
    return design_unit(build_plant_model(replace(spec, leave_out_isolated=False)))
