"""Results of cycles as tables, one row per cycle and tag, with the columns of the result files."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from plant_models.model_scale import columns_from_model
from plant_models.specification import EstimateSpec, Range
from softsensor.cycle_results import CycleResults, outside
from softsensor.detection.conformance import BLOCK, LOOK_EVERY_BLOCKS
from softsensor.detection.flags import Flag
from softsensor.estimation.lab_results import LabOutcome
from softsensor.estimation.smoothing import SmoothedCycles
from softsensor.layout import UnitDesign
from softsensor.published import Published, interval, limits_in_model_scale, published
from softsensor.readings_of_cycle import CycleQuality, CycleReadings

STATUS_NAMES = ("Good", "Uncertain", "Bad")

ESTIMATE_COLUMNS = ("time", "tag", "value", "sd", "lower", "upper", "status", "reason")
SMOOTHED_COLUMNS = ("time", "tag", "value", "sd", "lower", "upper")
INNOVATION_COLUMNS = (
    "time", "tag", "reading", "predicted", "innovation", "sd", "used", "cusum_high", "cusum_low",
)  # fmt: skip
CONFORMANCE_COLUMNS = ("time", "tag", "beyond_tolerance")
FLAG_COLUMNS = (
    "flag", "tag", "kind", "onset", "detected", "cleared", "size", "size_sd", "probability", "group",
)  # fmt: skip
HYPOTHESIS_COLUMNS = ("flag", "explanation", "probability", "onset_from", "onset_to")
LAB_COLUMNS = (
    "sampled_at", "reported_at", "tag", "value", "arrived_at_cycle", "counted_at_cycle",
    "predicted", "innovation", "sd", "status", "reason",
)  # fmt: skip

NOT_A_TIME = np.iinfo(np.int64).min
"""How numpy writes it."""
INPUT_REASONS = {
    CycleQuality.UNCERTAIN: "{} is Uncertain",
    CycleQuality.BAD: "{} is Bad, its last value is held",
    CycleQuality.MISSING: "{} has had no value yet",
    CycleQuality.STALE: "{} is too old, its last value is held",
    CycleQuality.UNMAPPED: "{} is outside what its transform can take, its last value is held",
}


def moments(times: np.ndarray | Sequence[int | None]) -> pd.DatetimeIndex:
    """UTC times of integer microseconds; None becomes not-a-time."""
    if not isinstance(times, np.ndarray):
        times = np.array([NOT_A_TIME if time is None else time for time in times], dtype=np.int64)
    return pd.DatetimeIndex(times.astype(np.int64).view("datetime64[us]")).tz_localize("UTC")


def words_of(codes: np.ndarray, words: Iterable[str]) -> Any:
    """Texts by their codes (of any shape, in order), as an array of text: put together from whole words, not one by one."""
    return pd.array(list(words), dtype="str").take(codes.ravel())


def _words(codes: np.ndarray, words: Sequence[str]) -> pd.Categorical:
    """Texts by their codes, kept as codes."""
    return pd.Categorical.from_codes(codes, pd.Index(list(words), dtype=object))


def reasons(design: UnitDesign, readings: CycleReadings, results: CycleResults) -> np.ndarray:
    """(N, n_estimates) texts: why an estimate is not Good; empty where it is. Put into words once for each pattern."""
    codes, texts = _coded_reasons(design, readings, results)
    words: np.ndarray = np.array(texts, dtype=object)[codes]
    return words


def _coded_reasons(
    design: UnitDesign, readings: CycleReadings, results: CycleResults
) -> tuple[np.ndarray, list[str]]:
    """As :func:`reasons`: (N, n_estimates) places in a list of texts, whose first is empty."""
    spec, n = design.model.spec, len(results)
    codes, texts = np.zeros((n, len(spec.estimates)), dtype=np.int64), [""]
    doubtful = np.flatnonzero(np.any(results.status != 0, axis=1))
    if not doubtful.size:
        return codes, texts
    known = results.estimate[doubtful]
    own = _outside_each(
        columns_from_model(spec.estimates, known), [item.validated_range for item in spec.estimates]
    )
    impossible = _outside_each(known, [limits_in_model_scale(item) for item in spec.estimates])
    pattern = np.column_stack(
        [
            readings.u_quality[doubtful],
            _outside_each(readings.u[doubtful], [item.validated_range for item in spec.inputs]),
            _outside_each(readings.u[doubtful], _covered(design)),
            results.settling[doubtful],
            results.left_out[doubtful],
            _codes(results.doubts[doubtful]),
            own,
            impossible,
        ]
    )
    _, at, of_row = np.unique(pattern, axis=0, return_index=True, return_inverse=True)
    places = np.zeros((len(at), len(spec.estimates)), dtype=np.int64)
    for place, first in enumerate(at):
        shared = _shared_reasons(design, readings, results, int(doubtful[first]))
        for e, item in enumerate(spec.estimates):
            beyond = f"{item.tag} is outside its validated range" if own[first, e] else ""
            words = [*shared, results.doubts[doubtful[first], e], beyond]
            words += [_impossible(item)] if impossible[first, e] else []
            places[place, e] = len(texts)
            texts.append("; ".join(text for text in words if text))
    codes[doubtful] = places[of_row.reshape(-1)]
    return codes, texts


def _impossible(item: EstimateSpec) -> str:
    """Why an estimate that the state puts where it cannot be is Uncertain."""
    if item.limits is None:
        assert item.transform is not None
        return f"{item.tag} is beyond what its {item.transform.text} covers"
    return f"the model puts {item.tag} beyond its limits, {item.limits[0]:g} to {item.limits[1]:g}"


def _codes(texts: np.ndarray) -> np.ndarray:
    """(N, n) numbers that are equal where the texts are."""
    codes, _ = pd.factorize(texts.ravel())
    return codes.reshape(texts.shape)


def _outside_each(values: np.ndarray, limits: Sequence[tuple[float, float] | None]) -> np.ndarray:
    """(N, n) 1 where a value lies outside its own limits."""
    out = np.zeros(values.shape, dtype=np.int8)
    for place, pair in enumerate(limits):
        out[:, place] = outside(values[:, place], pair)
    return out


def _covered(design: UnitDesign) -> list[Range | None]:
    """By input the range that schedules cover; None where none goes by it."""
    covered = dict(design.scheduled)
    return [covered.get(j) for j in range(len(design.model.spec.inputs))]


def _shared_reasons(design: UnitDesign, readings: CycleReadings, results: CycleResults, k: int) -> list[str]:
    spec, found = design.model.spec, []
    for j, item in enumerate(spec.inputs):
        quality = CycleQuality(int(readings.u_quality[k, j]))
        if quality in INPUT_REASONS:
            found.append(INPUT_REASONS[quality].format(item.tag))
        if outside(readings.u[k : k + 1, j], item.validated_range)[0]:
            found.append(f"{item.tag} is outside its validated range")
    for j, covered in design.scheduled:
        if outside(readings.u[k : k + 1, j], covered)[0]:
            found.append(f"{spec.inputs[j].tag} is outside the schedule, {covered[0]:g} to {covered[1]:g}")
    if results.settling[k] == 1 and not found:
        found.append("inputs were missing; what they did meanwhile is not in the estimate")
    found += [f"{item.tag} is left out" for i, item in enumerate(spec.sensors) if results.left_out[k, i]]
    return found


def estimate_table(design: UnitDesign, readings: CycleReadings, results: CycleResults) -> pd.DataFrame:
    """One row per cycle and estimate, cycle by cycle."""
    tags, n = list(design.model.estimate_tags), len(results)
    return pd.DataFrame(
        {
            "time": moments(results.times).repeat(len(tags)),
            "tag": _words(np.tile(np.arange(len(tags)), n), tags),
            **_published(design, results.estimate, results.sd),
            "status": _words(results.status.ravel(), STATUS_NAMES),
            "reason": words_of(*_coded_reasons(design, readings, results)),
        },
        copy=False,
    )


def _published(design: UnitDesign, mean: np.ndarray, sd: np.ndarray) -> dict[str, np.ndarray]:
    """The columns value, sd, lower and upper of all estimates, cycle by cycle, from (N, n_estimates) in model scale."""
    spec = design.model.spec
    if all(item.transform is None and item.limits is None for item in spec.estimates):
        columns = interval(mean.ravel(), sd.ravel())
        return columns._asdict()
    each = [published(item, mean[:, e], sd[:, e]) for e, item in enumerate(spec.estimates)]
    return {name: np.column_stack([getattr(one, name) for one in each]).ravel() for name in Published._fields}


def smoothed_table(design: UnitDesign, cycles: SmoothedCycles) -> pd.DataFrame:
    """One row per cycle and estimate, cycle by cycle: the estimate given all readings of the period."""
    tags, n = list(design.model.estimate_tags), len(cycles.times)
    return pd.DataFrame(
        {
            "time": moments(cycles.times).repeat(len(tags)),
            "tag": _words(np.tile(np.arange(len(tags)), n), tags),
            **_published(design, cycles.estimate, cycles.sd),
        }
    )


def innovation_table(design: UnitDesign, results: CycleResults) -> pd.DataFrame:
    """One row per cycle and sensor, cycle by cycle."""
    tags, n = list(design.model.sensor_tags), len(results)
    return pd.DataFrame(
        {
            "time": moments(results.times).repeat(len(tags)),
            "tag": _words(np.tile(np.arange(len(tags)), n), tags),
            "reading": results.reading.ravel(),
            "predicted": columns_from_model(design.model.spec.sensors, results.predicted).ravel(),
            "innovation": results.innovation.ravel(),
            "sd": results.innovation_sd.ravel(),
            "used": results.used.ravel(),
            "cusum_high": results.high.ravel(),
            "cusum_low": results.low.ravel(),
        },
        copy=False,
    )


def conformance_table(design: UnitDesign, results: CycleResults) -> pd.DataFrame:
    """The probability that each sensor's bias lies beyond its tolerance, at the cycles that weighed it anew."""
    tags, numbers = list(design.model.sensor_tags), results.first + np.arange(len(results))
    every = BLOCK * LOOK_EVERY_BLOCKS
    rows = np.flatnonzero(numbers % every == every - 1) if results.first >= 0 else np.zeros(0, dtype=np.int64)
    return pd.DataFrame(
        {
            "time": moments(results.times[rows]).repeat(len(tags)),
            "tag": _words(np.tile(np.arange(len(tags)), len(rows)), tags),
            "beyond_tolerance": results.beyond[rows].ravel(),
        }
    )


def flag_table(flags: Sequence[Flag]) -> pd.DataFrame:
    """One row per flag, in order of detection."""
    return pd.DataFrame(
        {
            "flag": [flag.flag for flag in flags],
            "tag": [flag.tag for flag in flags],
            "kind": [flag.kind for flag in flags],
            "onset": moments([flag.onset for flag in flags]),
            "detected": moments([flag.detected for flag in flags]),
            "cleared": moments([flag.cleared for flag in flags]),
            "size": np.array([flag.size for flag in flags], dtype=np.float64),
            "size_sd": np.array([flag.size_sd for flag in flags], dtype=np.float64),
            "probability": np.array([flag.probability for flag in flags], dtype=np.float64),
            "group": ["; ".join(flag.group) for flag in flags],
        }
    )


def hypothesis_table(flags: Sequence[Flag]) -> pd.DataFrame:
    """One row per flag and explanation that was weighed; the onset's interval stands beside the one that was flagged."""
    rows = [(flag, name, probability) for flag in flags for name, probability in flag.hypotheses]
    return pd.DataFrame(
        {
            "flag": [flag.flag for flag, _, _ in rows],
            "explanation": [name for _, name, _ in rows],
            "probability": np.array([probability for _, _, probability in rows], dtype=np.float64),
            "onset_from": moments([flag.onset_from if name == flag.tag else None for flag, name, _ in rows]),
            "onset_to": moments([flag.onset_to if name == flag.tag else None for flag, name, _ in rows]),
        }
    )


def lab_table(labs: Sequence[LabOutcome]) -> pd.DataFrame:
    """One row per laboratory result, in order of arrival."""
    return pd.DataFrame(
        {
            "sampled_at": moments([lab.arrival.sampled for lab in labs]),
            "reported_at": moments([lab.arrival.reported for lab in labs]),
            "tag": [lab.arrival.tag for lab in labs],
            "value": np.array([lab.arrival.value for lab in labs], dtype=np.float64),
            "arrived_at_cycle": np.array([lab.arrived_cycle for lab in labs], dtype=np.int64),
            "counted_at_cycle": np.array([lab.counted_cycle for lab in labs], dtype=np.int64),
            "predicted": np.array([lab.predicted for lab in labs], dtype=np.float64),
            "innovation": np.array([lab.innovation for lab in labs], dtype=np.float64),
            "sd": np.array([lab.sd for lab in labs], dtype=np.float64),
            "status": [lab.status for lab in labs],
            "reason": [lab.reason for lab in labs],
        }
    )
