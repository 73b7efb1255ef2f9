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
                started = [await plant.start("run", path) for path, _ in cases]
                ended = await asyncio.gather(*(plant.finished(process) for process in started))
                # the page's port is looked at before anything is compiled, the publisher's when it begins
                for (_, expected), outcome, before in zip(cases, ended, ("", "", "preparing ("), strict=True):
                    refused(outcome, *expected, before=before)

    asyncio.run(story())


def test_two_services_on_one_unit(tmp_path: Path, new_plant: Any) -> None:
    """The one whose readings are on record second finds the other's there, and ends with what to look at."""

    async def story() -> None:
        async with new_plant(tmp_path) as plant:
            site = plant.site("site.toml")
            with open_database(plant.url) as database:
                pair = [await plant.start("run", site), await plant.start("run", site)]
                waiting = [asyncio.create_task(plant.finished(process)) for process in pair]
                done, other = await asyncio.wait(waiting, return_when=asyncio.FIRST_COMPLETED)
                (ended,) = done
                status, _, err = ended.result()
                assert "Traceback" not in err
                assert (status, err.count("does another service write this unit?")) == (2, 1)
                seen = latest_cycle(database, 1) or 0
                await plant.until(lambda: (latest_cycle(database, 1) or 0) > seen + 5)
                for process in pair:
                    if process.returncode is None:
                        process.terminate()
                (left,) = other
                status, _, err = await left
                assert (status, "Traceback" in err) == (0, False)

    asyncio.run(story())
