"""The patient pair and the long memory: only where the file asks, the promise kept, blocks and evidence as in numpy."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from plant_models.building import build_plant_model
from plant_models.errors import ModelFileError
from plant_models.library import published_model_path
from plant_models.model_file import parse_model_text, read_model_file
from plant_models.simulators import reactor_model_path
from softsensor.cycle import UnitDesign, run_cycles, start
from softsensor.detection import state_of_tests
from softsensor.detection.design_of_tests import CLIP, patient_reference, steady_shifts
from softsensor.detection.detectability import bank_of
from softsensor.detection.long_memory import BLOCK, KEPT, WHOLE
from softsensor.detection.run_length import average_run_length
from softsensor.detection.signatures import filter_response
from softsensor.detection.state_of_tests import NO_PAIR
from softsensor.estimation.kernel import Floats
from softsensor.readings_of_cycle import CycleReadings
from softsensor.unit_design import design_unit

TAG, INDEX = "TI2102", 2


def reactor(*patient: str) -> UnitDesign:
    spec = read_model_file(reactor_model_path())
    return design_unit(build_plant_model(replace(spec, leave_out_isolated=False, patient=patient)))


@pytest.fixture(scope="module")
def watched() -> UnitDesign:
    return reactor(TAG)


def readings(design: UnitDesign, y: Floats) -> CycleReadings:
    u = np.tile([item.operating_point for item in design.model.spec.inputs], (len(y), 1))
    quality = np.where(np.isfinite(y), 0, 3).astype(np.int8)
    times = design.detection.sample_us * np.arange(len(y), dtype=np.int64)
    return CycleReadings(times, u, np.zeros(u.shape, dtype=np.int8), y, quality)


def noise(design: UnitDesign, cycles: int, seed: int) -> Floats:
    """Readings that are noise about the operating point: innovations of any kind will do here."""
    sensors = design.model.spec.sensors
    drawn = np.random.default_rng(seed).standard_normal((cycles, len(sensors)))
    values: Floats = drawn * [item.noise_sd for item in sensors] + [item.operating_point for item in sensors]
    return values


def test_only_the_named_sensor_has_a_patient_pair_and_all_its_pairs_keep_the_promise(
    watched: UnitDesign,
) -> None:
    tests, spec = watched.detection.tests, watched.model.spec
    assert bank_of(tests, INDEX).references[0] == patient_reference(
        float(steady_shifts(watched.model, watched.kernel)[INDEX])
    )
    each = 4.0 * spec.false_flag_interval / spec.sample_time / 0.98
    for k, h in zip(tests.reference[INDEX], tests.interval[INDEX], strict=True):
        achieved = average_run_length(float(k), float(h), head_start=0.5 * float(h), clip=CLIP)
        assert each * (1.0 - 1e-9) <= achieved <= each * 1.004
    plain = reactor().detection.tests
    for i in (0, 1):
        assert tests.interval[i, 0] == NO_PAIR
        assert np.array_equal(tests.interval[i, 1:], plain.interval[i])
        assert len(bank_of(tests, i).references) == 3


def test_without_it_the_file_means_what_it_meant() -> None:
    design = reactor()
    assert design.detection.long_memory is None
    assert start(design).tests.blocks.shape == (0, 3)
    assert design.detection.tests.reference.shape == (3, 3)


def test_the_same_results_but_for_the_sensor_that_is_watched(watched: UnitDesign) -> None:
    """Estimates and every other sensor's sums are the same to the last bit."""
    y = noise(watched, 3 * BLOCK, 4)
    one, other = (
        run_cycles(design, start(design), readings(design, y))[1] for design in (watched, reactor())
    )
    assert np.array_equal(one.estimate, other.estimate)
    assert np.array_equal(one.high[:, :2], other.high[:, :2])


def test_blocks_are_averages_over_whole_blocks_of_the_grid(watched: UnitDesign) -> None:
    """A block with a quarter of its readings missing still counts, one with more does not; the rest is plain numpy."""
    y = noise(watched, 6 * BLOCK, 5)
    few = BLOCK - round(WHOLE * BLOCK)
    y[BLOCK : BLOCK + few, 0] = np.nan
    y[2 * BLOCK : 2 * BLOCK + few + 1, 0] = np.nan
    state, results, _ = run_cycles(watched, start(watched), readings(watched, y))
    innovation = np.where(np.isfinite(y), results.innovation, np.nan).reshape(6, BLOCK, 3)
    kept = state.tests.blocks[:6]
    with np.errstate(all="ignore"):
        expected = np.nanmean(innovation, axis=1) * np.sqrt(BLOCK)
    assert np.isnan(kept[2, 0])
    expected[2, 0] = np.nan
    np.testing.assert_allclose(kept, expected, rtol=1e-12, atol=1e-13)
    assert np.all(np.isnan(state.tests.blocks[6:]))


def shifted(design: UnitDesign, tests: state_of_tests.TestState, blocks: int, size: float) -> Floats:
    """Blocks as a bias of the watched sensor leaves them, ``blocks`` ago, no noise, put into the memory in place."""
    use = np.ones(3, dtype=np.int64)
    steady, _ = design.detection.table(use)
    signal = np.zeros((blocks * BLOCK, 3))
    signal[:, INDEX] = size
    left = filter_response(design.kernel, steady.gains, use, signal).reshape(blocks, BLOCK, 3)
    rows: Floats = left.mean(axis=1) * np.sqrt(BLOCK)
    tests.blocks[:] = 0.0
    tests.blocks[KEPT - blocks :] = rows
    tests.cycle[0] = KEPT * BLOCK
    return rows


def test_the_evidence_is_the_bayes_factor_of_the_blocks(watched: UnitDesign) -> None:
    """With the true onset on the grid: N, D and the size by numpy from signatures computed here."""
    tests = start(watched).tests
    blocks = 700
    rows = shifted(watched, tests, blocks, 1.2)
    use = np.ones(3, dtype=np.int64)
    seen = watched.detection.look_back(tests, use)
    assert seen is not None
    verdict, found = seen
    steady, _ = watched.detection.table(use)
    memory = watched.detection.long_memory
    assert memory is not None
    h = next(k for k, item in enumerate(memory.suspects) if (item.name, item.shape) == (TAG, "step"))
    white = rows @ steady.whitening.T
    unit = white / 1.2
    precision = memory.suspects[h].prior_sd ** -2
    size = float(np.sum(unit * white)) / (float(np.sum(unit * unit)) + precision)
    assert found.age[h] == blocks * BLOCK
    assert found.size[h] == pytest.approx(size, rel=1e-6)
    assert verdict.names[0] == TAG


def test_what_is_found_there_is_never_a_single_name(watched: UnitDesign) -> None:
    tests = start(watched).tests
    shifted(watched, tests, KEPT // 2, 4.0)
    seen = watched.detection.look_back(tests, np.ones(3, dtype=np.int64))
    assert seen is not None
    group = seen[0].group
    assert len(group) > 1
    assert any("->" in name and name.endswith(TAG) for name in group) or TAG not in group


WHOLE_FILE = published_model_path("wood_berry").read_text(encoding="utf-8")
BEFORE, HEADING, _ = WHOLE_FILE.partition("[fault_tests]\n")


@pytest.mark.parametrize(
    ("value", "said"),
    [
        ('["AI9999"]', "AI9999 is none"),
        ('["AI4101", "AI4101"]', "names a tag twice"),
        ('"AI4101"', "which is no list"),
        ("[1]", "expected a list of tags"),
    ],
)
def test_a_wrong_list_is_a_fault_at_its_line(value: str, said: str) -> None:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(f"{BEFORE}{HEADING}patient = {value}\n", "m.toml")
    (fault,) = raised.value.faults
    assert fault.key == "patient"
    assert said in fault.message


def test_the_list_is_read() -> None:
    assert parse_model_text(f'{BEFORE}{HEADING}patient = ["AI4101"]\n', "m.toml").patient == ("AI4101",)
