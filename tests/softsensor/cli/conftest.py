"""The command line in this process and in one of its own, with a small model and its files."""

from __future__ import annotations

import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from softsensor.cli.main import main

MODEL = """
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

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
lab = { tag = "AL1", sd = 0.02 }

[[disturbance]]
name = "feed concentration"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = -1.9
time_constants = ["4.2 min"]
dead_time = "0.55 min"

[[transfer_function]]
from = "feed concentration"
to = "TI1"
gain = 14.0
time_constants = ["8 min"]

[[transfer_function]]
from = "feed concentration"
to = "AY1"
gain = 0.9
time_constants = ["10 min"]
"""

HISTORY = "time,FI1,TI1\n" + "".join(
    f"2026-12-01T00:{k // 6:02d}:{k % 6 * 10:02d}Z,11.5,{92.4 + 0.01 * (k % 7)}\n" for k in range(30)
)
LAB = """sampled_at,reported_at,tag,value
2026-12-01T00:01:00Z,2026-12-01T00:03:00Z,AL1,1.33
"""


@dataclass(frozen=True)
class Outcome:
    """What a command printed, and its exit status."""

    status: int
    out: str
    err: str

    @property
    def lines(self) -> list[str]:
        return self.err.splitlines()


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

    def run(*arguments: str | Path) -> Outcome:
        done = subprocess.run(
            [sys.executable, "-m", "softsensor", *map(str, arguments)],
            capture_output=True,
            text=True,
            timeout=120,
            check=False,
        )
        return Outcome(done.returncode, done.stdout, done.stderr)

    return run


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
