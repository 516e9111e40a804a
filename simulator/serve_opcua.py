"""The control system: a read-only OPC UA server on loopback, one variable per tag, with the past hour."""

import asyncio
from collections.abc import Sequence
from datetime import UTC
from types import MappingProxyType, TracebackType
from typing import Final, Self
from urllib.parse import urlsplit

from asyncua import Server, ua
from asyncua.common.node import Node

from agent.siteplan.plan import Input, UnitPlan
from simulator.instrument_faults import SampleQuality
from simulator.opcua_history import KEPT, HourOfHistory
from simulator.sample import Sample

NAMESPACE: Final = "urn:ostmere:plant"
LOOPBACK: Final = frozenset({"127.0.0.1", "localhost", "::1"})
UNECE: Final = "http://www.opcfoundation.org/UA/units/un/cefact"
_CLOSE_S: Final = 0.15  # the sockets close at once; what remains is a clock task that sleeps for a second


class OpcuaWire:
    """Serves the tags of a source. Values carry the time of their sample."""

    def __init__(self, address: str, units: Sequence[UnitPlan], source: str) -> None:
        url = urlsplit(address)
        if url.scheme != "opc.tcp" or not url.hostname or not url.port:
            raise ValueError(f"{address!r} is not opc.tcp://host:port/path")
        if url.hostname not in LOOPBACK:
            raise ValueError(f"{address!r}: the invented plant listens on loopback only")
        self._address = address
        self._units = [(u.id, [i for i in u.inputs if i.source == source]) for u in units]
        self._nodes: dict[str, ua.NodeId] = {}
        self._history = HourOfHistory()
        self._server: Server | None = None
        self._is_cut = False

    async def __aenter__(self) -> Self:
        server = Server()
        await server.init()
        server.set_endpoint(self._address)
        server.set_server_name("Ostmere Works control system (invented, simulated)")
        await server.set_application_uri("urn:ostmere:control-system")
        server.set_security_policy([ua.SecurityPolicyType.NoSecurity])
        server.set_identity_tokens([ua.AnonymousIdentityToken])
        server.iserver.allow_remote_admin = False
        server.iserver.history_manager.set_storage(self._history)
        index = await server.register_namespace(NAMESPACE)
        await self._populate(server, index)
        await _tell_history(server)
        await server.start()
        self._server = server
        return self

    async def __aexit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._server is not None:
            try:
                async with asyncio.timeout(_CLOSE_S):
                    await self._server.stop()
            except TimeoutError:
                pass  # neither that task nor a client that does not hang up may hold the plant
            self._server = None

    @property
    def is_cut(self) -> bool:
        return self._is_cut

    async def write(self, samples: Sequence[Sample]) -> None:
        """Put samples on the wire; what was kept while the link was lost goes into the history alone."""
        server = self._opened()
        for sample in samples:
            node, value = self._nodes[sample.tag.address], _data_value(sample)
            if not sample.historical:
                await server.write_attribute_value(node, value)
            self._history.put(node, sample.time, value)

    async def cut(self) -> None:
        """Close every connection without a word and answer no more; the server behind it goes on."""
        server = self._opened()
        if self._is_cut:
            return
        self._is_cut = True
        for transport in list(server.iserver.asyncio_transports):
            transport.abort()
        if server.bserver is not None:
            await server.bserver.stop()

    async def restore(self) -> None:
        """Answer again, with the history there is."""
        server = self._opened()
        if self._is_cut and server.bserver is not None:
            await server.bserver.start()
            self._is_cut = False

    def _opened(self) -> Server:
        if self._server is None:
            raise RuntimeError("the server is opened before it is used")
        return self._server

    async def _populate(self, server: Server, index: int) -> None:
        site = await server.nodes.objects.add_object(
            _node_id("Ostmere", index), ua.QualifiedName("Ostmere", index)
        )
        await site.add_property(
            _node_id("Ostmere.Simulated", index), ua.QualifiedName("Simulated", index), True
        )
        for unit, tags in self._units:
            if tags:
                machine = await site.add_object(_node_id(unit, index), ua.QualifiedName(unit, index))
                for tag in tags:
                    await self._add_tag(machine, tag, index)

    async def _add_tag(self, machine: Node, tag: Input, index: int) -> None:
        node_id = _node_id(_identifier(tag.address), index)
        kind = _variant_type(tag)
        waiting = ua.DataValue(
            ua.Variant(_EMPTY[kind], kind),
            StatusCode=ua.StatusCode(ua.UInt32(ua.StatusCodes.BadWaitingForInitialData)),
        )
        node = await machine.add_variable(node_id, ua.QualifiedName(tag.tag, index), _EMPTY[kind], kind)
        await server_side_write(node, waiting)
        if kind in (ua.VariantType.Float, ua.VariantType.Double):
            await _make_analog(node)
            low, high = ((v - tag.offset) / tag.scale for v in (tag.span_low, tag.span_high))
            await node.add_property(0, "EURange", ua.Range(Low=low, High=high))
            await node.add_property(0, "EngineeringUnits", engineering_units(tag.unit))
        await node.write_attribute(ua.AttributeIds.Historizing, ua.DataValue(ua.Variant(True)))
        await node.set_attr_bit(ua.AttributeIds.AccessLevel, ua.AccessLevel.HistoryRead)
        await node.set_attr_bit(ua.AttributeIds.UserAccessLevel, ua.AccessLevel.HistoryRead)
        self._history.add(node_id, kind)
        self._nodes[tag.address] = node_id


async def _tell_history(server: Server) -> None:
    """What a client may ask of the past: raw values of up to an hour, and nothing may be changed."""
    for name, value in _HISTORY.items():
        node = server.get_node(
            ua.NodeId(ua.Int32(getattr(ua.ObjectIds, f"HistoryServerCapabilities_{name}")))
        )
        kind = ua.VariantType.Boolean if isinstance(value, bool) else ua.VariantType.UInt32
        await server_side_write(node, ua.DataValue(ua.Variant(value, kind)))


_HISTORY: Final = MappingProxyType(
    {
        "AccessHistoryDataCapability": True,
        "AccessHistoryEventsCapability": False,
        "MaxReturnDataValues": KEPT,
        "MaxReturnEventValues": 0,
        "InsertDataCapability": False,
        "ReplaceDataCapability": False,
        "UpdateDataCapability": False,
        "DeleteRawCapability": False,
        "DeleteAtTimeCapability": False,
        "InsertEventCapability": False,
        "ReplaceEventCapability": False,
        "UpdateEventCapability": False,
        "DeleteEventCapability": False,
        "InsertAnnotationCapability": False,
        "ServerTimestampSupported": True,
    }
)


async def _make_analog(node: Node) -> None:
    """The type of a variable that has a range and a unit."""
    await node.delete_reference(ua.ObjectIds.BaseDataVariableType, ua.ObjectIds.HasTypeDefinition)
    await node.add_reference(
        ua.NodeId(ua.Int32(ua.ObjectIds.AnalogItemType)), ua.ObjectIds.HasTypeDefinition, bidirectional=False
    )


# Codes of UNECE Recommendation 20. It has none for gauge pressure: the unit is the bar, its name says gauge.
_CODES: Final = MappingProxyType(
    {
        "barg": ("BAR", "bar, gauge"),
        "bara": ("BAR", "bar, absolute"),
        "degC": ("CEL", "degree Celsius"),
        "K": ("KEL", "kelvin"),
        "rpm": ("RPM", "revolutions per minute"),
        "kW": ("KWT", "kilowatt"),
    }
)


def unit_id(code: str) -> int:
    """The number OPC UA makes of a UNECE code: its characters as bytes, the first one highest."""
    return int.from_bytes(code.encode("ascii"), "big")


def engineering_units(unit: str) -> ua.EUInformation:
    """A unit by its UNECE code; by its name alone where we know no code."""
    code, words = _CODES.get(unit, ("", unit))
    return ua.EUInformation(
        NamespaceUri=UNECE,
        UnitId=ua.Int32(unit_id(code) if code else -1),
        DisplayName=ua.LocalizedText(unit),
        Description=ua.LocalizedText(words),
    )


async def server_side_write(node: Node, value: ua.DataValue) -> None:
    """Write past the access level, which lets clients read only."""
    await node.session.write(
        ua.WriteParameters(
            NodesToWrite=[ua.WriteValue(NodeId=node.nodeid, AttributeId=ua.AttributeIds.Value, Value=value)]
        )
    )


_EMPTY: Final = {
    ua.VariantType.Float: 0.0,
    ua.VariantType.Double: 0.0,
    ua.VariantType.Boolean: False,
    ua.VariantType.String: "",
}


def _variant_type(tag: Input) -> ua.VariantType:
    """Transmitters are single precision, what a controller computes is double."""
    if tag.quantity == "load_step":
        return ua.VariantType.String
    if tag.quantity == "run_signal":
        return ua.VariantType.Boolean
    return ua.VariantType.Double if tag.subject == "unit" else ua.VariantType.Float


_STATUS: Final = MappingProxyType(
    {
        SampleQuality.GOOD: ua.StatusCodes.Good,
        SampleQuality.UNCERTAIN: ua.StatusCodes.UncertainSensorNotAccurate,
        SampleQuality.BAD: ua.StatusCodes.BadSensorFailure,
    }
)


def _data_value(sample: Sample) -> ua.DataValue:
    when = ua.DateTime.fromtimestamp(sample.time, UTC)
    kind = _variant_type(sample.tag)
    return ua.DataValue(
        ua.Variant(_EMPTY[kind] if sample.value is None else sample.value, kind),
        StatusCode=ua.StatusCode(ua.UInt32(_STATUS[sample.stated_quality])),
        SourceTimestamp=when,
        ServerTimestamp=when,
    )


def _node_id(name: str, index: int) -> ua.NodeId:
    return ua.NodeId(ua.String(name), ua.Int16(index))


def _identifier(address: str) -> str:
    """The string id in ``nsu=urn:ostmere:plant;s=K-220.PT-2201``."""
    parts = dict(part.split("=", 1) for part in address.split(";") if "=" in part)
    if parts.get("nsu") != NAMESPACE or not parts.get("s"):
        raise ValueError(f"{address!r} is not nsu={NAMESPACE};s=NAME")
    return parts["s"]
