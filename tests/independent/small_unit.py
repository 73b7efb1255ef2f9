"""A small model file, and softsensor's commands in processes of their own, as a shell runs them."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

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


@dataclass(frozen=True)
class Outcome:
    """What a command printed, and its exit status."""

    status: int
    out: str
    err: str

    @property
    def lines(self) -> list[str]:
        return self.err.splitlines()


def command_line(*arguments: str | Path) -> list[str]:
    """What starts a command with this Python."""
    return [sys.executable, "-m", "softsensor", *map(str, arguments)]


def run_command(*arguments: str | Path) -> Outcome:
    """Run a command to its end; the longest that one of them takes is the first compilation."""
    done = subprocess.run(
        command_line(*arguments),
        capture_output=True,
        text=True,
        encoding="utf-8",
        timeout=300,
        check=False,
    )
    return Outcome(done.returncode, done.stdout, done.stderr)
