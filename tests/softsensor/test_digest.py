"""The digest: the same for the same readings, another as soon as one of them differs in its last bit."""

from __future__ import annotations

import os
import pickle
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from independent.dense_filter import LabRow
from independent.random_models import random_unit
from independent.recorded_runs import Run, record
from independent.replaying import arrival, design_of, readings_of, replay_in_parts

import softsensor
from plant_models.building import build_plant_model
from softsensor.cycle import UnitDesign

SPEC = random_unit(8)
CYCLES = 140


@pytest.fixture(scope="module")
def design() -> UnitDesign:
    return design_of(SPEC)


@pytest.fixture(scope="module")
def run() -> Run:
    return record(SPEC, CYCLES, 41, gaps=0.1)


def test_the_same_readings_give_the_same_digest(design: UnitDesign, run: Run) -> None:
    """Also with a design made again, and through the public function."""
    digest = replay_in_parts(design, readings_of(run)).digest
    assert replay_in_parts(design, readings_of(run)).digest == digest
    assert replay_in_parts(design_of(SPEC), readings_of(run)).digest == digest
    assert softsensor.replay(build_plant_model(SPEC), run.history()).summary["digest"] == digest


@pytest.mark.parametrize("cycle", [0, 77, CYCLES - 1])
def test_the_last_bit_of_one_reading_changes_the_digest(design: UnitDesign, run: Run, cycle: int) -> None:
    digest = replay_in_parts(design, readings_of(run)).digest
    sensor = int(np.flatnonzero(np.isfinite(run.y[cycle]))[0])
    y = run.y.copy()
    y[cycle, sensor] = np.nextafter(y[cycle, sensor], np.inf)
    assert replay_in_parts(design, readings_of(replace(run, y=y))).digest != digest


def test_a_quality_changes_the_digest(design: UnitDesign, run: Run) -> None:
    digest = replay_in_parts(design, readings_of(run)).digest
    sensor = int(np.flatnonzero(np.isfinite(run.y[60]))[0])
    doubt = run.uncertain.copy()
    doubt[60, sensor] = not doubt[60, sensor]
    assert replay_in_parts(design, readings_of(replace(run, uncertain=doubt))).digest != digest


def test_a_missing_reading_changes_the_digest(design: UnitDesign, run: Run) -> None:
    digest = replay_in_parts(design, readings_of(run)).digest
    y = run.y.copy()
    y[CYCLES - 1] = np.nan
    assert replay_in_parts(design, readings_of(replace(run, y=y))).digest != digest


def test_the_last_bit_of_a_laboratory_result_changes_the_digest(design: UnitDesign, run: Run) -> None:
    """Also of one that arrives in the last cycle, and also its cycle of arrival."""
    lab = SPEC.estimates[0].lab
    assert lab is not None
    value = float(run.truth[50, len(SPEC.sensors)])
    digests = {
        replay_in_parts(
            design, readings_of(run), [arrival(SPEC, LabRow(50, known, 0, number, lab.sd))]
        ).digest
        for known in (90, CYCLES - 1)
        for number in (value, float(np.nextafter(value, np.inf)))
    }
    digests.add(replay_in_parts(design, readings_of(run)).digest)
    assert len(digests) == 5


def test_another_model_gives_another_digest(design: UnitDesign, run: Run) -> None:
    """A noise that differs in its last bits is enough."""
    first = replace(SPEC.sensors[0], noise_sd=SPEC.sensors[0].noise_sd * (1.0 + 1e-14))
    other = replace(SPEC, sensors=(first, *SPEC.sensors[1:]))
    one, two = replay_in_parts(design, readings_of(run)), replay_in_parts(design_of(other), readings_of(run))
    np.testing.assert_allclose(two.estimate, one.estimate, rtol=1e-12)
    assert one.digest != two.digest


_ELSEWHERE = """
import pickle, sys
import softsensor
with open(sys.argv[1], "rb") as file:
    model, history = pickle.load(file)
print(softsensor.replay(model, history).summary["digest"])
"""


@pytest.mark.parametrize("core", ["Prescott", "Haswell"])
def test_another_process_with_other_matrix_routines_gives_the_same_digest(
    run: Run, tmp_path: Path, core: str
) -> None:
    """The same discretised model in a process whose BLAS is set for another CPU and whose hashes are seeded anew."""
    model, history = build_plant_model(SPEC), run.history()
    there = tmp_path / "model.pickle"
    there.write_bytes(pickle.dumps((model, history)))
    environment = {
        **os.environ,
        "OPENBLAS_CORETYPE": core,
        "PYTHONHASHSEED": "7",
        "OPENBLAS_NUM_THREADS": "1",
    }
    ended = subprocess.run(
        [sys.executable, "-c", _ELSEWHERE, str(there)],
        env=environment,
        cwd=Path(softsensor.__file__).parents[1],
        capture_output=True,
        text=True,
        timeout=300,
        check=True,
    )
    assert ended.stdout.strip() == softsensor.replay(model, history).summary["digest"]
