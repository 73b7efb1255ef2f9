"""A long Parquet history read in stretches: the same cycles to the last bit, faults with their row in the file."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from independent.small_unit import MODEL

from connectors import long_history
from connectors.errors import HistoryFileError
from connectors.files import LongHistory, open_history, read_history
from plant_models.model_file import parse_model_text
from softsensor.service.assembly import assemble_blocks
from softsensor.service.long_assembly import assemble_long
from softsensor.service.rules import rules_of

SPEC = parse_model_text(MODEL, "model")
ROWS = 900


@pytest.fixture
def short_parts(monkeypatch: pytest.MonkeyPatch) -> None:
    """Stretches of 64 rows, so that a file of this test has many."""
    monkeypatch.setattr(long_history, "ROWS", 64)


def frame(seed: int) -> pd.DataFrame:
    """Rows off the grid, gaps longer than a block and a stretch, empty cells, qualities."""
    random = np.random.default_rng(seed)
    steps = random.choice([3, 10, 17, 400], size=ROWS, p=[0.3, 0.5, 0.18, 0.02])
    times = pd.Timestamp("2026-03-01T00:00:03Z") + pd.to_timedelta(np.cumsum(steps), unit="s")
    data: dict[str, object] = {"time": times}
    for tag in rules_of(SPEC).tags:
        values = random.standard_normal(ROWS)
        values[random.random(ROWS) < 0.1] = np.nan
        data[tag] = values
        data[f"{tag}.quality"] = random.choice(["Good", "Uncertain", "Bad"], size=ROWS, p=[0.9, 0.05, 0.05])
    return pd.DataFrame(data | {"note": "x"})


@pytest.mark.parametrize("groups", [50, 64, 1000])
@pytest.mark.parametrize("block", [7, 100, 10_000])
@pytest.mark.usefixtures("short_parts")
def test_cycles_are_the_same_to_the_last_bit(tmp_path: Path, groups: int, block: int) -> None:
    file = tmp_path / "history.parquet"
    frame(block).to_parquet(file, index=False, row_group_size=groups)
    tags = rules_of(SPEC).tags
    long, whole = open_history(file, tags), read_history(file, tags)
    assert isinstance(long, LongHistory)
    assert (long.first_time, long.last_time) == (whole.first_time, whole.last_time)
    assert long.ignored_columns == whole.ignored_columns == ("note",)
    one, other = list(assemble_long(SPEC, long, block)), list(assemble_blocks(SPEC, whole, block))
    assert len(one) == len(other)
    for mine, expected in zip(one, other, strict=True):
        for name in ("times", "u", "u_quality", "y", "y_quality"):
            assert getattr(mine, name).tobytes() == getattr(expected, name).tobytes()


def test_a_short_file_is_read_whole(tmp_path: Path) -> None:
    file = tmp_path / "history.parquet"
    frame(1).to_parquet(file, index=False)
    assert not isinstance(open_history(file, rules_of(SPEC).tags), LongHistory)


@pytest.mark.usefixtures("short_parts")
@pytest.mark.parametrize("row", [200, 256, 899])
def test_a_fault_is_told_with_its_row(tmp_path: Path, row: int) -> None:
    """Also where the row before it lies in the stretch before; rows are counted from 1."""
    file, data = tmp_path / "history.parquet", frame(3)
    data.loc[row, "time"] = data.loc[row - 2, "time"] if row < 899 else data.loc[row - 1, "time"]
    data.to_parquet(file, index=False)
    with pytest.raises(HistoryFileError, match=rf"row {row + 1}, column time.*expected each time once"):
        list(assemble_long(SPEC, open_history(file, rules_of(SPEC).tags)))  # type: ignore[arg-type]


@pytest.mark.usefixtures("short_parts")
def test_a_damaged_file_is_told_when_the_reading_comes_to_it(tmp_path: Path) -> None:
    file = tmp_path / "history.parquet"
    frame(4).to_parquet(file, index=False, row_group_size=64)
    content = bytearray(file.read_bytes())
    middle = len(content) // 2
    content[middle : middle + 400] = bytes(400)
    file.write_bytes(bytes(content))
    with pytest.raises(HistoryFileError, match="truncated or damaged"):
        list(assemble_long(SPEC, open_history(file, rules_of(SPEC).tags)))  # type: ignore[arg-type]
