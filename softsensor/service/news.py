"""What a cycle brought, as plain data for pages and the console."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from plant_models.model_scale import one_from_model
from softsensor.cycle import UnitDesign
from softsensor.detection.flags import Flag
from softsensor.estimation.lab_results import LabOutcome
from softsensor.published import published_one
from softsensor.service.live_feed import News
from softsensor.service.recording import Step
from softsensor.service.result_tables import STATUS_NAMES, reasons


def number(value: float) -> float | None:
    """A number for JSON: None where there is none."""
    return float(value) if math.isfinite(value) else None


def cycle_news(design: UnitDesign, step: Step) -> News:
    """Estimates with their intervals, sensors with their predictions."""
    results, texts = step.results, reasons(design, step.readings, step.results)
    estimates: dict[str, Any] = {}
    for e, item in enumerate(design.model.spec.estimates):
        value, sd, lower, upper = published_one(item, float(results.estimate[0, e]), float(results.sd[0, e]))
        estimates[item.tag] = {
            "value": number(value),
            "sd": number(sd),
            "lower": number(lower),
            "upper": number(upper),
            "status": str(STATUS_NAMES[results.status[0, e]]),
            "reason": str(texts[0, e]),
        }
    sensors = {
        item.tag: {
            "reading": number(results.reading[0, i]),
            "predicted": number(one_from_model(item, float(results.predicted[0, i]))),
            "used": int(results.used[0, i]),
        }
        for i, item in enumerate(design.model.spec.sensors)
    }
    body = {"time": int(results.times[0]), "cycle": results.first, "estimates": estimates, "sensors": sensors}
    return News(design.model.spec.name, "cycle", body)


def flag_news(unit: str, flag: Flag) -> News:
    """A flag opened, or cleared where ``cleared`` is set."""
    body = asdict(flag)
    body |= {"size": number(flag.size), "size_sd": number(flag.size_sd), "group": "; ".join(flag.group)}
    return News(unit, "flag", body)


def lab_news(unit: str, outcome: LabOutcome) -> News:
    """What became of a laboratory result."""
    arrival = outcome.arrival
    body = {
        "tag": arrival.tag,
        "sampled": arrival.sampled,
        "reported": arrival.reported,
        "value": number(arrival.value),
        "predicted": number(outcome.predicted),
        "sd": number(outcome.sd),
        "status": outcome.status,
        "reason": outcome.reason,
    }
    return News(unit, "lab", body)
