"""A unit's state as bytes and back, with a format version: what a restart goes on from."""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from softsensor.cycle import CycleState, LabAtCycle
from softsensor.cycle_results import Digest
from softsensor.detection.flags import (
    Beginning,
    Episode,
    Exclusion,
    Flag,
    FlagBook,
    HeldState,
    Rest,
    RestSpell,
)
from softsensor.detection.state_of_tests import TestState
from softsensor.errors import RecordsError
from softsensor.estimation.kernel import EstimatorState
from softsensor.records.named_arrays import pack_arrays, unpack_arrays

FORMAT = 7
"""2: with the bank of tests; 3: with the gate's streaks in the estimator's state; 4: with the long memory;
5: with both times of laboratory results; 6: with the onset's interval and what was weighed in open flags;
7: with flags whose error the estimate follows."""


@dataclass(frozen=True)
class Context:
    """What belongs to a state besides itself.

    The model's digest, the time of its cycle 0, the earliest cycle that the run remembers (never one of another
    revision), the laboratory results counted so far.
    """

    model_digest: str
    first_time: int
    first_remembered: int
    labs: tuple[LabAtCycle, ...] = ()


def pack_state(state: CycleState, context: Context) -> bytes:
    """The whole state before the coming cycle."""
    arrays: dict[str, NDArray[Any]] = {
        f"estimator.{name}": part for name, part in state.estimator._asdict().items()
    }
    arrays |= {f"tests.{name}": part for name, part in state.tests._asdict().items()}
    arrays["rest"] = np.frombuffer(_rest(state, context), dtype=np.uint8)
    return pack_arrays(arrays)


def pack_estimator(estimator: EstimatorState) -> bytes:
    """The estimator's state alone: enough to go back to, not to resume from."""
    return pack_arrays({f"estimator.{name}": part for name, part in estimator._asdict().items()})


def unpack_estimator(blob: bytes, version: int) -> EstimatorState:
    """The estimator's state of either kind of checkpoint."""
    return _estimator(_arrays(blob, version))


def unpack_state(blob: bytes, version: int) -> tuple[CycleState, Context]:
    """The whole state and its context.

    :raises RecordsError: another format, or damaged.
    """
    arrays = _arrays(blob, version)
    try:
        tests = TestState(*(arrays[f"tests.{name}"] for name in TestState._fields))
        rest = json.loads(arrays["rest"].tobytes())
        book = FlagBook(
            tuple(_flag(item) for item in rest["open"]),
            Episode(**rest["episode"]) if rest["episode"] else None,
            tuple(Exclusion(**item) for item in rest["exclusions"]),
            Rest(**rest["rest"]) if rest.get("rest") else None,
            tuple(HeldState(**item) for item in rest.get("states", ())),
            Beginning(**rest["beginning"]) if rest.get("beginning") else None,
            RestSpell(**rest["settling"]) if rest.get("settling") else None,
            tuple(rest["absorbed"]),
            tuple(_flag(item) for item in rest["answered"]),
            tuple(float.fromhex(value) for value in rest["weighed"]),
        )
        digest = Digest(bytes.fromhex(rest["chain"]), bytes.fromhex(rest["pending"]), rest["rows"])
        labs = tuple(
            LabAtCycle(cycle, estimate, float.fromhex(value), float.fromhex(variance), sampled, reported)
            for cycle, estimate, value, variance, sampled, reported in rest["labs"]
        )
        context = Context(rest["model"], rest["first_time"], rest["first_remembered"], labs)
        return CycleState(_estimator(arrays), tests, book, digest, tuple(rest["rejected"])), context
    except (KeyError, TypeError, ValueError) as error:
        raise RecordsError(f"a checkpoint is damaged: {error!r}") from None


def _rest(state: CycleState, context: Context) -> bytes:
    book = state.book
    content = {
        "model": context.model_digest,
        "first_time": context.first_time,
        "first_remembered": context.first_remembered,
        "labs": [
            [
                lab.cycle,
                lab.estimate,
                float(lab.value).hex(),
                float(lab.variance).hex(),
                lab.sampled,
                lab.reported,
            ]
            for lab in context.labs
        ],
        "open": [asdict(flag) for flag in book.open],
        "episode": asdict(book.episode) if book.episode else None,
        "rest": asdict(book.rest) if book.rest else None,
        "states": [asdict(state) for state in book.states],
        "beginning": asdict(book.beginning) if book.beginning else None,
        "settling": asdict(book.settling) if book.settling else None,
        "absorbed": list(book.absorbed),
        "weighed": [float(value).hex() for value in book.weighed],
        "answered": [asdict(flag) for flag in book.answered],
        "exclusions": [asdict(item) for item in book.exclusions],
        "chain": state.digest.chain.hex(),
        "pending": state.digest.pending.hex(),
        "rows": state.digest.rows,
        "rejected": list(state.rejected),
    }
    return json.dumps(content).encode()


def _flag(item: dict[str, Any]) -> Flag:
    weighed = tuple((name, probability) for name, probability in item["hypotheses"])
    return Flag(**{**item, "group": tuple(item["group"]), "hypotheses": weighed})


def _arrays(blob: bytes, version: int) -> dict[str, NDArray[Any]]:
    if version != FORMAT:
        raise RecordsError(f"a checkpoint has format {version}; this release reads format {FORMAT}")
    return unpack_arrays(blob)


def _estimator(arrays: dict[str, NDArray[Any]]) -> EstimatorState:
    try:
        return EstimatorState(*(arrays[f"estimator.{name}"] for name in EstimatorState._fields))
    except KeyError as error:
        raise RecordsError(f"a checkpoint is damaged: {error} is missing") from None
