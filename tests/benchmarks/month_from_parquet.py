"""``softsensor replay`` from Parquet to result files against pandas reading the same file and writing as many rows.

    python tests/benchmarks/month_from_parquet.py [days] [repeats]

30 days of 10-s cycles by default, a twelfth of a year; both sides grow in proportion to the length. 2 % of the readings
are missing. pandas reads the Parquet file and writes two Parquet files with the columns and the number of rows of
``estimates`` and ``innovations``, prepared beforehand outside the time. Processor time, medians.

The second table is the peak of what the process holds, measured in a process of its own for each length: a long history
in a file is read in stretches, so it does not grow with the length once that is beyond a few row groups.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
from pathlib import Path

if __name__ == "__main__":
    os.environ["OPENBLAS_NUM_THREADS"] = "1"
    sys.path[0:1] = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]

import numpy as np
import pandas as pd
from benchmarks.measuring import MISSING, START, in_turn, small_unit

from connectors.files import open_history
from plant_models.building import build_plant_model
from plant_models.plant_model import PlantModel
from softsensor.recorded_data import prepare
from softsensor.service.assembly import rules_of
from softsensor.service.replay import gathered
from softsensor.service.result_files import ResultFiles

CYCLES_A_DAY = 8640


def model_of_the_benchmark() -> PlantModel:
    """Two inputs, three sensors, one estimate, every 10 s."""
    return build_plant_model(small_unit(2, 3, 10.0))


def write_history(model: PlantModel, path: Path, cycles: int) -> None:
    """A quiet recorded plant: slow waves of the inputs and of the sensors, and the sensors' noise."""
    rng = np.random.default_rng(4)
    columns: dict[str, object] = {"time": START + pd.to_timedelta(np.arange(cycles) * 10, unit="s")}
    for item in model.spec.inputs:
        columns[item.tag] = np.full(cycles, item.operating_point)
    for sensor in model.spec.sensors:
        values = sensor.operating_point + sensor.noise_sd * rng.standard_normal(cycles)
        values[rng.random(cycles) < MISSING] = np.nan
        columns[sensor.tag] = values
    pd.DataFrame(columns).to_parquet(path, index=False)


def replay_to_files(model: PlantModel, history: Path, out: Path, kind: str = "parquet") -> None:
    """What the command does, without its start-up."""
    running, _ = prepare(model, open_history(history, rules_of(model.spec).tags), None)
    with ResultFiles(out, "csv" if kind == "csv" else "parquet", running.design) as files:
        for stretch in gathered(running.stretches()):
            files.add(stretch)
        files.finish(running)


def compare(days: float, repeats: int, folder: Path) -> dict[str, float]:
    """Median processor seconds of each way."""
    model, history, out = model_of_the_benchmark(), folder / "history.parquet", folder / "out"
    write_history(model, history, int(days * CYCLES_A_DAY))
    replay_to_files(model, history, out)
    tables = {name: pd.read_parquet(out / f"{name}.parquet") for name in ("estimates", "innovations")}

    def by_pandas(kind: str) -> None:
        pd.read_parquet(history)
        for name, frame in tables.items():
            if kind == "csv":
                frame.to_csv(folder / f"{name}.csv", index=False)
            else:
                frame.to_parquet(folder / f"{name}.parquet", index=False)

    return in_turn(
        {
            "pandas": lambda: by_pandas("parquet"),
            "replay": lambda: replay_to_files(model, history, out),
            "pandas, CSV": lambda: by_pandas("csv"),
            "replay, CSV": lambda: replay_to_files(model, history, out, "csv"),
        },
        repeats,
    )


_PEAK = """
import sys
sys.path[0:1] = sys.argv[1:3]
from pathlib import Path
from benchmarks.month_from_parquet import model_of_the_benchmark, replay_to_files, write_history
folder = Path(sys.argv[3])
def most():
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(line.split()[1] for line in lines if line.startswith("VmHWM"))
model = model_of_the_benchmark()
write_history(model, folder / "short.parquet", 2000)
replay_to_files(model, folder / "short.parquet", folder / "out")
before = most()
replay_to_files(model, folder / "history.parquet", folder / "out")
print(before, most())
"""


def peak(days: float, folder: Path) -> tuple[float, float]:
    """MiB held at most after a short replay and after one of ``days``, in one process of its own (Linux)."""
    write_history(model_of_the_benchmark(), folder / "history.parquet", int(days * CYCLES_A_DAY))
    paths = [str(Path(__file__).resolve().parents[up]) for up in (2, 1)]
    ended = subprocess.run(
        [sys.executable, "-c", _PEAK, *paths, str(folder)],
        capture_output=True, text=True, check=True, timeout=3600,
    )  # fmt: skip
    before, after = ended.stdout.split()
    return int(before) / 1024.0, int(after) / 1024.0


def main(days: float = 30.0, repeats: int = 3) -> dict[str, float]:
    """Run and print."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        spent = compare(days, repeats, folder)
        cycles = int(days * CYCLES_A_DAY)
        ratio = spent["replay"] / spent["pandas"]
        share = f"a year is {365 / days:.0f} times that"
        print(f"{days:g} days of 10-s cycles, {cycles} cycles, 3 sensors, 1 estimate ({share})")
        print(f"  Parquet to Parquet: {ratio:.2f} times pandas' time; wanted 4 or less:", end=" ")
        print("reached" if ratio <= 4.0 else "NOT reached")
        print(f"  Parquet to CSV:     {spent['replay, CSV'] / spent['pandas, CSV']:.2f} times pandas' time")
        print(f"  replay to Parquet:  {spent['replay'] / cycles * 1e6:.1f} us a cycle")
        for length in (days / 4.0, days / 2.0, days):
            before, after = peak(length, folder)
            grown = (after - before) * 2**20 / (length * CYCLES_A_DAY)
            held = f"{before:.0f} MiB before, {after:.0f} MiB after"
            print(f"  peak memory, {length:5g} days: {held}: {grown:.0f} bytes a cycle")
    return spent


if __name__ == "__main__":
    main(*(float(word) if place == 0 else int(word) for place, word in enumerate(sys.argv[1:])))
