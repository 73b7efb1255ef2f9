"""Published models as model files; where their numbers come from is in PROVENANCE.md beside them."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

from plant_models.errors import Problem
from plant_models.quoting import quoted, suggestion

_ENDING = ".toml"


def published_models() -> tuple[str, ...]:
    """The names of the published models, in alphabetical order.

    >>> published_models()
    ('heavy_oil_fractionator', 'quadruple_tank', 'wood_berry')
    """
    files = resources.files(__name__).iterdir()
    return tuple(sorted(file.name.removesuffix(_ENDING) for file in files if file.name.endswith(_ENDING)))


def published_model_path(name: str) -> Path:
    """The model file of a published model.

    :raises Problem: there is no such model; says which there are.
    """
    known = published_models()
    if name not in known:
        found = f"got {quoted(name)}{suggestion(name, known)}"
        raise Problem(f"expected a published model, one of {', '.join(known)}; {found}")
    return Path(str(resources.files(__name__).joinpath(name + _ENDING)))
