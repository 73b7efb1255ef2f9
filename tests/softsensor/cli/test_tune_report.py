"""The page of a tuning: the numbers of the JSON document, the pictures, the refusals, on one page without a script."""

from __future__ import annotations

import html
import json
import re
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest
from independent.recorded_runs import lab_frame, record

from plant_models.model_file import parse_model_text
from plant_models.number_text import plain
from softsensor.service.model_report import CAUTION
from softsensor.web import tuning_page

MODEL = """
[unit]
name = "C-1"
title = "A <column>"
sample_time = "1 min"

[[input]]
tag = "FI1"
unit = "kg/h"
operating_point = 10.0
range = [0.0, 20.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 80.0
range = [0.0, 200.0]
noise_sd = 0.2
tolerance = 1.0

[[estimate]]
tag = "AY1"
unit = "mol%"
operating_point = 5.0
range = [-100.0, 100.0]
lab = { tag = "AL1", sd = 0.1 }

[[disturbance]]
name = "feed"
sd = 0.5
time_constant = "30 min"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = 2.0
time_constants = ["5 min"]

[[transfer_function]]
from = "feed"
to = "TI1"
gain = 1.0
time_constants = ["4 min"]

[[transfer_function]]
from = "feed"
to = "AY1"
gain = 0.8
time_constants = ["6 min"]
"""
SECOND = """
[[disturbance]]
name = "steam"
sd = 0.5
time_constant = "30 min"

[[transfer_function]]
from = "steam"
to = "TI1"
gain = -2.0
time_constants = ["4 min"]
"""
WRONG = MODEL.replace("noise_sd = 0.2", "noise_sd = 0.1")
"""The file that is tuned; MODEL is the truth."""


@pytest.fixture(scope="module")
def plant(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("plant")
    (folder / "model.toml").write_text(WRONG, encoding="utf-8")
    (folder / "two.toml").write_text(WRONG + SECOND, encoding="utf-8")
    spec = parse_model_text(MODEL, "truth")
    run = record(spec, 1600, 11, gaps=0.02, move=0.3)
    run.history().to_csv(folder / "history.csv", index=False)
    error = np.random.default_rng(5).normal(0.0, 0.7, len(run.truth))
    rows = [(float(k), k + 5.0, "AL1", float(run.truth[k, 1] + error[k])) for k in range(20, 1580, 10)]
    lab_frame(spec, rows).to_csv(folder / "lab.csv", index=False)
    return folder


def tuned(command: Any, plant: Path, folder: Path, model: str, *more: str) -> tuple[int, dict[str, Any], str]:
    page = folder / "page.html"
    said = command(
        *("tune", plant / model, plant / "history.csv", "--lab", plant / "lab.csv"),
        *("--out", folder / "out.toml", "--report", page, "--json", *more),
    )
    assert said.err == ""
    return said.status, json.loads(said.out), page.read_text(encoding="utf-8")


def words_of(page: str) -> str:
    body = page[page.index("<body>") :]
    return " ".join(html.unescape(re.sub(r"<[^>]+>", " ", body)).split())


def pictures_of(page: str) -> list[ElementTree.Element]:
    return [ElementTree.fromstring(found) for found in re.findall(r'<svg class="still".*?</svg>', page, re.S)]


def points_of(picture: ElementTree.Element, kind: str) -> int:
    return sum(
        len(re.findall(r"[ML]", path.get("d", ""))) if path.tag == "path" else 1
        for path in picture
        if path.get("class") == kind
    )


def test_an_accepted_tuning_has_the_numbers_of_the_document(
    command: Any, plant: Path, tmp_path: Path
) -> None:
    status, document, page = tuned(command, plant, tmp_path, "model.toml")
    words = words_of(page)

    assert (status, document["refusals"]) == (0, [])
    assert "Accepted: a new model file is written" in words
    assert "Refused" not in words
    assert str(tmp_path / "out.toml") in words
    for number in document["numbers"]:
        if not number["name"].endswith("time_constant"):
            low, high = plain(number["low"], 4), plain(number["high"], 4)
            fitted, written = plain(number["fitted"], 4), plain(number["written"], 4)
            assert f"{plain(number['before'], 4)} {fitted} {low} to {high} {written} written" in words
    assert re.search(r"feed\.time_constant 30 min [0-9.]+ min [0-9.]+ min to [0-9.]+ min", words)
    (sensor,) = document["sensors"]
    assert (
        f"TI1 {sensor['readings']} {sensor['nis_before']:.3f} {sensor['nis_after']:.3f} "
        f"{sensor['whiteness_before']:+.3f} {sensor['whiteness_after']:+.3f} ± {sensor['bound']:.3f} "
        f"{sensor['periodogram_before']:.3f} {sensor['periodogram_after']:.3f} {sensor['periodogram_bound']:.3f}"
    ) in words
    assert sensor["periodogram_before"] > sensor["periodogram_bound"] > sensor["periodogram_after"]
    assert "They are white, as far as these readings can tell" in words
    (interval,) = document["intervals"]
    assert (
        f"AY1 {interval['results']} {100 * interval['coverage']:.1f} % ({100 * interval['coverage_low']:.1f} to "
        f"{100 * interval['coverage_high']:.1f} %) 1 {plain(interval['scale'], 3)} "
        f"{100 * interval['coverage_scaled']:.1f} %"
    ) in words
    assert "a factor above 2 says that more is wrong than noise" in words
    for value in (*document["log_likelihood"], *document["log_likelihood_judged"]):
        assert f"{value:.1f}" in words
    assert CAUTION in words
    assert document["model_digest"][:12] in words


def test_the_page_stands_alone_and_its_pictures_hold_what_they_should(
    command: Any, plant: Path, tmp_path: Path
) -> None:
    _, document, page = tuned(command, plant, tmp_path, "model.toml")
    correlation, periodogram, laboratory = pictures_of(page)

    assert "A &lt;column&gt;" in page
    assert not re.search(r"<script|<link|<img|src=|href=|url\(|@import", page)
    assert "@page { size: A4" in page
    assert points_of(correlation, "was") == points_of(correlation, "now") == 2 * 30
    assert points_of(periodogram, "was") == points_of(periodogram, "now") > 200
    inside = round(document["intervals"][0]["coverage_scaled"] * document["intervals"][0]["results"])
    assert points_of(laboratory, "result") == inside
    assert points_of(laboratory, "outside") == document["intervals"][0]["results"] - inside
    assert points_of(laboratory, "was") == points_of(laboratory, "now")


def test_a_refused_tuning_says_why_at_the_top(command: Any, plant: Path, tmp_path: Path) -> None:
    status, document, page = tuned(command, plant, tmp_path, "two.toml")
    words = words_of(page)

    assert status == 1
    assert not (tmp_path / "out.toml").exists()
    (refusal,) = document["refusals"]
    top = "Tuning of C-1 A <column> Refused: no model file is written"
    assert words.startswith(f"{top} {refusal}")
    assert "feed.sd 0.5 not fitted 0.5 kept: refused before any fit" in words
    assert "with the fit" not in words
    assert CAUTION in words
    assert len(pictures_of(page)) == 2


def test_only_the_interval(command: Any, plant: Path, tmp_path: Path) -> None:
    status, document, page = tuned(command, plant, tmp_path, "two.toml", "--interval-only")
    words = words_of(page)

    assert (status, document["numbers"]) == (0, [])
    assert "No noise was fitted." in words
    assert "steam.sd 0.5 not fitted 0.5 kept, as asked for" in words
    assert f"AY1.interval_scale 1 {plain(document['intervals'][0]['scale'], 3)}" in words
    assert points_of(pictures_of(page)[0], "now") == 0


@pytest.mark.parametrize(
    ("page", "expected"), [("none/page.html", "no such folder"), ("out.toml", "is a model file here")]
)
def test_a_bad_place_for_the_page_is_told_before_the_fit(
    command: Any, plant: Path, tmp_path: Path, page: str, expected: str
) -> None:
    said = command(
        *("tune", plant / "model.toml", plant / "history.csv", "--out", tmp_path / "out.toml"),
        *("--report", tmp_path / page),
    )

    assert (said.status, said.out) == (2, "")
    assert expected in said.err
    assert not (tmp_path / "out.toml").exists()


def test_the_examples_in_the_page_hold() -> None:
    import doctest

    assert doctest.testmod(tuning_page).failed == 0
