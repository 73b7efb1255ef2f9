"""The smoother's temporary file, and what ``replay --smooth`` writes."""

from __future__ import annotations

import asyncio
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from independent.batch_conditioning import given_everything
from independent.dense_filter import LabRow
from independent.random_models import random_unit
from independent.recorded_runs import Run, late_labs, record
from independent.replaying import design_of, readings_of

import softsensor
from plant_models.library import published_model_path
from softsensor.cli.main import main
from softsensor.cycle import UnitDesign
from softsensor.errors import ReplayError
from softsensor.recorded_data import prepare_from_records
from softsensor.service.replay import Replay
from softsensor.service.smoothed_run import Shelf, SmoothedRun

COLUMNS = ["time", "tag", "value", "sd", "lower", "upper"]


@pytest.fixture
def command(monkeypatch: pytest.MonkeyPatch) -> Callable[..., None]:
    """Runs a command in this process, which must end well."""

    def run_command(*words: object) -> None:
        monkeypatch.setattr(sys, "argv", ["softsensor", *map(str, words)])
        with pytest.raises(SystemExit) as left:
            main()
        assert not left.value.code

    return run_command


def files_of(folder: Path, name: str = "wood_berry") -> tuple[Path, Path, Path, Run]:
    """Model, history and laboratory file of a published model."""
    model = published_model_path(name)
    spec = softsensor.load_model(str(model)).spec
    recorded = record(spec, 150, 4, gaps=0.1, move=0.03)
    history, lab = folder / "history.csv", folder / "lab.csv"
    recorded.history().to_csv(history, index=False)
    late_labs(recorded, 4, 6, latest=20)[0].to_csv(lab, index=False)
    return Path(str(model)), history, lab, recorded


def contents(folder: Path, but: Sequence[str] = ()) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.name not in but}


def test_the_command_writes_one_more_file_and_the_others_as_before(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: Callable[..., None]
) -> None:
    model, history, lab, _ = files_of(tmp_path)
    command("replay", model, history, "--lab", lab, "--out", tmp_path / "plain", "--json")
    command("replay", model, history, "--lab", lab, "--out", tmp_path / "more", "--json", "--smooth")
    assert len(set(capsys.readouterr().out.splitlines())) == 1
    assert contents(tmp_path / "more", ["smoothed.csv"]) == contents(tmp_path / "plain")
    smoothed = pd.read_csv(tmp_path / "more" / "smoothed.csv", dtype=str)
    result = softsensor.replay(
        softsensor.load_model(str(model)), pd.read_csv(history), pd.read_csv(lab), smooth=True
    )
    assert result.smoothed is not None
    assert list(smoothed.columns) == COLUMNS
    for name in ("value", "sd", "lower", "upper"):
        np.testing.assert_array_equal(smoothed[name].map(float), result.smoothed[name])
    assert list(pd.to_datetime(smoothed["time"])) == list(result.smoothed["time"])
    assert list(smoothed["tag"]) == list(result.smoothed["tag"])


def test_parquet_holds_the_same_numbers(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], command: Callable[..., None]
) -> None:
    model, history, lab, _ = files_of(tmp_path)
    for kind in ("csv", "parquet"):
        command(
            "replay", model, history, "--lab", lab, "--out", tmp_path / "out", "--smooth", "--format", kind
        )
    capsys.readouterr()
    whole = pd.read_parquet(tmp_path / "out" / "smoothed.parquet")
    text = pd.read_csv(tmp_path / "out" / "smoothed.csv", dtype=str)
    assert list(whole.columns) == COLUMNS
    for name in ("value", "sd", "lower", "upper"):
        np.testing.assert_array_equal(whole[name], text[name].map(float))


def test_a_shelf_gives_back_what_was_put_also_from_disk(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 1000)
    shelf = Shelf(tmp_path)
    groups = [(np.arange(k, dtype=np.int64), np.full((k, 3), k / 7.0)) for k in range(1, 60)]
    for group in groups:
        shelf.put(group)
    for number in (58, 0, 31, 58):
        for found, expected in zip(shelf.get(number), groups[number], strict=True):
            assert found.dtype == expected.dtype
            np.testing.assert_array_equal(found, expected)
    shelf.close()
    assert list(tmp_path.iterdir()) == []


def test_smoothing_from_disk_gives_the_same_bits(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    spec = random_unit(6)
    design, readings = design_of(spec), readings_of(record(spec, 600, 21, gaps=0.2))

    def smoothed(folder: Path | None) -> bytes:
        running = Replay(design, [(readings, [])])
        with SmoothedRun(design, folder, 64) as smoothing:
            for _ in smoothing.keeping(running.stretches()):
                pass
            return b"".join(part.estimate.tobytes() + part.sd.tobytes() for part in smoothing.cycles(running))

    in_memory = smoothed(None)
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 1000)
    assert smoothed(tmp_path) == in_memory
    assert list(tmp_path.iterdir()) == []


def test_a_folder_that_cannot_be_written_is_told_in_one_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("softsensor.service.smoothed_run.IN_MEMORY", 10)
    shelf = Shelf(tmp_path / "missing")
    with pytest.raises(ReplayError, match=r"temporary file of the smoother: "):
        shelf.put((np.zeros(100),))
    shelf.close()


def test_recorded_cycles_are_smoothed_as_they_were_run(
    design: UnitDesign, new_bench: Any, story: Any, sqlite_url: str
) -> None:
    """A live run with gaps, a sensor left out and late results, from its records, against conditioning on everything."""
    asyncio.run(new_bench(design, sqlite_url).run(story, 0, 400, cut=False))
    running, _, _ = prepare_from_records(design.model, sqlite_url, "R-1", None, None)
    with SmoothedRun(running.design) as smoothing:
        stretches = list(smoothing.keeping(running.stretches()))
        parts = list(smoothing.cycles(running))
    y = np.concatenate([stretch.results.reading for stretch in stretches])
    y[np.concatenate([stretch.results.used for stretch in stretches]) == 0] = np.nan  # beyond the gate
    (exclusion,) = running.run.state.book.exclusions
    y[exclusion.since : exclusion.until, exclusion.sensor] = np.nan
    u = np.concatenate([stretch.readings.u for stretch in stretches])
    uncertain = np.concatenate([stretch.readings.y_quality == 1 for stretch in stretches])
    counted = [
        LabRow(lab.cycle, 0, lab.estimate, lab.value, lab.variance**0.5) for lab in running.counted_labs
    ]
    assert len(counted) == 3
    value, sd = given_everything(design.model.spec, u, y, uncertain, counted)
    rest = np.array([item.operating_point for item in design.model.spec.estimates])
    found = np.concatenate([part.estimate for part in parts])
    assert np.abs(found - value).max() <= 1e-8 * np.abs(value - rest).max()
    np.testing.assert_allclose(np.concatenate([part.sd for part in parts]), sd, rtol=1e-8)
