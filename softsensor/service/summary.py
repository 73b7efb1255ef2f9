"""The summary of a run: per sensor and per estimate the figures that say whether the model and its promises hold."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from softsensor.cycle_results import CycleResults
from softsensor.detection.flags import Flag, Note
from softsensor.estimation.lab_results import LabOutcome, with_corrections
from softsensor.layout import UnitDesign
from softsensor.published import NORMAL_95
from softsensor.service.running_counts import count, no_counts


class RunSummary:
    """Adds results up as they come; nothing is kept per cycle. nis and whiteness are of the readings used."""

    def __init__(self, design: UnitDesign) -> None:
        self._design = design
        self._cycles = 0
        self._counts = no_counts(design.kernel.n_sensors)
        self.flags: dict[str, Flag] = {}
        self.notes: list[Note] = []
        self._arrived: list[LabOutcome] = []

    @property
    def labs(self) -> list[LabOutcome]:
        """What became of every laboratory result, corrections made."""
        return with_corrections(self._arrived)

    def add_labs(self, outcomes: Iterable[LabOutcome]) -> None:
        """Laboratory results that have arrived."""
        self._arrived += outcomes

    def add(self, results: CycleResults) -> None:
        """Count these cycles' results."""
        self._cycles += len(results)
        count(self._counts, results)
        for flag in results.flags:
            self.flags[flag.flag] = flag
        self.notes += results.notes

    def as_dict(self, digest: str) -> dict[str, Any]:
        """The content of summary.json."""
        return {
            "unit": self._design.model.spec.name,
            "cycles": self._cycles,
            "digest": digest,
            "model_digest": self._design.model.digest,
            "sensors": {tag: self._sensor(i, tag) for i, tag in enumerate(self._design.model.sensor_tags)},
            "estimates": {tag: self._estimate(e) for e, tag in enumerate(self._design.model.estimate_tags)},
            "flags": len(self.flags),
            "notes": [note.text for note in self.notes],
            "caution": "Advisory only: not a safety function and no basis for defeating one.",
        }

    def _sensor(self, i: int, tag: str) -> dict[str, Any]:
        counts = self._counts
        readings, pairs, runs = int(counts.readings[i]), int(counts.pairs[i]), int(counts.runs[i])
        nis = float(counts.squares[i]) / readings if readings else None
        whiteness = float(counts.products[i]) / pairs / nis if pairs and nis else None
        return {
            "readings": readings,
            "nis": nis,
            "whiteness": whiteness,
            "flags": sum(flag.tag == tag for flag in self.flags.values()),
            "promised_run_length": self._design.model.spec.false_flag_interval
            / self._design.model.spec.sample_time,
            "achieved_run_length": self._cycles / runs if runs else None,
            "disarmed": dict(self._design.model.spec.disarmed).get(tag),
        }

    def _estimate(self, e: int) -> dict[str, Any]:
        labs = [lab for lab in self.labs if lab.arrival.estimate == e]
        used = [lab for lab in labs if lab.status == "used"]
        errors = np.array([lab.arrival.value - lab.predicted for lab in used])
        inside = [abs(lab.innovation) <= NORMAL_95 * lab.sd for lab in used]
        return {
            "lab_count": len(used),
            "lab_left_out": len(labs) - len(used),
            "rmsep": float(np.sqrt(np.mean(errors**2))) if used else None,
            "bias": float(np.mean(errors)) if used else None,
            "coverage": float(np.mean(inside)) if used else None,
        }
