"""The wheel holds all that the program needs, and works where the source tree is not.

It is built here, offline, from a copy of the tree, by the build backend that pyproject.toml names.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
import tomllib
from email.parser import Parser
from pathlib import Path
from zipfile import ZipFile

import pytest

ROOT = Path(__file__).parents[1]
PACKAGES = ("softsensor", "plant_models", "connectors", "migrations")
OTHER_SOURCES = ("pyproject.toml", "README.md", "LICENSE")
LEFTOVERS = shutil.ignore_patterns("__pycache__", "*.nbi", "*.nbc", "*.pyc")
CHAPTERS = (
    "01-what-it-is.md",
    "02-first-hour.md",
    "03-model-file.md",
    "04-method.md",
    "05-files-and-results.md",
    "06-records.md",
    "07-tuning.md",
)

ELSEWHERE = """
import json
from importlib import resources
from pathlib import Path
import connectors, migrations, plant_models, softsensor
from plant_models.library import published_model_path, published_models
from softsensor.records.audit import verify
from softsensor.records.engine import open_database
from softsensor.records.upgrade import upgrade_database

url = "sqlite:///" + (Path.cwd() / "records.db").as_posix()
applied = upgrade_database(url)
with open_database(url) as database:
    whole = verify(database).whole
models = {name: softsensor.load_model(published_model_path(name)).digest for name in published_models()}
homes = [str(Path(p.__file__).parent.parent) for p in (connectors, migrations, plant_models, softsensor)]
chapters = sorted(f.name for f in resources.files("softsensor.handbook").iterdir() if f.name.endswith(".md"))
print(json.dumps({"homes": homes, "applied": applied, "whole": whole, "models": models, "chapters": chapters}))
"""


@pytest.fixture(scope="session")
def wheel(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A wheel of this tree."""
    tree = tmp_path_factory.mktemp("tree")
    for package in PACKAGES:
        shutil.copytree(ROOT / package, tree / package, ignore=LEFTOVERS)
    for name in OTHER_SOURCES:
        shutil.copy(ROOT / name, tree / name)
    backend = tomllib.loads((ROOT / "pyproject.toml").read_text())["build-system"]["build-backend"]
    build = f"import {backend} as backend; backend.build_wheel('wheel')"
    (tree / "wheel").mkdir()
    done = subprocess.run(
        [sys.executable, "-c", build], cwd=tree, capture_output=True, text=True, timeout=300, check=False
    )
    assert done.returncode == 0, done.stdout[-3000:] + done.stderr[-3000:]
    (built,) = (tree / "wheel").glob("*.whl")
    return built


@pytest.fixture(scope="session")
def names(wheel: Path) -> frozenset[str]:
    """What lies in the wheel, as paths with slashes."""
    with ZipFile(wheel) as archive:
        return frozenset(archive.namelist())


@pytest.fixture(scope="session")
def unpacked(wheel: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The wheel's content in a folder of its own."""
    folder = tmp_path_factory.mktemp("elsewhere")
    with ZipFile(wheel) as archive:
        archive.extractall(folder)
    return folder


def test_the_wheel_runs_on_any_machine_with_python_3(wheel: Path) -> None:
    assert wheel.name.endswith("-py3-none-any.whl")


def test_every_file_of_the_packages_is_in_the_wheel(wheel: Path, names: frozenset[str]) -> None:
    tree = wheel.parents[1]
    files = {
        path.relative_to(tree).as_posix()
        for package in PACKAGES
        for path in (tree / package).rglob("*")
        if path.is_file()
    }

    assert len(files) > 100
    assert files - names == set()


def test_nothing_else_is_in_the_wheel(names: frozenset[str]) -> None:
    tops = {name.split("/")[0] for name in names}

    assert {top for top in tops if not top.endswith(".dist-info")} == set(PACKAGES)
    assert not [name for name in names if "__pycache__" in name or "/tests/" in name]


@pytest.mark.parametrize("chapter", CHAPTERS)
def test_the_handbook_is_in_the_wheel(names: frozenset[str], chapter: str) -> None:
    assert f"softsensor/handbook/{chapter}" in names


@pytest.mark.parametrize(
    ("folder", "ending", "least"),
    [
        ("migrations/versions/", ".py", 2),
        ("plant_models/library/", ".toml", 3),
        ("plant_models/library/", "PROVENANCE.md", 1),
        ("softsensor/web/templates/", ".html", 1),
        ("softsensor/web/static/", ".js", 1),
        ("softsensor/web/static/", ".css", 1),
    ],
)
def test_data_files_are_in_the_wheel(names: frozenset[str], folder: str, ending: str, least: int) -> None:
    assert len([name for name in names if name.startswith(folder) and name.endswith(ending)]) >= least


def test_the_wheel_says_what_it_is(wheel: Path, names: frozenset[str]) -> None:
    (folder,) = {name.split("/")[0] for name in names if ".dist-info/" in name}
    with ZipFile(wheel) as archive:
        about = Parser().parsestr(archive.read(f"{folder}/METADATA").decode("utf-8"))
        commands = archive.read(f"{folder}/entry_points.txt").decode("utf-8")

    assert about["Name"] == "softsensor"
    assert about["Requires-Python"] == ">=3.11"
    assert about["License-Expression"] == "MIT"
    assert f"{folder}/licenses/LICENSE" in names
    assert "softsensor = softsensor.cli.main:main" in commands
    assert "not a safety function" in str(about.get_payload())


def run_elsewhere(unpacked: Path, folder: Path, *arguments: str) -> subprocess.CompletedProcess[str]:
    """Python in another folder, with the wheel's content ahead of anything else of that name."""
    return subprocess.run(
        [sys.executable, *arguments],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(unpacked), "PYTHONUTF8": "1"},
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=300,
        check=False,
    )


def test_the_wheel_works_without_the_source_tree(unpacked: Path, tmp_path: Path) -> None:
    done = run_elsewhere(unpacked, tmp_path, "-c", ELSEWHERE)

    assert done.returncode == 0, done.stderr
    found = json.loads(done.stdout)
    assert {Path(home).resolve() for home in found["homes"]} == {unpacked.resolve()}
    assert found["applied"]
    assert found["whole"] is True
    assert {"heavy_oil_fractionator", "quadruple_tank", "wood_berry"} <= set(found["models"])
    assert set(CHAPTERS) <= set(found["chapters"])


@pytest.mark.parametrize("command", ["demo", "check", "replay", "run", "db", "audit"])
def test_the_command_line_of_the_wheel_explains_each_command(
    unpacked: Path, tmp_path: Path, command: str
) -> None:
    done = run_elsewhere(unpacked, tmp_path, "-m", "softsensor.cli.main", command, "--help")

    assert (done.returncode, done.stderr) == (0, "")
    assert command in done.stdout


@pytest.mark.parametrize("words", [["nonsense"], ["check"], ["replay", "m.toml", "h.csv", "--nonsense"]])
def test_a_wrong_command_line_ends_with_status_2_and_no_traceback(
    unpacked: Path, tmp_path: Path, words: list[str]
) -> None:
    done = run_elsewhere(unpacked, tmp_path, "-m", "softsensor.cli.main", *words)

    assert done.returncode == 2
    assert done.stderr
    assert "Traceback" not in done.stderr
