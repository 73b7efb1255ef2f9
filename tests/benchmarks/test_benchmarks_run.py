"""The benchmarks run and print their ratios on tiny cases; no time is asserted."""

from __future__ import annotations

from pathlib import Path

import pytest
from benchmarks import against_statsmodels, month_from_parquet, thousand_units


def test_against_statsmodels(capsys: pytest.CaptureFixture[str]) -> None:
    spent = against_statsmodels.main(cycles=150, repeats=1)
    printed = capsys.readouterr().out
    assert all(seconds > 0.0 for case in spent.values() for seconds in case.values())
    assert printed.count("times statsmodels' speed") == 8


def test_the_month(tmp_path: Path) -> None:
    spent = month_from_parquet.compare(0.05, 1, tmp_path)
    assert set(spent) == {"pandas", "replay", "pandas, CSV", "replay, CSV"}
    rows = (tmp_path / "out" / "estimates.csv").read_text(encoding="utf-8").count("\n")
    assert rows == int(0.05 * month_from_parquet.CYCLES_A_DAY) + 1


def test_many_units(capsys: pytest.CaptureFixture[str]) -> None:
    wall, processor = thousand_units.main(count=3, seconds=4)
    assert wall > 0.0
    assert processor >= 0.0
    assert "longest second" in capsys.readouterr().out
