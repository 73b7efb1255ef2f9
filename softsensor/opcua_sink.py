"""What our own OPC UA server shows: estimates with their intervals, sensors' health, flags as conditions."""

from __future__ import annotations

import asyncio

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.conditions import FlagAction, FlagCondition, OnAction
from connectors.opcua.publisher import DeviceHealth, PublishedEstimate, PublishedUnit, Publisher
from plant_models.plant_model import PlantModel
from plant_models.units import engineering_units
from softsensor.alarms.sensor_status import sensor_health
from softsensor.detection.flags import Flag
from softsensor.published import published_one
from softsensor.records.changes import acknowledge_flag, comment_flag
from softsensor.records.engine import Database
from softsensor.service.recording import Step
from softsensor.service.unit_service import UnitService

STATUS_CODES = (0x00000000, 0x40950000, 0x80310000)
"""OPC UA codes of Good, Uncertain (UncertainSubNormal) and Bad (BadNoCommunication)."""
CLIENT = "a client over OPC UA"


class OpcUaSink:
    """Publishes each cycle of each unit."""

    def __init__(self, publisher: Publisher) -> None:
        self._publisher = publisher

    async def begin(self, unit: UnitService) -> None:
        """Show the flags that were open when the unit resumed."""
        for flag in unit.run.state.book.open:
            await self._raise(unit.name, flag)

    async def publish(self, unit: UnitService, step: Step) -> None:
        """One cycle's outcome."""
        results, now = step.results, int(step.results.times[0])
        for e, item in enumerate(unit.model.spec.estimates):
            await self._publisher.publish_estimate(
                unit.name,
                item.tag,
                *published_one(item, float(results.estimate[0, e]), float(results.sd[0, e])),
                now,
                STATUS_CODES[int(results.status[0, e])],
            )
        book = unit.run.state.book
        for i, tag in enumerate(unit.model.sensor_tags):
            use = book.worked_on(i, results.first), book.waits(i, results.first)
            health = DeviceHealth(sensor_health(book, tag, *use).code)
            await self._publisher.publish_sensor_health(
                unit.name, tag, health, now, float(results.beyond[0, i])
            )
        for flag in results.flags:
            if flag.cleared is None:
                await self._raise(unit.name, flag)
            else:
                await self._publisher.clear_flag(unit.name, flag.flag, flag.cleared)

    async def _raise(self, unit: str, flag: Flag) -> None:
        words = f"{flag.tag}: {flag.kind}, probability {flag.probability:.3f}"
        if not flag.isolated:
            words += f"; cannot be told apart: {'; '.join(flag.group)}"
        condition = FlagCondition(flag.flag, unit, flag.tag, words, flag.detected)
        await self._publisher.raise_flag(condition)


def flag_action(database: Database) -> OnAction:
    """What is done when a client acknowledges a flag or comments on it: the same as from the page, audited."""

    async def act(action: FlagAction) -> None:
        if action.action == "acknowledge":
            await asyncio.to_thread(acknowledge_flag, database, action.flag, CLIENT, action.comment)
        else:
            await asyncio.to_thread(comment_flag, database, action.flag, CLIENT, action.comment)

    return act


def published_units(models: list[PlantModel]) -> list[PublishedUnit]:
    """What our own server shows."""
    return [
        PublishedUnit(
            model.spec.name,
            tuple(
                PublishedEstimate(item.tag, _engineering_unit(item.unit), item.range)
                for item in model.spec.estimates
            ),
            model.sensor_tags,
        )
        for model in models
    ]


def _engineering_unit(text: str) -> EngineeringUnit:
    _, unit_id, display_name = engineering_units(text)
    return EngineeringUnit(display_name, unit_id)
