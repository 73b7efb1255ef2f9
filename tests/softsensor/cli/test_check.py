"""``softsensor check`` on published models, on files that describe no soft sensor, and on bad input."""

from __future__ import annotations

import json
import subprocess
import sys
from importlib.resources import files
from pathlib import Path

import pytest

from plant_models.simulators import reactor_model_path

LIBRARY = Path(str(files("plant_models.library")))

FILE = """
[unit]
name = "R-1"
title = "A reactor"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15
tolerance = 1.0
{sensor}

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
lab = {{ tag = "AL1", sd = 0.02 }}
{estimate}

[[disturbance]]
name = "feed concentration"
{disturbance}

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = -1.9
time_constants = ["4.2 min", "0.6 min"]
dead_time = "0.55 min"

[[transfer_function]]
from = "FI1"
to = "AY1"
gain = 0.1
time_constants = ["8 min"]

[[transfer_function]]
from = "feed concentration"
to = "AY1"
gain = 1.0
time_constants = ["8 min"]
{tie}
"""

TIE = """
[[transfer_function]]
from = "feed concentration"
to = "TI1"
gain = 12.0
time_constants = ["6 min"]
"""


def run(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", "from softsensor.cli.main import main; main()", "check", *arguments],
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=300,
        check=False,
    )


def write(
    folder: Path,
    tie: str = TIE,
    disturbance: str = 'sd = 0.08\ntime_constant = "1.5 h"',
    sensor: str = "",
    estimate: str = "",
) -> str:
    path = folder / "model.toml"
    text = FILE.format(tie=tie, disturbance=disturbance, sensor=sensor, estimate=estimate)
    path.write_text(text, encoding="utf-8")
    return str(path)


@pytest.mark.parametrize(
    "path",
    [
        *(LIBRARY / f"{name}.toml" for name in ("wood_berry", "heavy_oil_fractionator", "quadruple_tank")),
        reactor_model_path(),
    ],
    ids=lambda path: path.stem,
)
def test_our_models_are_sound(path: Path) -> None:
    done = run(str(path), "--json")
    assert done.returncode == 0, done.stdout + done.stderr
    document = json.loads(done.stdout)
    assert document["sound"] is True
    assert document["solution"]["stabilising"] is True
    assert document["solution"]["residual"] < 1e-12
    assert "Advisory" in document["caution"]


def test_wood_berry_gains_and_dead_times() -> None:
    # Wood & Berry (1973), READ: feed to bottoms 4.9 exp(-3.4 s) / (13.2 s + 1), minutes; one sample is a
    # minute
    document = json.loads(run(str(LIBRARY / "wood_berry.toml"), "--json").stdout)
    path = next(
        item for item in document["paths"] if item["source"] == "feed flow" and item["target"] == "AY4102"
    )
    assert path["gain"] == pytest.approx(4.9)
    assert path["time_constants"] == [pytest.approx(13.2 * 60.0)]
    assert path["dead_time_samples"] == pytest.approx(3.4)


def test_the_text_says_it_all(tmp_path: Path) -> None:
    done = run(write(tmp_path))
    assert done.returncode == 0, done.stdout + done.stderr
    for words in (
        "R-1: A reactor",
        "FI1 -> TI1",
        "4.2 min, 36 s",
        "3.3",
        "feed concentration",
        "AY1",
        "reference",
        "Riccati residual",
        "Sample time 10 s: follows every path.",
        "Verdict: the sensors add to every estimate.",
        "Advisory only",
    ):
        assert words in done.stdout, words
    assert "Traceback" not in done.stderr


def test_no_soft_sensor_is_status_1(tmp_path: Path) -> None:
    # nothing unmeasured reaches both the sensor and the estimate: the sensor's path is a static trifle
    done = run(write(tmp_path, tie=TIE.replace("12.0", "1e-6")))
    assert done.returncode == 1
    assert "describes no soft sensor" in " ".join(done.stdout.split())
    document = run(write(tmp_path, tie=TIE.replace("12.0", "1e-6")), "--json")
    assert document.returncode == 1
    assert json.loads(document.stdout)["sound"] is False


def test_a_walk_absorbs_the_fault_and_is_named(tmp_path: Path) -> None:
    document = json.loads(
        run(write(tmp_path, disturbance="walk_sd = 0.05\ninitial_sd = 0.1"), "--json").stdout
    )
    (sensor,) = document["sensors"]
    assert sensor["shift"]["absorbed"] is True
    assert sensor["shift"]["absorbed_by"] == "feed concentration"
    assert sensor["shift"]["settled"] == pytest.approx(0.0, abs=1e-6)
    assert sensor["shift"]["at_once"] > 3.0
    assert sensor["delay"] is None
    assert document["estimates"][0]["sd_without_sensors"] is None
    assert any("absorbed by feed concentration" in line for line in document["warnings"])


def test_offset_on_a_sensor_conflicts_with_finding_its_drift(tmp_path: Path) -> None:
    document = json.loads(run(write(tmp_path, sensor="bias_walk_sd = 0.1"), "--json").stdout)
    assert document["sensors"][0]["shift"]["absorbed"] is True
    assert document["sensors"][0]["shift"]["absorbed_by"] == "offset of TI1"
    assert any("conflict" in line for line in document["warnings"])


def test_an_estimates_own_offset_leaves_it_a_soft_sensor(tmp_path: Path) -> None:
    done = run(write(tmp_path, estimate="bias_walk_sd = 0.01\nbias_initial_sd = 0.05"), "--json")
    assert done.returncode == 0
    (estimate,) = json.loads(done.stdout)["estimates"]
    assert estimate["own_offset"] is True
    assert estimate["sd_with_sensors"] < 0.9 * estimate["sd_without_sensors"]
    assert estimate["lab"]["growing"] is True


def test_bad_input_is_status_2_with_lines(tmp_path: Path) -> None:
    path = Path(write(tmp_path))
    path.write_text(path.read_text(encoding="utf-8").replace("gain = 12.0", "gain = nan"), encoding="utf-8")
    done = run(str(path), "--json")
    assert done.returncode == 2
    assert done.stdout == ""
    assert "model.toml" in done.stderr
    assert "gain" in done.stderr
    assert "Traceback" not in done.stderr
    missing = run(str(tmp_path / "none.toml"))
    assert missing.returncode == 2
    assert "Traceback" not in missing.stderr
