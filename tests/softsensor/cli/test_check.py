"""``softsensor check`` on published models, on files that describe no soft sensor, and on bad input."""

from __future__ import annotations

import json
from importlib.resources import files
from pathlib import Path

import pytest
from independent.small_unit import MODEL, Outcome, run_command

from plant_models.simulators import reactor_model_path

LIBRARY = Path(str(files("plant_models.library")))

DISTURBANCE = 'sd = 0.08\ntime_constant = "1.5 h"'
TIE = "gain = 14.0"


def check(*arguments: str | Path) -> Outcome:
    return run_command("check", *arguments)


def write(
    folder: Path, tie: str = TIE, disturbance: str = DISTURBANCE, sensor: str = "", estimate: str = ""
) -> Path:
    """The small unit's model with another tie between sensor and estimate, or more keys for one of its tables."""
    changes = {
        TIE: tie,
        DISTURBANCE: disturbance,
        "tolerance = 1.0": f"tolerance = 1.0\n{sensor}",
        'lab = { tag = "AL1", sd = 0.02 }': f'lab = {{ tag = "AL1", sd = 0.02 }}\n{estimate}',
    }
    text = MODEL
    for old, new in changes.items():
        assert text.count(old) == 1
        text = text.replace(old, new)
    path = folder / "model.toml"
    path.write_text(text, encoding="utf-8")
    return path


@pytest.mark.parametrize(
    "path",
    [
        *(LIBRARY / f"{name}.toml" for name in ("wood_berry", "heavy_oil_fractionator", "quadruple_tank")),
        reactor_model_path(),
    ],
    ids=lambda path: path.stem,
)
def test_our_models_are_sound(path: Path) -> None:
    done = check(path, "--json")
    assert done.status == 0, done.out + done.err
    document = json.loads(done.out)
    assert document["sound"] is True
    assert document["solution"]["stabilising"] is True
    assert document["solution"]["residual"] < 1e-12
    assert "Advisory" in document["caution"]


def test_wood_berry_gains_and_dead_times() -> None:
    # Wood & Berry (1973), READ: feed to bottoms 4.9 exp(-3.4 s) / (13.2 s + 1), minutes; one sample is a
    # minute
    document = json.loads(check(LIBRARY / "wood_berry.toml", "--json").out)
    path = next(
        item for item in document["paths"] if item["source"] == "feed flow" and item["target"] == "AY4102"
    )
    assert path["gain"] == pytest.approx(4.9)
    assert path["time_constants"] == [pytest.approx(13.2 * 60.0)]
    assert path["dead_time_samples"] == pytest.approx(3.4)


def test_the_text_says_it_all(tmp_path: Path) -> None:
    done = check(write(tmp_path))
    assert done.status == 0, done.out + done.err
    for words in (
        "R-1: A reactor",
        "FI1 -> TI1",
        "4.2 min",
        "3.3",
        "feed concentration",
        "AY1",
        "reference",
        "Smallest step and slowest drift found within",
        "drift, in",
        "What a fault is taken for",
        "What would change each estimate most",
        "laboratory results twice as often",
        "Riccati residual",
        "Sample time 10 s: follows every path.",
        "Verdict: the sensors add to every estimate.",
        "Advisory only",
    ):
        assert words in done.out, words
    assert "Traceback" not in done.err


def test_no_soft_sensor_is_status_1(tmp_path: Path) -> None:
    # nothing unmeasured reaches both the sensor and the estimate: the sensor's path is a static trifle
    done = check(write(tmp_path, tie="gain = 1e-6"))
    assert done.status == 1
    assert "describes no soft sensor" in " ".join(done.out.split())
    document = check(write(tmp_path, tie="gain = 1e-6"), "--json")
    assert document.status == 1
    assert json.loads(document.out)["sound"] is False


def test_a_walk_absorbs_the_fault_and_is_named(tmp_path: Path) -> None:
    document = json.loads(
        check(write(tmp_path, disturbance="walk_sd = 0.05\ninitial_sd = 0.1"), "--json").out
    )
    (sensor,) = document["sensors"]
    assert sensor["absorbed"] is True
    assert sensor["shift"]["absorbed_by"] == "feed concentration"
    assert sensor["shift"]["settled"] == pytest.approx(0.0, abs=1e-6)
    assert sensor["shift"]["at_once"] > 3.0
    assert sensor["delay"] is None
    assert document["estimates"][0]["sd_without_sensors"] is None
    assert any("absorbed by feed concentration" in line for line in document["warnings"])


def test_offset_on_a_sensor_conflicts_with_finding_its_drift(tmp_path: Path) -> None:
    document = json.loads(check(write(tmp_path, sensor="bias_walk_sd = 0.1"), "--json").out)
    assert document["sensors"][0]["absorbed"] is True
    assert document["sensors"][0]["shift"]["absorbed_by"] == "offset of TI1"
    assert any("conflict" in line for line in document["warnings"])


@pytest.mark.parametrize(("span", "told"), [(1.0, True), (200.0, False)])
def test_a_gate_that_can_never_fire_is_told(tmp_path: Path, span: float, told: bool) -> None:
    """Eight times the sd of the innovation, more than 0.1 degC, against the whole range."""
    path = write(tmp_path)
    text = path.read_text(encoding="utf-8")
    assert text.count("range = [0.0, 200.0]") == 1
    path.write_text(text.replace("[0.0, 200.0]", f"[92.0, {92.0 + span}]"), encoding="utf-8")
    document = json.loads(check(path, "--json").out)
    (sensor,) = document["sensors"]
    assert (8.0 * sensor["shift"]["innovation_sd"] > span) is told
    assert any("TI1: its gate can never fire" in line for line in document["warnings"]) is told


def test_a_narrower_gate_can_fire(tmp_path: Path) -> None:
    path = write(tmp_path, sensor="gate = 2.0")
    text = path.read_text(encoding="utf-8").replace("[0.0, 200.0]", "[92.0, 93.0]")
    path.write_text(text, encoding="utf-8")
    assert "never fire" not in check(path).out


def test_an_estimates_own_offset_leaves_it_a_soft_sensor(tmp_path: Path) -> None:
    done = check(write(tmp_path, estimate="bias_walk_sd = 0.01\nbias_initial_sd = 0.05"), "--json")
    assert done.status == 0
    (estimate,) = json.loads(done.out)["estimates"]
    assert estimate["own_offset"] is True
    assert estimate["sd_with_sensors"] < 0.9 * estimate["sd_without_sensors"]
    assert estimate["lab"]["growing"] is True
    assert estimate["sd_total"] is None


def test_an_sd_without_the_offset_does_not_pass_for_all_of_it(tmp_path: Path) -> None:
    said = check(write(tmp_path, estimate="bias_walk_sd = 0.01\nbias_initial_sd = 0.05")).out
    assert "unbounded without laboratory results" in " ".join(said.split())
    assert "without its own offset" in said
    assert "1 direction without a steady variance" in " ".join(said.split())
    assert "unbounded" not in check(write(tmp_path)).out


def test_gains_and_biases_have_units_and_temperatures_differ_by_kelvins(tmp_path: Path) -> None:
    done = check(write(tmp_path))
    assert "-1.9 K per m3/h" in done.out
    assert "degC" not in done.out
    units = {
        item["target"]: item["gain_unit"]
        for item in json.loads(check(write(tmp_path), "--json").out)["paths"]
    }
    assert units == {"TI1": "K per unit of the disturbance", "AY1": "mol/L per unit of the disturbance"}


def test_an_integrating_gain_is_per_time(tmp_path: Path) -> None:
    path = write(tmp_path)
    more = 'time_constants = ["4.2 min"]\nintegrating = true\ntime_unit = "min"'
    text = path.read_text(encoding="utf-8").replace('time_constants = ["4.2 min"]', more)
    path.write_text(text, encoding="utf-8")
    found = json.loads(check(path, "--json").out)["paths"][0]
    assert (found["gain"], found["gain_unit"]) == (pytest.approx(-1.9 / 60.0), "K per m3/h per s")


def test_what_never_fades_says_so(tmp_path: Path) -> None:
    """Nothing ties the sensor to anything: what the filter could take up of its bias is next to nothing."""
    path = write(tmp_path, tie="gain = 1e-6")
    (sensor,) = json.loads(check(path, "--json").out)["sensors"]
    assert (sensor["shift"]["half_faded"], sensor["shift"]["absorbed_by"]) == (None, None)
    assert sensor["shift"]["settled"] == pytest.approx(sensor["shift"]["at_once"])
    assert "never" in check(path).out


def test_absorbed_where_the_flag_is_hardly_better_than_a_false_one(tmp_path: Path) -> None:
    """A little of the bias stays, more where the disturbance is small: by the first, too little for the shipped test."""
    said = check(write(tmp_path, disturbance='sd = 0.05\ntime_constant = "20 min"'), "--json")
    document = json.loads(said.out)
    (sensor,) = document["sensors"]
    assert 0.02 < sensor["shift"]["settled"] < 0.2
    assert (sensor["absorbed"], sensor["delay"]) == (True, None)
    assert any("more than 10% of the false-flag interval" in line for line in document["warnings"])
    quieter = write(tmp_path, disturbance='sd = 0.02\ntime_constant = "10 min"')
    (quick,) = json.loads(check(quieter, "--json").out)["sensors"]
    assert quick["absorbed"] is False
    assert 0.0 < quick["delay"] < 0.1 * document["false_flag_interval"]


def test_the_sheet_in_json(tmp_path: Path) -> None:
    document = json.loads(check(LIBRARY / "wood_berry.toml", "--json").out)
    assert document["horizons"] == [3600.0, 28_800.0, 86_400.0, 604_800.0]
    (line,) = document["sensors"]
    assert len(line["references"]) == len(line["intervals"])
    for sizes in (line["found"]["steps"], line["found"]["ramps"]):
        assert len(sizes) == 4
        assert sizes == sorted(sizes, reverse=True)
    step = next(fault for fault in line["told"] if fault["shape"] == "step")
    assert step["size"] == line["shift"]["bias"]
    assert step["within"] == line["found"]["tolerance_within"]
    drift = next(fault for fault in line["told"] if fault["shape"] == "ramp")
    assert drift["size"] == pytest.approx(line["found"]["ramps"][2])
    assert drift["named"] < 0.1
    assert drift["alike"]["FI4101"] > 0.5
    (mend,) = document["mends"]
    assert (mend["tag"], mend["beside"], mend["whole"]) == ("AI4101", "AI4101", False)
    assert mend["then"]["found"]["steps"][2] < line["found"]["steps"][2]
    (prospects,) = document["prospects"]
    assert prospects["lab_interval"] == 86_400.0
    assert {change["what"]: change["loses"] for change in prospects["changes"]} == {
        "AI4101 lost": True,
        "a second AI4101": False,
        "laboratory results twice as often": False,
    }


def test_the_laboratory_interval_is_an_option_and_must_be_a_time(tmp_path: Path) -> None:
    path = write(tmp_path, estimate="bias_walk_sd = 0.01\nbias_initial_sd = 0.05")
    seldom, often = (
        json.loads(check(path, "--json", "--lab-interval", time).out)["prospects"][0]
        for time in ("24 h", "6 h")
    )
    assert (seldom["lab_interval"], often["lab_interval"]) == (86_400.0, 21_600.0)
    assert often["sd"] < 0.8 * seldom["sd"]
    for bad in ("6", "0 s", "now"):
        done = check(path, "--lab-interval", bad)
        assert done.status == 2
        assert done.out == ""
        assert "--lab-interval: expected a time" in done.err


def test_bad_input_is_status_2_with_lines(tmp_path: Path) -> None:
    path = write(tmp_path)
    path.write_text(path.read_text(encoding="utf-8").replace(TIE, "gain = nan"), encoding="utf-8")
    done = check(path, "--json")
    assert done.status == 2
    assert done.out == ""
    assert "model.toml" in done.err
    assert "gain" in done.err
    assert "Traceback" not in done.err
    missing = check(tmp_path / "none.toml")
    assert missing.status == 2
    assert "Traceback" not in missing.err
