"""Nonlinear first-principles plants to try the estimator on."""

from __future__ import annotations

from importlib import resources
from pathlib import Path


def reactor_model_path() -> Path:
    """The reactor's model file, as the step tests in plant_models.identification wrote it."""
    return Path(str(resources.files(__name__).joinpath("jacketed_reactor.toml")))
