"""Imports go one way: the rule of DEVELOPERS.md, read from the source of every module.

Every import counts, inside functions and under TYPE_CHECKING too. Of names that are built at run time only the
literal ones are seen: ``import_module("connectors.files")``.
"""

from __future__ import annotations

import ast
from collections.abc import Iterator, Mapping
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
PACKAGES = ("plant_models", "connectors", "softsensor", "migrations")

LAYERS: tuple[tuple[str, ...], ...] = (
    ("readings_of_cycle", "errors"),
    ("estimation",),
    ("detection",),
    (
        "block_arrays",
        "layout",
        "filter_steps",
        "compiled_cycle",
        "cycle",
        "cycle_results",
        "published",
        "unit_design",
    ),
    ("alarms", "records"),
    ("service", "commissioning"),
    ("web",),
    ("recorded_data", "opcua_sink", "composition"),
    ("demonstration",),
    ("cli", "__main__"),
)
"""Rooms of softsensor, low to high: each imports from its own layer and those below."""

FREE = ("handbook",)
"""Holds text and no code: imports nothing of ours, and nobody's layer depends on it."""
SPOKEN_BY_ALL = ("readings", "events", "history", "lab_results", "errors")
"""Modules of connectors that every room may import; the concrete ones are for a few."""
KNOW_CONCRETE_CONNECTORS = ("cli", "composition", "opcua_sink", "recorded_data", "demonstration")

INIT = ".__init__"
Modules = Mapping[str, str]
"""Source text by dotted file name, ``softsensor.web.__init__`` for a package's own."""


def source_of_the_house(root: Path = ROOT) -> dict[str, str]:
    """Every module of our packages with its source."""
    paths = [path for package in PACKAGES for path in sorted((root / package).rglob("*.py"))]
    return {
        ".".join(path.relative_to(root).with_suffix("").parts): path.read_text(encoding="utf-8")
        for path in paths
    }


def arrows(modules: Modules) -> list[tuple[str, str]]:
    """Every import as (importing module, imported module); ``from a import b`` is a.b where that is a module."""
    known = {file.removesuffix(INIT) for file in modules}
    return [
        (file.removesuffix(INIT), target)
        for file, source in modules.items()
        for target in imported(file, source, known)
    ]


def imported(file: str, source: str, known: set[str]) -> Iterator[str]:
    """Dotted names that a module imports."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = _absolute(file, node)
            for alias in node.names:
                inner = f"{base}.{alias.name}"
                if not alias.name.startswith(
                    "__"
                ):  # such as __version__: a fact about the package, no module
                    yield inner if inner in known else base
        elif isinstance(node, ast.Call) and node.args and _called(node) in ("import_module", "__import__"):
            target = node.args[0]
            if isinstance(target, ast.Constant) and isinstance(target.value, str):
                yield target.value


def _absolute(file: str, node: ast.ImportFrom) -> str:
    if not node.level:
        return node.module or ""
    up = file.split(".")[: -node.level]
    return ".".join([*up, *([node.module] if node.module else [])])


def _called(node: ast.Call) -> str:
    function = node.func
    return function.attr if isinstance(function, ast.Attribute) else getattr(function, "id", "")


def room_of(module: str) -> str:
    """The room of softsensor that a module belongs to; the package's own ``__init__`` is the front door, "softsensor"."""
    parts = module.split(".")
    return parts[1] if len(parts) > 1 else parts[0]


def layer_of(room: str) -> int | None:
    """Height of a room of softsensor, None for one that nobody has given a place."""
    return next((height for height, rooms in enumerate(LAYERS) if room in rooms), None)


def objection(module: str, target: str) -> str | None:
    """Why a module may not import another; None where it may, or where the other is not ours."""
    package, other = module.split(".")[0], target.split(".")[0]
    if other not in PACKAGES:
        return None
    if package == other:
        return _inside_softsensor(module, target) if package == "softsensor" else None
    if package == "plant_models":
        return "plant_models imports neither connectors nor softsensor"
    if package == "connectors":
        return None if other == "plant_models" else "connectors imports nothing of softsensor"
    if package == "migrations":
        return None if target.startswith("softsensor.records") else "migrations import the records only"
    return _out_of_softsensor(module, target, other)


def _inside_softsensor(module: str, target: str) -> str | None:
    own, other = room_of(module), room_of(target)
    if own == "softsensor":
        return "the front door opens to every room but the command line" if other == "cli" else None
    if other == "softsensor":
        return None if own == "cli" else "only the command line goes through the front door"
    if own == other:
        return None
    if own in FREE:
        return f"{own} imports nothing"
    own_layer, other_layer = layer_of(own), layer_of(other)
    if own_layer is None or (other_layer is None and other not in FREE):
        return f"{own if own_layer is None else other} has no place among the layers"
    if other_layer is not None and other_layer > own_layer:
        return f"{own} lies below {other}"
    return None


def _out_of_softsensor(module: str, target: str, other: str) -> str | None:
    if other != "connectors" or room_of(module) in KNOW_CONCRETE_CONNECTORS:
        return None
    if target.split(".")[1:2] and target.split(".")[1] in SPOKEN_BY_ALL:
        return None
    return f"only {', '.join(KNOW_CONCRETE_CONNECTORS)} know concrete connectors"


def violations(modules: Modules) -> list[str]:
    """Every import against the rule, as ``module imports target: why``."""
    found = arrows(modules)
    objections = {
        f"{module} imports {target}: {why}"
        for module, target in found
        if (why := objection(module, target)) is not None
    }
    return sorted(objections) + _circles(found)


def _circles(found: list[tuple[str, str]]) -> list[str]:
    """Two rooms of one layer that import each other: there is no arrow left between them."""
    ours = {
        (room_of(module), room_of(target))
        for module, target in found
        if module.startswith("softsensor.") and target.startswith("softsensor.")
    }
    pairs = {(one, other) for one, other in ours if one < other and (other, one) in ours}
    return sorted(
        f"{one} and {other} import each other" for one, other in pairs if layer_of(one) == layer_of(other)
    )


def test_every_import_of_the_house_goes_one_way() -> None:
    assert violations(source_of_the_house()) == []


def test_every_room_has_a_place_and_every_place_that_is_taken_a_room() -> None:
    files = {file.removesuffix(INIT) for file in source_of_the_house()}
    rooms = {room_of(name) for name in files if name.startswith("softsensor.")}
    placed = {room for layer in LAYERS for room in layer} | set(FREE)

    assert rooms - placed == set()
    assert placed - rooms == set()


FILES = """
plant_models.__init__ plant_models.units
connectors.__init__ connectors.readings connectors.files connectors.opcua.__init__ connectors.opcua.source
softsensor.__init__ softsensor.errors softsensor.estimation.__init__ softsensor.estimation.kernel
softsensor.detection.__init__ softsensor.detection.flags softsensor.cycle softsensor.unit_design
softsensor.alarms.__init__ softsensor.alarms.sensor_status softsensor.records.__init__ softsensor.records.engine
softsensor.records.tables softsensor.service.__init__ softsensor.service.live softsensor.web.__init__
softsensor.web.app softsensor.recorded_data softsensor.composition softsensor.cli.__init__ softsensor.cli.main
softsensor.handbook.__init__ migrations.__init__ migrations.env
"""
HOUSE = dict.fromkeys(FILES.split(), "")
"""A house of empty modules, into which one import is put at a time."""

AGAINST_THE_RULE = [
    ("plant_models.units", "import connectors.readings", "plant_models imports neither"),
    ("plant_models.units", "from softsensor.errors import RecordsError", "plant_models imports neither"),
    ("connectors.files", "from softsensor import cycle", "connectors imports nothing of softsensor"),
    ("connectors.opcua.source", "import softsensor", "connectors imports nothing of softsensor"),
    ("softsensor.errors", "from softsensor.estimation.kernel import Kernel", "errors lies below estimation"),
    ("softsensor.estimation.kernel", "import softsensor.detection.flags", "estimation lies below detection"),
    ("softsensor.detection.flags", "from softsensor import cycle", "detection lies below cycle"),
    ("softsensor.detection.flags", "from .. import cycle", "detection lies below cycle"),
    ("softsensor.cycle", "from softsensor.records import engine", "cycle lies below records"),
    ("softsensor.cycle", "from .records.engine import Database", "cycle lies below records"),
    ("softsensor.records.__init__", "from ..service import live", "records lies below service"),
    (
        "softsensor.records.engine",
        "def f():\n    from softsensor.service import live",
        "records lies below service",
    ),
    (
        "softsensor.alarms.sensor_status",
        "from typing import TYPE_CHECKING\nif TYPE_CHECKING:\n    import softsensor.web.app",
        "alarms lies below web",
    ),
    ("softsensor.service.live", "from softsensor.web.app import create_app", "service lies below web"),
    (
        "softsensor.service.live",
        "from softsensor.recorded_data import replay",
        "service lies below recorded_data",
    ),
    ("softsensor.service.live", "from softsensor import load_model", "only the command line goes through"),
    ("softsensor.service.live", "import connectors.opcua.source", "know concrete connectors"),
    ("softsensor.service.live", "from connectors import opcua", "know concrete connectors"),
    ("softsensor.service.live", "from connectors import *", "know concrete connectors"),
    ("softsensor.web.app", "from connectors.files import read_history", "know concrete connectors"),
    ("softsensor.web.app", "import softsensor.composition", "web lies below composition"),
    ("softsensor.composition", "from softsensor.cli import main", "composition lies below cli"),
    ("softsensor.__init__", "import softsensor.cli.main", "every room but the command line"),
    ("softsensor.handbook.__init__", "import softsensor.errors", "handbook imports nothing"),
    (
        "softsensor.web.app",
        "import importlib\nimportlib.import_module('softsensor.cli.main')",
        "web lies below cli",
    ),
    ("softsensor.attic", "import softsensor.errors", "attic has no place among the layers"),
    ("softsensor.web.app", "import softsensor.attic", "attic has no place among the layers"),
    ("migrations.env", "from softsensor.service import live", "migrations import the records only"),
    ("migrations.env", "import connectors.files", "migrations import the records only"),
]


@pytest.mark.parametrize(("file", "source", "why"), AGAINST_THE_RULE)
def test_an_arrow_that_runs_back_is_caught(file: str, source: str, why: str) -> None:
    found = violations({**HOUSE, file: source})

    assert len(found) == 1
    assert found[0].startswith(f"{file.removesuffix(INIT)} imports ")
    assert why in found[0]


ALLOWED = [
    ("plant_models.units", "import pint\nfrom plant_models import library"),
    (
        "connectors.files",
        "from plant_models.units import parse_unit\nfrom connectors.readings import Reading",
    ),
    (
        "softsensor.unit_design",
        "from plant_models.units import parse_unit\nimport softsensor.detection.flags",
    ),
    ("softsensor.cycle", "from softsensor.unit_design import design_unit"),
    ("softsensor.service.live", "from connectors.readings import Reading\nimport softsensor.cycle"),
    ("softsensor.recorded_data", "from connectors.files import read_history"),
    ("softsensor.composition", "import connectors.opcua.source\nimport softsensor.web.app"),
    (
        "softsensor.cli.main",
        "from connectors.opcua import source\nimport softsensor\nimport softsensor.composition",
    ),
    ("softsensor.web.app", "from softsensor import __version__"),
    ("softsensor.__init__", "from softsensor.recorded_data import replay"),
    ("softsensor.web.app", "import softsensor.handbook"),
    ("migrations.env", "from softsensor.records.tables import metadata"),
]


@pytest.mark.parametrize(("file", "source"), ALLOWED)
def test_an_arrow_that_runs_down_is_not_objected_to(file: str, source: str) -> None:
    assert violations({**HOUSE, file: source}) == []


def test_two_rooms_of_one_layer_may_not_import_each_other() -> None:
    house = {
        **HOUSE,
        "softsensor.alarms.sensor_status": "import softsensor.records.engine",
        "softsensor.records.engine": "import softsensor.alarms.sensor_status",
    }

    assert violations(house) == ["alarms and records import each other"]


def test_the_files_of_a_house_are_found_and_read(tmp_path: Path) -> None:
    room = tmp_path / "softsensor" / "estimation"
    room.mkdir(parents=True)
    (tmp_path / "softsensor" / "__init__.py").write_text("")
    (room / "__init__.py").write_text("from ..web import app\n")
    (tmp_path / "softsensor" / "web").mkdir()
    (tmp_path / "softsensor" / "web" / "app.py").write_text("")

    assert violations(source_of_the_house(tmp_path)) == [
        "softsensor.estimation imports softsensor.web.app: estimation lies below web"
    ]
