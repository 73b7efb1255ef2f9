"""The linear algebra runs on one thread: the setting must be there before numpy is."""

from __future__ import annotations

import os
import subprocess
import sys

PROGRAM = """
import os, sys
import softsensor.cli.main as command
early = [name for name in ("numpy", "scipy") if name in sys.modules]
sys.argv = ["softsensor", "--version"]
try:
    command.main()
except SystemExit:
    pass
print(early, [os.environ.get(name) for name in command.ONE_THREAD])
"""


def said(environment: dict[str, str]) -> str:
    done = subprocess.run([sys.executable, "-c", PROGRAM], capture_output=True, text=True, env=environment)
    assert done.returncode == 0, done.stderr
    return done.stdout.splitlines()[-1]


def test_it_is_set_before_numpy_is_imported_and_a_site_may_set_it_otherwise() -> None:
    plain = {name: value for name, value in os.environ.items() if not name.endswith("_NUM_THREADS")}
    assert said(plain) == "[] ['1', '1']"
    assert said(plain | {"OPENBLAS_NUM_THREADS": "4"}) == "[] ['4', '1']"
