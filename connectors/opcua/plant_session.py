"""One connection to a plant's server, from connect to close: its nodes, its subscription, its signs of life.

Never used twice: after a loss the source makes a new one, with a new client, the namespace array read anew,
node ids rebuilt and a new subscription. Nothing here writes to the server.
"""

from __future__ import annotations

import asyncio
import contextlib
import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from datetime import datetime
from typing import TypeVar

from asyncua import Client, ua

from connectors.errors import NodeError
from connectors.opcua.node_ids import NamespacedNodeId
from connectors.opcua.problems import LIBRARY_ERRORS, connection_error
from connectors.opcua.quality import status_text
from connectors.opcua.security import secure_client
from connectors.opcua.settings import OpcUaSettings

WATCHDOG = 8.0
"""Seconds between looks at the server's state; the library's one second cuts off busy servers."""
CLOSE_TIMEOUT = 2.0
CONNECT_TIMEOUT = 15.0
_KEEP_ALIVE = 2.0
"""Seconds after which a silent subscription says that it is alive."""
_SILENCE_LIMIT = 6.0
"""A subscription that is silent for longer, and for three keep-alives, is taken for dead."""
_LIFETIME = 60.0
_BUFFERED = 5.0
"""Seconds of samples that the server is asked to keep per node between two publications."""
_BATCH = 1000
_NAMESPACE_HANDLE = 0

T = TypeVar("T")
OnData = Callable[[str, ua.DataValue], None]


class PlantSession:
    """A live connection; ``lost`` is set, and ``loss`` says why, when it is over."""

    def __init__(self, settings: OpcUaSettings, client: Client, on_data: OnData) -> None:
        self.lost = asyncio.Event()
        self.loss = ""
        self._settings = settings
        self._client = client
        self._on_data = on_data
        self._tags: dict[int, str] = {}
        self._unheard: dict[str, ua.NodeId] = {}
        self._published = False
        self._next_handle = _NAMESPACE_HANDLE + 1
        self._subscription: ua.CreateSubscriptionResult | None = None
        self._last_sign = asyncio.get_running_loop().time()
        self._read_batch = _BATCH
        self._monitor_batch = _BATCH
        self._namespaces: list[str] | None = None
        client.connection_lost_callback = self._on_connection_lost

    @classmethod
    async def open(cls, settings: OpcUaSettings, on_data: OnData) -> PlantSession:
        """Connect, with security and user as the settings say.

        :raises PlantConnectionError: with the address and the reason.
        """
        client = Client(settings.endpoint, timeout=settings.request_timeout, watchdog_intervall=WATCHDOG)
        session = cls(settings, client, on_data)
        try:
            async with asyncio.timeout(CONNECT_TIMEOUT):
                await secure_client(client, settings)
                await client.connect()
                await session._read_limits()
        except LIBRARY_ERRORS as error:
            await session.close()
            raise connection_error(settings, error) from error
        except BaseException:
            await session.close()
            raise
        return session

    async def close(self) -> None:
        """End the session, the channel and the socket within a bounded time, whatever the server does."""
        self.end("closed by us")
        with contextlib.suppress(*LIBRARY_ERRORS):
            async with asyncio.timeout(CLOSE_TIMEOUT):
                await self._client.disconnect()
        self._client.disconnect_socket()
        await asyncio.sleep(0)

    def end(self, reason: str) -> None:
        """Note that this connection is over; the first reason stays."""
        if not self.lost.is_set():
            self.loss = reason
            self.lost.set()

    async def resolve(
        self, nodes: Mapping[str, NamespacedNodeId]
    ) -> tuple[dict[str, ua.NodeId], dict[str, str]]:
        """Node ids as this server numbers them, and per tag what is wrong with those that it lacks."""
        namespaces = await self._client.get_namespace_array()
        self._namespaces = namespaces
        found: dict[str, ua.NodeId] = {}
        problems: dict[str, str] = {}
        for tag, node in nodes.items():
            try:
                found[tag] = node.resolve(namespaces or [])
            except NodeError as error:
                problems[tag] = str(error)
        problems |= await self._check_variables({tag: nodes[tag] for tag in found}, found)
        return {tag: node for tag, node in found.items() if tag not in problems}, problems

    async def _check_variables(
        self, nodes: Mapping[str, NamespacedNodeId], found: Mapping[str, ua.NodeId]
    ) -> dict[str, str]:
        classes = await self._read(list(found.values()), ua.AttributeIds.NodeClass)
        problems: dict[str, str] = {}
        for (tag, node), data in zip(nodes.items(), classes, strict=True):
            status = data.StatusCode
            if status is not None and not status.is_good():
                problems[tag] = f"{node}: the server answers {status_text(status.value)}"
            elif data.Value is not None and data.Value.Value != ua.NodeClass.Variable:
                problems[tag] = f"{node}: not a variable, so it has no value"
        return problems

    async def read_unheard(self) -> None:
        """Read the present value of those nodes for which the subscription did not bring one.

        A server sends each item's present value first (Part 4, 5.13.1.2). Reading before that would leave a
        gap between the value read and the first one sent, so it is done later, and only where needed.
        """
        if not self._published or not self._unheard:
            return
        nodes, self._unheard = self._unheard, {}
        values = await self._read(list(nodes.values()), ua.AttributeIds.Value)
        for tag, data in zip(nodes, values, strict=True):
            self._on_data(tag, data)

    async def subscribe(self, nodes: Mapping[str, ua.NodeId]) -> dict[str, str]:
        """Ask for every change of value, status or source time; gives the tags that are refused, and why."""
        if self._subscription is None:
            await self._create_subscription()
        problems: dict[str, str] = {}
        for batch in _batches(list(nodes.items()), self._monitor_batch):
            problems |= await self._monitor(dict(batch), len(nodes))
        return problems

    def silent_for(self) -> float:
        """Seconds since the subscription last gave a sign of life, data or keep-alive."""
        return asyncio.get_running_loop().time() - self._last_sign

    def silence_limit(self) -> float:
        """Seconds of silence after which the subscription is taken for dead."""
        if self._subscription is None:
            return _SILENCE_LIMIT
        interval: float = self._subscription.RevisedPublishingInterval / 1000.0
        keep_alive: int = self._subscription.RevisedMaxKeepAliveCount
        return max(_SILENCE_LIMIT, 3.0 * interval * keep_alive)

    async def read_history(self, node: ua.NodeId, start: datetime, end: datetime) -> list[ua.DataValue]:
        """Raw values kept by the server from ``start`` to ``end``, both included."""
        values: list[ua.DataValue] = await self._client.get_node(node).read_raw_history(
            start, end, return_bounds=False
        )
        return values

    async def _create_subscription(self) -> None:
        interval = self._settings.publishing_interval
        keep_alive = max(1, math.ceil(_KEEP_ALIVE / interval))
        parameters = ua.CreateSubscriptionParameters()
        parameters.RequestedPublishingInterval = 1000.0 * interval
        parameters.RequestedMaxKeepAliveCount = keep_alive
        parameters.RequestedLifetimeCount = max(3 * keep_alive, math.ceil(_LIFETIME / interval))
        parameters.MaxNotificationsPerPublish = 0
        parameters.PublishingEnabled = True
        result = await self._client.uaclient.session.create_subscription(parameters, self._on_publish)
        if not result.SubscriptionId:
            raise ua.UaStatusCodeError(ua.StatusCodes.BadSubscriptionIdInvalid)
        self._subscription = result
        self._last_sign = asyncio.get_running_loop().time()
        await self._create_items(
            [_request(_NAMESPACE_HANDLE, ua.NodeId(ua.ObjectIds.Server_NamespaceArray), 1000.0, 1)]
        )

    async def _monitor(self, nodes: Mapping[str, ua.NodeId], total: int) -> dict[str, str]:
        sampling = 1000.0 * self._settings.sampling
        depth = self._queue_depth(total)
        handles = list(range(self._next_handle, self._next_handle + len(nodes)))
        self._next_handle += len(nodes)
        self._tags.update(zip(handles, nodes, strict=True))
        requests = [
            _request(handle, node, sampling, depth)
            for handle, node in zip(handles, nodes.values(), strict=True)
        ]
        self._unheard.update(nodes)
        self._published = False
        results = await self._create_items(requests)
        problems: dict[str, str] = {}
        for handle, (tag, node), result in zip(handles, nodes.items(), results, strict=True):
            if not result.StatusCode.is_good() or not result.MonitoredItemId:
                del self._tags[handle]
                self._unheard.pop(tag, None)
                problems[tag] = (
                    f"{node.to_string()}: not to be subscribed to: {status_text(result.StatusCode.value)}"
                )
        return problems

    def _queue_depth(self, total: int) -> int:
        """Twice the samples between two publications, and some seconds of them where that is not too much."""
        assert self._subscription is not None
        publishing: float = self._subscription.RevisedPublishingInterval / 1000.0
        sampling = max(self._settings.sampling, 0.01)
        wanted = max(10, math.ceil(_BUFFERED / sampling))
        return max(math.ceil(2.0 * publishing / sampling), min(wanted, max(10, 100_000 // max(total, 1))))

    async def _create_items(
        self, requests: list[ua.MonitoredItemCreateRequest]
    ) -> list[ua.MonitoredItemCreateResult]:
        assert self._subscription is not None
        parameters = ua.CreateMonitoredItemsParameters()
        parameters.SubscriptionId = self._subscription.SubscriptionId
        parameters.TimestampsToReturn = ua.TimestampsToReturn.Both
        parameters.ItemsToCreate = requests
        results: list[
            ua.MonitoredItemCreateResult
        ] = await self._client.uaclient.session.create_monitored_items(parameters)
        if len(results) != len(requests):
            raise ua.UaStatusCodeError(ua.StatusCodes.BadUnknownResponse)
        return results

    async def _read(self, nodes: Sequence[ua.NodeId], attribute: ua.AttributeIds) -> list[ua.DataValue]:
        values: list[ua.DataValue] = []
        for batch in _batches(nodes, self._read_batch):
            parameters = ua.ReadParameters()
            parameters.TimestampsToReturn = ua.TimestampsToReturn.Both
            for node in batch:
                item = ua.ReadValueId()
                item.NodeId = node
                item.AttributeId = attribute
                parameters.NodesToRead.append(item)
            results = await self._client.uaclient.session.read(parameters)
            if len(results) != len(batch):
                raise ua.UaStatusCodeError(ua.StatusCodes.BadUnknownResponse)
            values.extend(results)
        return values

    async def _read_limits(self) -> None:
        ids = ua.ObjectIds
        limits = await self._read(
            [
                ua.NodeId(ids.Server_ServerCapabilities_OperationLimits_MaxNodesPerRead),
                ua.NodeId(ids.Server_ServerCapabilities_OperationLimits_MaxMonitoredItemsPerCall),
            ],
            ua.AttributeIds.Value,
        )
        self._read_batch, self._monitor_batch = (_limit(data) for data in limits)

    def _on_publish(self, result: ua.PublishResult) -> None:
        self._last_sign = asyncio.get_running_loop().time()
        self._published = True
        message = result.NotificationMessage
        for notification in message.NotificationData or ():
            if isinstance(notification, ua.DataChangeNotification):
                for item in notification.MonitoredItems:
                    self._on_item(item)
            elif isinstance(notification, ua.StatusChangeNotification):
                status = notification.Status
                self.end(f"the server ended the subscription ({status_text(status.value)})")

    def _on_item(self, item: ua.MonitoredItemNotification) -> None:
        tag = self._tags.get(item.ClientHandle)
        if tag is not None:
            self._unheard.pop(tag, None)
            self._on_data(tag, item.Value)
        elif item.ClientHandle == _NAMESPACE_HANDLE:
            self._on_namespaces(item.Value)

    def _on_namespaces(self, data: ua.DataValue) -> None:
        now = None if data.Value is None else data.Value.Value
        if now is not None and self._namespaces is not None and now != self._namespaces:
            self.end("the server's namespace array changed")

    async def _on_connection_lost(self, error: Exception) -> None:
        reason = "no answer from the server" if isinstance(error, TimeoutError) else "the connection broke"
        self.end(reason)


def _request(handle: int, node: ua.NodeId, sampling: float, depth: int) -> ua.MonitoredItemCreateRequest:
    item = ua.ReadValueId()
    item.NodeId = node
    item.AttributeId = ua.AttributeIds.Value
    parameters = ua.MonitoringParameters()
    parameters.ClientHandle = handle
    parameters.SamplingInterval = sampling
    parameters.QueueSize = depth
    parameters.DiscardOldest = True
    if handle != _NAMESPACE_HANDLE:
        parameters.Filter = ua.DataChangeFilter(Trigger=ua.DataChangeTrigger.StatusValueTimestamp)
    request = ua.MonitoredItemCreateRequest()
    request.ItemToMonitor = item
    request.MonitoringMode = ua.MonitoringMode.Reporting
    request.RequestedParameters = parameters
    return request


def _limit(data: ua.DataValue) -> int:
    """An operation limit as a batch size; a server without one, or with none, gets ours."""
    value = None if data.Value is None else data.Value.Value
    return min(_BATCH, value) if isinstance(value, int) and value > 0 else _BATCH


def _batches(items: Sequence[T], size: int) -> Iterator[Sequence[T]]:
    for start in range(0, len(items), size):
        yield items[start : start + size]
