"""The command line in this process and in one of its own, with a small model and its files."""

from __future__ import annotations

import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest
from independent.small_unit import MODEL, Outcome, run_command

from softsensor.cli.main import main

HISTORY = "time,FI1,TI1\n" + "".join(
    f"2026-12-01T00:{k // 6:02d}:{k % 6 * 10:02d}Z,11.5,{92.4 + 0.01 * (k % 7)}\n" for k in range(30)
)
LAB = """sampled_at,reported_at,tag,value
2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,1.33
"""


Command = Callable[..., Outcome]


@pytest.fixture
def command(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> Command:
    """Runs a command in this process."""

    def run(*arguments: str | Path) -> Outcome:
        monkeypatch.setattr(sys, "argv", ["softsensor", *map(str, arguments)])
        capsys.readouterr()
        with pytest.raises(SystemExit) as left:
            main()
        said = capsys.readouterr()
        status = left.value.code
        return Outcome(status if isinstance(status, int) else 0, said.out, said.err)

    return run


@pytest.fixture
def process() -> Command:
    """Runs a command in a process of its own, as a shell does."""

    return run_command


@dataclass(frozen=True)
class Files:
    """A model, a history and laboratory results that are in order, to be spoilt."""

    folder: Path

    def put(self, name: str, text: str | bytes) -> Path:
        path = self.folder / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode())
        return path

    @property
    def model(self) -> Path:
        return self.put("r1.toml", MODEL)

    @property
    def history(self) -> Path:
        return self.put("history.csv", HISTORY)

    @property
    def lab(self) -> Path:
        return self.put("lab.csv", LAB)

    @property
    def out(self) -> Path:
        return self.folder / "results"


@pytest.fixture
def files(tmp_path: Path) -> Files:
    """Files of a unit that are in order."""
    return Files(tmp_path)
