"""``softsensor run`` on what cannot be served: status 2, the message on standard error, never a traceback."""

from __future__ import annotations

import asyncio
import socket
from pathlib import Path
from typing import Any

from softsensor.records.engine import open_database
from softsensor.records.series import latest_cycle


def refused(ended: tuple[int, str, str], *expected: str, before: str = "") -> None:
    status, out, err = ended
    assert "Traceback" not in err
    assert "Exception" not in err
    assert status == 2
    assert out.startswith(before) if before else out == ""
    for piece in expected:
        assert piece in err, err


def test_nodes_and_ports_that_cannot_be_had(tmp_path: Path, new_plant: Any) -> None:
    async def story() -> None:
        async with new_plant(tmp_path) as plant:
            with socket.socket() as taken:
                taken.bind(("127.0.0.1", 0))
                taken.listen()
                port = f"127.0.0.1:{taken.getsockname()[1]}"
                missing = {
                    "TI1": "nsu=urn:example:plant;s=R-1.TI9",
                    "FI1": "nsu=urn:example:nowhere;s=R-1.FI1",
                }
                cases = [
                    (
                        plant.site("a.toml", nodes=missing),
                        ("TI1: ", "R-1.TI9", "FI1: ", "urn:example:nowhere"),
                    ),
                    (plant.site("b.toml", f'[web]\naddress = "{port}"'), (port, "cannot be had")),
                    (
                        plant.site("c.toml", f'[publish]\nendpoint = "opc.tcp://{port}"'),
                        (f"opc.tcp://{port}",),
                    ),
                ]
                # the page's port is looked at before anything is compiled, the publisher's when it begins
                for (path, expected), before in zip(cases, ("", "", "preparing ("), strict=True):
                    outcome = await plant.finished(await plant.start("run", path))
                    refused(outcome, *expected, before=before)

    asyncio.run(story())


def test_two_services_on_one_unit(tmp_path: Path, new_plant: Any) -> None:
    """Of two started at once one serves and the other is refused; a third takes over from a killed one at once."""

    async def story() -> None:
        async with new_plant(tmp_path) as plant:
            site = plant.site("site.toml")
            with open_database(plant.url) as database:
                pair = [await plant.start("run", site), await plant.start("run", site)]
                waiting = [asyncio.create_task(plant.finished(process)) for process in pair]
                done, other = await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
                (ended,), (left,) = done, other
                serving = pair[1 - waiting.index(ended)]
                refused(ended.result(), "unit R-1 is served already", f"by process {serving.pid} on")
                for _ in range(2):
                    seen = latest_cycle(database, 1) or 0
                    await plant.until(lambda seen=seen: (latest_cycle(database, 1) or 0) > seen + 5)
                    assert serving.returncode is None
                    serving.kill()
                    assert (await left)[0] != 0
                    serving = await plant.start("run", site)
                    left = asyncio.create_task(plant.finished(serving))
                seen = latest_cycle(database, 1) or 0
                await plant.until(lambda: (latest_cycle(database, 1) or 0) > seen + 5)
                serving.terminate()
                status, _, err = await left
                assert (status, err) == (0, "")
        assert not list(tmp_path.glob("*-service-*"))

    asyncio.run(story())
