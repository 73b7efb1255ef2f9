"""The handbook's picture of a tuning's report: a published column whose file has wrong noise.

    python tests/long_runs/tuning_report.py picture.png

The plant is as the Wood & Berry model says, but its thermometer has twice the noise of the file and its disturbance half
the sd, and the laboratory has errors that its sd does not tell. ``softsensor tune`` with ``--report`` does the rest; a
browser takes the picture.
"""

from __future__ import annotations

import sys
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory

if __name__ == "__main__":
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
import pandas as pd
from independent.small_unit import run_command
from long_runs.coverage import Stretch, live, with_laboratory
from long_runs.models import path_of
from playwright.sync_api import sync_playwright

from plant_models.model_file import parse_model_text
from plant_models.specification import UnitSpec

CYCLES, CYCLES_A_RESULT, SEED = 6000, 20, 3
LABORATORY = 2.0
"""The laboratory's errors over its sd."""
CHROMIUM = "/usr/bin/chromium"
BEGIN = pd.Timestamp("2026-11-20T06:00:00Z")


def truth_of(spec: UnitSpec) -> UnitSpec:
    """The plant: other noise than in its file."""
    sensors = tuple(replace(item, noise_sd=2.0 * item.noise_sd) for item in spec.sensors)
    moving = tuple(item if item.sd is None else replace(item, sd=0.5 * item.sd) for item in spec.disturbances)
    return replace(spec, sensors=sensors, disturbances=moving)


def times_of(spec: UnitSpec, cycles: np.ndarray) -> pd.DatetimeIndex:
    return pd.DatetimeIndex(BEGIN + pd.to_timedelta(cycles * spec.sample_time, unit="s"))


def history(spec: UnitSpec, stretch: Stretch) -> pd.DataFrame:
    columns = {item.tag: stretch.case.u[:, j] for j, item in enumerate(spec.inputs)}
    columns |= {item.tag: stretch.y[:, i] for i, item in enumerate(spec.sensors)}
    return pd.DataFrame({"time": times_of(spec, np.arange(CYCLES)), **columns})


def laboratory(spec: UnitSpec, stretch: Stretch) -> pd.DataFrame:
    random, at = np.random.default_rng(SEED), np.arange(CYCLES_A_RESULT, CYCLES - 10, CYCLES_A_RESULT)
    parts = []
    for e, item in enumerate(spec.estimates):
        assert item.lab is not None
        value = stretch.truth[at, e] + LABORATORY * item.lab.sd * random.standard_normal(len(at))
        times = {"sampled_at": times_of(spec, at), "reported_at": times_of(spec, at + 5)}
        parts.append(pd.DataFrame({**times, "tag": item.lab.tag, "value": value}))
    return pd.concat(parts).sort_values("sampled_at")


def main(picture: str) -> None:
    text = with_laboratory(path_of("wood_berry").read_text(encoding="utf-8"))
    spec = parse_model_text(text, "wood_berry")
    stretch = live(truth_of(spec), CYCLES, SEED)
    with TemporaryDirectory() as name:
        folder = Path(name)
        (folder / "column.toml").write_text(text, encoding="utf-8")
        history(spec, stretch).to_csv(folder / "history.csv", index=False)
        laboratory(spec, stretch).to_csv(folder / "lab.csv", index=False)
        page = folder / "report.html"
        files = (folder / "column.toml", folder / "history.csv", "--lab", folder / "lab.csv")
        said = run_command("tune", *files, "--out", folder / "tuned.toml", "--report", page)
        print(said.out, said.err)
        shown = page.read_text(encoding="utf-8").replace(f"{folder}/", "")
        with sync_playwright() as playwright:
            browser = playwright.chromium.launch(executable_path=CHROMIUM, args=["--no-sandbox"])
            sheet = browser.new_page(viewport={"width": 900, "height": 1200})
            sheet.set_content(shown)
            sheet.screenshot(path=picture, full_page=True)
            browser.close()


if __name__ == "__main__":
    main(sys.argv[1])
