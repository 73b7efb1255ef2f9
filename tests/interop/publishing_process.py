"""A process that publishes an estimate until it is killed: ``publishing_process.py ENDPOINT FIRST``.

The value counts up from FIRST, so that who watches can tell one run from the next.
"""

from __future__ import annotations

import asyncio
import itertools
import sys

from connectors.opcua.analog_item import EngineeringUnit
from connectors.opcua.publisher import PublishedEstimate, PublishedUnit, Publisher

TIME = 1_796_104_800_000_000
UNIT = PublishedUnit("R-210", (PublishedEstimate("AY2101", EngineeringUnit("mol/L"), (0.0, 4.0)),), ())


async def main(endpoint: str, first: int) -> None:
    async with Publisher(endpoint, [UNIT]) as publisher:
        print("READY", flush=True)
        for count in itertools.count(first):
            value, status = float(count), 0x40930000 if count % 2 else 0
            time = TIME + count * 10_000_000
            await publisher.publish_estimate(
                "R-210", "AY2101", value, 0.5, value - 1, value + 1, time, status
            )
            await asyncio.sleep(0.1)


if __name__ == "__main__":
    asyncio.run(main(sys.argv[1], int(sys.argv[2])))
