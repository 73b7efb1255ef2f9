"""A plant's OPC UA server as a stream of readings that goes on through every loss of the connection.

The connection is made by a loop of our own: a new :class:`PlantSession` for each attempt, waiting 0.2 s after
the first failure and up to 2 s after later ones. Whoever reads ``events()`` sees readings, what happened to
the connection, and how many readings were lost because they were not taken in time. The program never writes
to the plant's server.
"""

from __future__ import annotations

import asyncio
import contextlib
from collections.abc import AsyncIterator, Mapping
from types import TracebackType

from asyncua import ua

from connectors.errors import NodeError, PlantConnectionError
from connectors.events import ConnectionChange, SourceEvent
from connectors.opcua.conversion import ReadingConverter, to_datetime
from connectors.opcua.event_queue import EventQueue
from connectors.opcua.node_ids import NamespacedNodeId, parse_node_id
from connectors.opcua.plant_session import CLOSE_TIMEOUT, PlantSession
from connectors.opcua.problems import LIBRARY_ERRORS, connection_error, user_refused
from connectors.opcua.quality import overflowed
from connectors.opcua.settings import OpcUaSettings
from connectors.readings import Reading

FIRST_WAIT = 0.2
LONGEST_WAIT = 2.0
REFUSED_WAIT = 10.0
"""Seconds between attempts that the server refused a user: an account must not be locked by our trying."""
_CHECK_INTERVAL = 1.0
_NODE_RETRY = 2.0
_STABLE = 2.0
"""A connection that held for so many seconds starts the waiting times anew."""
_LONGEST_GAP = 31 * 86_400_000_000
"""Microseconds of history that are asked for at most after a loss."""
_KEEPS_NONE = frozenset(
    {
        ua.StatusCodes.BadHistoryOperationUnsupported,
        ua.StatusCodes.BadHistoryOperationInvalid,
        ua.StatusCodes.BadServiceUnsupported,
        ua.StatusCodes.BadNotReadable,
        ua.StatusCodes.BadUserAccessDenied,
        ua.StatusCodes.BadNodeIdUnknown,
        ua.StatusCodes.BadNoData,
    }
)
"""What a server answers that keeps no history of a node, or not for us."""
_ROOM_WAIT = 0.02
"""Seconds between two looks at whether the reader has made room for readings that a server had kept."""
DEFAULT_QUEUE_SIZE = 20_000


class OpcUaSource:
    """Readings of named tags from one OPC UA server.

    ::

        async with OpcUaSource(settings, {"TI2101A": "nsu=urn:example:plant;s=R210.TI2101A"}) as source:
            async for event in source.events():
                ...

    :param nodes: tag to node id text, with the namespace's URI.
    :param queue_size: events kept for the reader; beyond it the oldest reading is dropped and counted.
    :param strict: a node that is not there at the first connection is an error of ``events()``; otherwise,
        and always later on, it is asked for again every two seconds while the others go on.
    :raises NodeError: one line per node id that does not parse.
    """

    def __init__(
        self,
        settings: OpcUaSettings,
        nodes: Mapping[str, str],
        queue_size: int = DEFAULT_QUEUE_SIZE,
        *,
        strict: bool = True,
    ) -> None:
        self._settings = settings
        self._nodes = _parse_all(nodes)
        self._queue = EventQueue(queue_size)
        self._converter = ReadingConverter()
        self._strict = strict
        self._task: asyncio.Task[None] | None = None
        self._session: PlantSession | None = None
        self._resolved: dict[str, ua.NodeId] = {}
        self._problems: dict[str, str] = {}
        self._connected_once = False
        self._newest: dict[str, int] = {}
        self._no_history: set[str] = set()
        self._told = ""

    @property
    def connected(self) -> bool:
        """Whether readings are being delivered now."""
        return self._session is not None

    @property
    def node_problems(self) -> Mapping[str, str]:
        """Tags whose nodes the server does not deliver at present, each with the reason."""
        return dict(self._problems)

    @property
    def refused_values(self) -> Mapping[str, int]:
        """How many values were no use, by reason; each gave a Bad reading, or none where it had no time."""
        return dict(self._converter.refused)

    async def __aenter__(self) -> OpcUaSource:
        self._task = asyncio.create_task(
            self._keep_connected(), name=f"readings from {self._settings.endpoint}"
        )
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, traceback: TracebackType | None
    ) -> None:
        await self.close()

    async def close(self) -> None:
        """End the connection within a bounded time; ``events()`` ends after what is queued."""
        task, self._task = self._task, None
        while task is not None and not task.done():
            task.cancel()
            await asyncio.wait({task}, timeout=CLOSE_TIMEOUT)
        self._queue.close()

    async def events(self) -> AsyncIterator[SourceEvent]:
        """Everything that happens, in order, until ``close``.

        :raises NodeError: when ``strict`` and a node is not there at the first connection; one line per tag.
        """
        while (event := await self._queue.get()) is not None:
            yield event

    async def probe(self) -> None:
        """Connect once and see that every node is there; for a start that should fail early and plainly.

        :raises PlantConnectionError: when the server does not answer or refuses us, with its address.
        :raises NodeError: one line per tag whose node is not there.
        """
        session = await PlantSession.open(self._settings, lambda tag, data: None)
        try:
            _, problems = await session.resolve(self._nodes)
        except LIBRARY_ERRORS as error:
            raise connection_error(self._settings, error) from error
        finally:
            await session.close()
        if problems:
            raise _node_error(problems)

    async def read_history(self, tag: str, start: int, end: int) -> list[Reading]:
        """Values that the server kept from ``start`` to ``end`` (UTC microseconds, both included), in order.

        A server repeats the value at the edge between two answers: of one source time only the last is kept.
        A node without history gives an empty list.

        :raises PlantConnectionError: when there is no connection, or the server refuses.
        :raises NodeError: when the tag's node is not there.
        """
        session = self._session
        if session is None:
            raise PlantConnectionError(f"{self._settings.endpoint}: not connected")
        if tag not in self._resolved:
            raise NodeError(f"{tag}: {self._problems.get(tag, 'not one of the tags that are read')}")
        try:
            return await self._kept_values(session, tag, start, end)
        except LIBRARY_ERRORS as error:
            raise connection_error(self._settings, error) from error

    async def _kept_values(self, session: PlantSession, tag: str, start: int, end: int) -> list[Reading]:
        values = await session.read_history(self._resolved[tag], to_datetime(start), to_datetime(end))
        converter = ReadingConverter()
        by_time = {
            reading.time: reading
            for reading in (converter.convert(tag, data) for data in values)
            if reading is not None and start <= reading.time <= end
        }
        return [by_time[time] for time in sorted(by_time)]

    async def _keep_connected(self) -> None:
        loop = asyncio.get_running_loop()
        wait = FIRST_WAIT
        try:
            while True:
                started = loop.time()
                try:
                    reason = await self._one_connection()
                    shortest = 0.0
                except PlantConnectionError as error:
                    reason = str(error)
                    shortest = REFUSED_WAIT if user_refused(error) else 0.0
                self._tell_lost(reason)
                wait = FIRST_WAIT if loop.time() - started > _STABLE else wait
                await asyncio.sleep(max(wait, shortest))
                wait = min(2.0 * wait, LONGEST_WAIT)
        except Exception as error:
            self._queue.close(error)

    async def _one_connection(self) -> str:
        """Connect, deliver until the connection is over, and say why it is.

        :raises PlantConnectionError: when it cannot be made.
        """
        session = await PlantSession.open(self._settings, self._deliver)
        try:
            since = dict(self._newest)
            await self._start_delivery(session)
            self._session = session
            await self._fill_gap(session, since)
            return f"{self._settings.endpoint}: {await self._watch(session)}"
        except LIBRARY_ERRORS as error:
            raise connection_error(self._settings, error) from error
        finally:
            self._session = None
            await session.close()

    async def _start_delivery(self, session: PlantSession) -> None:
        self._resolved, problems = await session.resolve(self._nodes)
        strict = self._strict and not self._connected_once
        if problems and strict:
            raise _node_error(problems)
        self._connected_once = True
        self._problems = problems
        self._told = ""
        self._tell_connected(problems)
        refused = await session.subscribe(self._resolved)
        if refused and strict:
            raise _node_error(refused)
        self._problems = problems | refused
        if refused:
            self._tell_connected(self._problems)

    async def _fill_gap(self, session: PlantSession, since: Mapping[str, int]) -> None:
        """After a loss of the connection: what the server kept meanwhile, for tags of which it keeps a history.

        :param since: by tag, the newest source time that was delivered before.
        """
        kept = {}
        for tag in [tag for tag in self._resolved if tag in since and tag not in self._no_history]:
            begin = since[tag] + 1
            try:
                found = await self._kept_values(session, tag, begin, begin + _LONGEST_GAP)
            except ua.UaStatusCodeError as error:
                if error.code not in _KEEPS_NONE:
                    raise
                self._no_history.add(tag)
                continue
            for reading in found:
                while len(self._queue) > self._queue.size // 2:
                    await asyncio.sleep(_ROOM_WAIT)
                self._queue.put(reading)
            if found:
                kept[tag] = len(found)
        if kept:
            text = f"taken what the server had kept: {sum(kept.values())} readings, of {len(kept)} of {len(since)} tags"
            self._queue.put(ConnectionChange("connected", f"{self._settings.endpoint}: {text}"))

    async def _watch(self, session: PlantSession) -> str:
        """Wait for the end of a connection; meanwhile ask for what has not come."""
        loop = asyncio.get_running_loop()
        asked = loop.time()
        while True:
            with contextlib.suppress(TimeoutError):
                async with asyncio.timeout(_CHECK_INTERVAL):
                    await session.lost.wait()
            if session.lost.is_set():
                return session.loss
            if session.silent_for() > session.silence_limit():
                return f"the subscription has been silent for {session.silent_for():.0f} s"
            await session.read_unheard()
            if self._problems and loop.time() - asked >= _NODE_RETRY:
                await self._ask_again(session)
                asked = loop.time()

    async def _ask_again(self, session: PlantSession) -> None:
        missing = {tag: self._nodes[tag] for tag in self._problems}
        found, problems = await session.resolve(missing)
        problems |= await session.subscribe(found)
        self._resolved |= found
        self._problems = problems

    def _deliver(self, tag: str, data: ua.DataValue) -> None:
        if data.StatusCode is not None and overflowed(data.StatusCode.value):
            self._queue.count_lost(1)
        reading = self._converter.convert(tag, data)
        if reading is not None:
            self._newest[tag] = max(reading.time, self._newest.get(tag, reading.time))
            self._queue.put(reading)

    def _tell_connected(self, problems: Mapping[str, str]) -> None:
        count = f"{len(self._nodes) - len(problems)} of {len(self._nodes)} tags"
        missing = "".join(f"; {tag}: {reason}" for tag, reason in problems.items())
        self._queue.put(ConnectionChange("connected", f"{self._settings.endpoint}: reading {count}{missing}"))

    def _tell_lost(self, reason: str) -> None:
        if reason != self._told:
            self._told = reason
            self._queue.put(ConnectionChange("disconnected", reason))


def _parse_all(nodes: Mapping[str, str]) -> dict[str, NamespacedNodeId]:
    parsed: dict[str, NamespacedNodeId] = {}
    faults: list[str] = []
    for tag, text in nodes.items():
        try:
            parsed[tag] = parse_node_id(text)
        except NodeError as error:
            faults.extend(f"{tag}: {line}" for line in error.lines)
    if faults:
        raise NodeError(*faults)
    return parsed


def _node_error(problems: Mapping[str, str]) -> NodeError:
    return NodeError(*(f"{tag}: {reason}" for tag, reason in problems.items()))
