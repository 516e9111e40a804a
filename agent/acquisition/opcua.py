"""Plant tags over OPC UA: one session, one subscription. Reads and subscribes; never writes, never calls.

A node that the server does not know is named in the status and tried again at the next connection; the others
go on. The server is asked for its state every second, so one that falls silent without closing the connection
is noticed after three.
"""

import asyncio
import contextlib
import logging
from collections.abc import Iterable, Mapping, Sequence
from typing import Any, Final
from urllib.parse import urlsplit

from asyncua import Client, ua
from asyncua.common.subscription import DataChangeNotif, Subscription

from agent.acquisition.link import LinkLost, ReconnectingSource
from agent.acquisition.opcua_value import reading_from
from agent.acquisition.rejection import Rejection
from agent.clock import Clock
from agent.records import Receipt
from agent.siteplan.plan import Input, Source

PUBLISHING_MS: Final = 500
SAMPLING_MS: Final = 250
ITEM_QUEUE: Final = 10  # samples the server keeps of one item between two publications

_PROBE_EVERY_S: Final = 1.0
_PROBE_TIMEOUT_S: Final = 2.0
_REQUEST_TIMEOUT_S: Final = 4.0
_FAREWELL_S: Final = 1.5
_SESSION_MS: Final = 30_000
_KEEPALIVE_COUNT: Final = 10  # publications: a subscription that is only quiet says so every 5 s
_LIFETIME_COUNT: Final = 60

_NO_FILTER: Final = frozenset(
    {
        ua.StatusCodes.BadMonitoredItemFilterUnsupported,
        ua.StatusCodes.BadMonitoredItemFilterInvalid,
        ua.StatusCodes.BadFilterNotAllowed,
    }
)

# The library logs each failed request; our own line per change of state says it once.
_SILENT: Final = logging.CRITICAL + 1


class OpcUaSource(ReconnectingSource):
    def __init__(self, source: Source, inputs: Sequence[Input], clock: Clock) -> None:
        super().__init__(source, clock)
        if urlsplit(source.address).scheme != "opc.tcp":
            raise ValueError(f"source {source.name}: {source.address!r} is not opc.tcp://host:port/path")
        self._inputs: Mapping[str, Input] = {i.address: i for i in inputs}  # one item per node
        for entry in self._inputs.values():
            split_address(entry.address)
        self._missing: tuple[str, ...] = ()
        logging.getLogger("asyncua").setLevel(_SILENT)

    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        """Nothing to do: the server keeps nothing for us, and readings carry no receipts."""

    def _notes(self) -> tuple[str, ...]:
        return (f"not there: {', '.join(self._missing)}",) if self._missing else ()

    async def _attempt(self, number: int) -> None:
        del number
        client = Client(self._source.address, timeout=_REQUEST_TIMEOUT_S, watchdog_intervall=5.0)
        client.session_timeout = _SESSION_MS
        lost: asyncio.Future[str] = asyncio.get_running_loop().create_future()

        async def on_lost(error: Exception) -> None:
            _settle(lost, f"connection lost: {error}")

        client.connection_lost_callback = on_lost
        try:
            await self._connect(client)
            await self._subscribe(client, lost)
            self._mark_up(f"connected to {self._source.address}")
            await _watch(client, lost)
        finally:
            await _farewell(client)

    async def _connect(self, client: Client) -> None:
        try:
            await client.connect()
        except TimeoutError:
            raise LinkLost(f"no answer from {self._source.address}") from None
        except OSError as error:
            raise LinkLost(f"no connection to {self._source.address}: {error.strerror or error}") from None

    async def _subscribe(self, client: Client, lost: asyncio.Future[str]) -> None:
        namespaces = await client.get_namespace_array()
        found: list[tuple[Input, ua.NodeId]] = []
        missing: list[str] = []
        for entry in self._inputs.values():
            node = node_id(entry.address, namespaces)
            if node is None:
                missing.append(f"{entry.tag} (unknown namespace)")
            else:
                found.append((entry, node))
        handler = _Handler(self, dict(enumerate((e for e, _ in found), start=1)), lost)
        subscription = await client.create_subscription(_subscription_parameters(), handler)
        refused = await _monitor(subscription, found) if found else []
        missing += (f"{entry.tag} ({code.name})" for entry, code in refused)
        self._missing = tuple(missing)

    def take(self, entry: Input, value: ua.DataValue) -> None:
        """Pass one data value on, or count it as rejected."""
        outcome = reading_from(value, entry, self.name, self._clock.now())
        if isinstance(outcome, Rejection):
            self._reject(entry.address, outcome.reason)
        else:
            self._deliver(outcome, times_the_clock=not entry.on_change)


class _Handler:
    """What the subscription calls; items are known by the handle they were created with."""

    def __init__(self, source: OpcUaSource, inputs: Mapping[int, Input], lost: asyncio.Future[str]) -> None:
        self._source = source
        self._inputs = inputs
        self._lost = lost

    def datachange_notification(self, node: Any, val: Any, data: DataChangeNotif) -> None:
        del node, val
        entry = self._inputs.get(data.subscription_data.client_handle or 0)
        value = data.monitored_item.Value
        if entry is not None and value is not None:
            self._source.take(entry, value)

    def status_change_notification(self, status: ua.StatusChangeNotification) -> None:
        _settle(self._lost, f"the server ended the subscription: {status.Status.name}")


async def _monitor(
    subscription: Subscription, found: Sequence[tuple[Input, ua.NodeId]]
) -> list[tuple[Input, ua.StatusCode]]:
    """Create all items in one call; those whose filter the server does not know, once more without."""
    asked = list(enumerate(found, start=1))
    plain: list[tuple[int, tuple[Input, ua.NodeId]]] = []
    refused: list[tuple[Input, ua.StatusCode]] = []
    for may_filter in (True, False):
        results = await subscription.create_monitored_items(
            [
                _item(handle, node, with_filter=may_filter and not entry.on_change)
                for handle, (entry, node) in asked
            ]
        )
        for (handle, (entry, node)), result in zip(asked, results, strict=True):
            if not isinstance(result, ua.StatusCode):
                continue
            if may_filter and result.value in _NO_FILTER:
                plain.append((handle, (entry, node)))
            else:
                refused.append((entry, result))
        if not plain:
            break
        asked = plain
    return refused


def _item(handle: int, node: ua.NodeId, *, with_filter: bool) -> ua.MonitoredItemCreateRequest:
    """With the filter, a value measured anew is sent even if it is the same, and does not go stale."""
    parameters = ua.MonitoringParameters()
    parameters.ClientHandle = ua.UInt32(handle)
    parameters.SamplingInterval = ua.Double(SAMPLING_MS)
    parameters.QueueSize = ua.UInt32(ITEM_QUEUE)
    parameters.DiscardOldest = True
    if with_filter:
        parameters.Filter = ua.DataChangeFilter(Trigger=ua.DataChangeTrigger.StatusValueTimestamp)
    request = ua.MonitoredItemCreateRequest()
    request.ItemToMonitor = ua.ReadValueId(NodeId=node, AttributeId=ua.AttributeIds.Value)
    request.MonitoringMode = ua.MonitoringMode.Reporting
    request.RequestedParameters = parameters
    return request


def _subscription_parameters() -> ua.CreateSubscriptionParameters:
    parameters = ua.CreateSubscriptionParameters()
    parameters.RequestedPublishingInterval = ua.Double(PUBLISHING_MS)
    parameters.RequestedLifetimeCount = ua.UInt32(_LIFETIME_COUNT)
    parameters.RequestedMaxKeepAliveCount = ua.UInt32(_KEEPALIVE_COUNT)
    parameters.MaxNotificationsPerPublish = ua.UInt32(0)  # no limit
    parameters.PublishingEnabled = True
    return parameters


def split_address(address: str) -> tuple[str | None, str]:
    """Take an address of the site file apart: namespace URI, if it names one, and the rest.

    Raises
    ------
    ValueError
        It is no node id.
    """
    uri: str | None = None
    rest = address
    if address.startswith("nsu="):
        uri, _, rest = address.removeprefix("nsu=").partition(";")
    try:
        ua.NodeId.from_string(f"ns=1;{rest}" if uri is not None else rest)
    except (ua.UaError, ValueError):
        raise ValueError(f"{address!r} is no node id") from None
    return uri, rest


def node_id(address: str, namespaces: Sequence[str]) -> ua.NodeId | None:
    """The node id on a server with these namespaces; None if it does not know the one named."""
    uri, rest = split_address(address)
    if uri is None:
        return ua.NodeId.from_string(rest)
    if uri not in namespaces:
        return None
    return ua.NodeId.from_string(f"ns={namespaces.index(uri)};{rest}")


async def _watch(client: Client, lost: asyncio.Future[str]) -> None:
    """Until the connection ends: ask the server for its state every second."""
    while True:
        await asyncio.wait([lost], timeout=_PROBE_EVERY_S)
        if lost.done():
            raise LinkLost(lost.result())
        try:
            await asyncio.wait_for(client.nodes.server_state.read_value(), _PROBE_TIMEOUT_S)
        except TimeoutError:
            raise LinkLost("the server is silent") from None
        except OSError as error:
            raise LinkLost(f"connection lost: {error}") from None


async def _farewell(client: Client) -> None:
    """Close session and socket; a server that does not answer is left after a moment."""
    with contextlib.suppress(Exception):
        async with asyncio.timeout(_FAREWELL_S):
            await client.disconnect()
    client.disconnect_socket()


def _settle(future: asyncio.Future[str], cause: str) -> None:
    if not future.done():
        future.set_result(cause)
