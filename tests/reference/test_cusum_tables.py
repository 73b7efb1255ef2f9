"""Run lengths, decision intervals and the cumulative sum against published and independently computed values.

Marks: READ = seen in a source, COMPUTED = computed with an independent program (R package spc 0.6.7, Knoth),
MEMORY = recalled.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from numba import njit

from softsensor.detection.cusum import cusum, cusum_step
from softsensor.detection.run_length import average_run_length, decision_interval, steady_state_delay

SHIFTS = (0.0, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0)

# COMPUTED twice: a Gauss-Legendre integral equation and R spc xcusum.arl, equal to four decimals. Head
# start h/2.
MAIN_TABLE = (
    (0.5, 4, "one", "335.3676 77.0785 26.6792 13.2866 8.3832 4.7472 3.3428 2.6195 2.1945 1.7085"),
    (0.5, 4, "two", "167.6838 74.2240 26.6302 13.2851 8.3831 4.7472 3.3428 2.6195 2.1945 1.7085"),
    (0.5, 4, "head", "148.6956 62.6982 20.0640 8.9680 5.2869 2.8620 2.0144 1.5858 1.3254 1.0670"),
    (0.5, 5, "one", "930.8870 141.6877 38.0096 17.0485 10.3760 5.7472 4.0089 3.1137 2.5733 2.0126"),
    (0.5, 5, "two", "465.4435 139.4937 37.9961 17.0483 10.3760 5.7472 4.0089 3.1137 2.5733 2.0126"),
    (0.5, 5, "head", "430.3908 121.6879 28.6658 11.2358 6.3469 3.3720 2.3623 1.8562 1.5396 1.1594"),
    (0.5, 4.77, "two", "368.5614 121.3127 35.2082 16.1729 9.9170 5.5172 3.8553 2.9986 2.4844 1.9558"),
    (0.25, 8, "one", "736.7877 84.0008 28.7634 16.3720 11.3932 7.1141 5.2142 4.1501 3.4756 2.6687"),
    (0.25, 8, "two", "368.3939 83.6304 28.7624 16.3720 11.3932 7.1141 5.2142 4.1501 3.4756 2.6687"),
    (0.25, 8.01, "two", "370.3324 83.8159 28.8020 16.3920 11.4065 7.1221 5.2199 4.1545 3.4791 2.6717"),
    (0.5, 3, "one", "117.5957 39.4716 17.3505 9.6801 6.4039 3.7491 2.6797 2.1208 1.7732 1.3108"),
    (0.5, 6, "two", "1276.5599 249.2577 51.3367 20.9041 12.3733 6.7473 4.6761 3.6164 2.9763 2.2382"),
    (1, 2.52, "two", "372.8154 197.7552 69.2997 27.6771 13.5784 5.4619 3.2669 2.3526 1.8623 1.3223"),
)


@pytest.mark.parametrize(("reference", "interval", "kind", "row"), MAIN_TABLE)
def test_average_run_lengths_to_four_decimals(reference: float, interval: float, kind: str, row: str) -> None:
    for shift, printed in zip(SHIFTS, row.split(), strict=True):
        computed = average_run_length(
            reference,
            interval,
            shift,
            two_sided=kind != "one",
            head_start=0.5 * interval if kind == "head" else 0.0,
        )
        assert computed == pytest.approx(float(printed), abs=0.500001e-4), (kind, shift)


# COMPUTED (R spc xcusum.ad, k = 0.5, h = 5, one-sided)
STEADY_DELAYS = {
    0.25: "139.04",
    0.5: "36.505",
    0.75: "16.051",
    1.0: "9.650",
    1.5: "5.295",
    2.0: "3.689",
    3.0: "2.381",
    4.0: "1.859",
}


@pytest.mark.parametrize(("shift", "printed"), STEADY_DELAYS.items())
def test_steady_state_delays(shift: float, printed: str) -> None:
    digits = len(printed.split(".")[1])
    assert steady_state_delay(0.5, 5.0, shift) == pytest.approx(float(printed), abs=0.501 * 10.0**-digits)


RUN_LENGTHS = (100, 200, 370, 500, 1000, 1440, 5000, 10000, 10080, 43200, 525600)

# COMPUTED (own solver and R spc xcusum.crit, equal to four digits and more), two-sided; "-" not tabulated.
# The four spc-only values of k = 1 are in the same row.
INTERVALS = (
    (0.25, "5.5974 6.8516 8.0083 8.5851 9.9312 10.6468 13.1113 14.4917 14.5076 17.4130 22.4087"),
    (0.5, "3.5020 4.1713 4.7738 5.0707 5.7574 6.1198 7.3608 8.0530 8.0610 9.5156 12.0140"),
    (0.75, "2.4810 2.9332 3.3390 3.5384 3.9986 - 5.0696 5.5314 - - -"),
    (1.0, "1.8738 2.2137 2.5163 2.6651 3.0094 3.1912 3.8137 4.1604 4.1644 4.8920 -"),
    (1.25, "1.4578 1.7407 1.9862 2.1054 2.3786 - 3.0157 3.2925 - - -"),
    (1.5, "1.1311 1.3867 1.6041 1.7080 1.9424 - 2.4730 2.7000 - - -"),
)


@pytest.mark.parametrize(("reference", "row"), INTERVALS)
def test_decision_intervals_to_four_decimals(reference: float, row: str) -> None:
    for run_length, printed in zip(RUN_LENGTHS, row.split(), strict=True):
        if printed == "-":
            continue
        computed = decision_interval(reference, run_length)
        assert computed == pytest.approx(float(printed), abs=0.500001e-4), run_length
        assert decision_interval(reference, 0.5 * run_length, two_sided=True) == pytest.approx(
            decision_interval(reference, run_length, two_sided=False), abs=1e-8
        )


def test_small_table_of_intervals_for_370() -> None:
    # READ in a public R script that calls spc (attribution to Hawkins 1993 MEMORY); the run lengths COMPUTED
    table = {0.25: 8.01, 0.5: 4.77, 0.75: 3.34, 1.0: 2.52, 1.25: 1.99, 1.5: 1.61}
    printed = {0.25: 370.33, 0.5: 368.56, 0.75: 370.57, 1.0: 372.82, 1.25: 373.54, 1.5: 376.34}
    for reference, interval in table.items():
        assert average_run_length(reference, interval) == pytest.approx(printed[reference], abs=0.00501)


def test_lucas_and_crosier_1982_table_1() -> None:
    # READ in the help pages of R spc: Technometrics 24:199-205, k = 0.5, h = 4, two-sided; head start 2
    shifts = (0.0, 0.25, 0.5, 0.75, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0)
    plain = ["168", "74.2", "26.6", "13.3", "8.38", "4.75", "3.34", "2.62", "2.19", "1.71", "1.31"]
    # the printed 1.32 at shift 3 is 1.3254 COMPUTED twice: the paper's last digit
    head = ["149", "62.7", "20.1", "8.97", "5.29", "2.86", "2.01", "1.59", "1.33", "1.07", "1.01"]
    for row, start in ((plain, 0.0), (head, 2.0)):
        for shift, printed in zip(shifts, row, strict=True):
            digits = len(printed.split(".")[1]) if "." in printed else 0
            computed = average_run_length(0.5, 4.0, shift, head_start=start)
            assert computed == pytest.approx(float(printed), abs=0.501 * 10.0**-digits), (start, shift)


def test_vance_1986_with_goel_and_wu_1971() -> None:
    # READ in the help pages of R spc: one-sided, k = 0, h = 10. The paper's 2071.51 is 2071.57 COMPUTED
    # twice.
    shifts = (-0.25, -0.125, 0.0, 0.125, 0.25, 0.5, 0.75, 1.0)
    printed = (2071.57, 400.28, 124.66, 59.30, 36.71, 20.37, 14.06, 10.75)
    for shift, value in zip(shifts, printed, strict=True):
        assert average_run_length(0.0, 10.0, shift, two_sided=False) == pytest.approx(value, abs=0.00501)


def test_brook_and_evans_1972_and_waldmann_1986() -> None:
    # READ in the help pages of R spc: Biometrika 59:539-549 section 4.3, one-sided k = 0.5, h = 3 (117.59,
    # 3.75
    # printed; 117.5957, 3.7491 COMPUTED); Waldmann 1963, 17.35 and two-sided 65.4 (65.46 COMPUTED)
    assert average_run_length(0.5, 3.0, 0.0, two_sided=False) == pytest.approx(117.5957, abs=0.501e-4)
    assert average_run_length(0.5, 3.0, 1.5, two_sided=False) == pytest.approx(3.7491, abs=0.501e-4)
    assert average_run_length(0.5, 3.0, -0.5, two_sided=False) == pytest.approx(1962.79, abs=0.00501)
    assert average_run_length(0.5, 3.0, 0.5, two_sided=False) == pytest.approx(17.3505, abs=0.501e-4)
    assert average_run_length(0.6, 3.0, -0.2) == pytest.approx(65.46, abs=0.00501)


NIST_VALUES = (
    "324.925 324.675 324.725 324.350 325.350 325.225 324.125 324.525 325.225 324.600 324.625 325.150 328.325 "
    "327.250 327.825 328.500 326.675 327.775 326.875 328.350"
)


def test_nist_worked_example() -> None:
    # NIST/SEMATECH e-Handbook 6.3.2.3: READ second-hand in two public files, and COMPUTED exactly
    x = np.array([float(value) for value in NIST_VALUES.split()])
    trace = cusum(x, target=325.0, reference=0.3175, interval=4.1959)
    high = [0, 0, 0, 0, 0.0325, *[0] * 7, 3.0075, 4.94, 7.4475, 10.63, 11.9875, 14.445, 16.0025, 19.035]
    np.testing.assert_allclose(trace.high, high, atol=1e-10)
    low = [0, 0.01, 0, 0.33, 0, 0, 0.56, 0.72, 0.17, 0.25, 0.31, 0, *[0] * 8]
    np.testing.assert_allclose(trace.low, low, atol=0.00501)
    assert trace.low.max() == pytest.approx(0.715, abs=1e-9)
    assert trace.first_high == 13  # group 14
    assert trace.first_low is None
    # COMPUTED, in units of sigma = 0.635 (MEMORY)
    h = 4.1959 / 0.635
    assert h == pytest.approx(6.6077, abs=1e-4)
    assert average_run_length(0.5, h) == pytest.approx(2350.3, abs=0.0501)
    assert average_run_length(0.5, h, two_sided=False) == pytest.approx(4700.6, abs=0.0501)
    assert average_run_length(0.5, h, shift=1.0) == pytest.approx(13.588, abs=0.000501)


@njit
def _run_lengths(  # type: ignore[no-untyped-def]
    random: np.random.Generator, runs: int, shift: float, settings: tuple[float, float, float]
):
    reference, interval, clip = settings
    lengths = np.zeros(runs)
    for run in range(runs):
        high, low = 0.0, 0.0
        while high <= interval and low <= interval:
            high, low = cusum_step(high, low, random.normal(shift, 1.0), reference, clip, 2.0 * interval)
            lengths[run] += 1.0
    return lengths


@pytest.mark.parametrize(
    ("reference", "interval", "clip", "shift"),
    [(0.5, 4.0, None, 0.0), (0.5, 4.0, 2.0, 0.0), (0.25, 5.1, 2.5, 0.5), (1.0, 2.6, 2.2, 1.5)],
)
def test_the_shipped_test_runs_as_long_as_computed(
    reference: float, interval: float, clip: float | None, shift: float
) -> None:
    runs = 100_000
    settings = (reference, interval, math.inf if clip is None else clip)
    lengths = _run_lengths(np.random.default_rng(20261201), runs, shift, settings)
    computed = average_run_length(reference, interval, shift, clip=clip)
    error = lengths.std(ddof=1) / math.sqrt(runs)
    assert abs(lengths.mean() - computed) < 3.0 * error
    assert error < 0.01 * computed
    if clip is not None:
        unclipped = average_run_length(reference, interval, shift)
        assert abs(unclipped - computed) > 3.0 * error
