"""The control system: a read-only OPC UA server on loopback, one variable per tag."""

import asyncio
from collections.abc import Sequence
from datetime import UTC
from types import TracebackType
from typing import Final, Self
from urllib.parse import urlsplit

from asyncua import Server, ua
from asyncua.common.node import Node

from agent.siteplan.plan import Input, UnitPlan
from simulator.plant import Sample

NAMESPACE: Final = "urn:ostmere:plant"
LOOPBACK: Final = frozenset({"127.0.0.1", "localhost", "::1"})
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
        self._server: Server | None = None

    async def __aenter__(self) -> Self:
        server = Server()
        await server.init()
        server.set_endpoint(self._address)
        server.set_server_name("Ostmere Works control system (invented, simulated)")
        await server.set_application_uri("urn:ostmere:control-system")
        server.set_security_policy([ua.SecurityPolicyType.NoSecurity])
        server.set_identity_tokens([ua.AnonymousIdentityToken])
        server.iserver.allow_remote_admin = False
        index = await server.register_namespace(NAMESPACE)
        await self._populate(server, index)
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

    async def write(self, samples: Sequence[Sample]) -> None:
        """Put samples on the wire."""
        if self._server is None:
            raise RuntimeError("the server is opened before it is written to")
        for sample in samples:
            await self._server.write_attribute_value(self._nodes[sample.tag.address], _data_value(sample))

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
            low, high = ((v - tag.offset) / tag.scale for v in (tag.span_low, tag.span_high))
            await node.add_property(0, "EURange", ua.Range(Low=low, High=high))
            unit = ua.EUInformation(NamespaceUri=NAMESPACE, UnitId=-1, DisplayName=ua.LocalizedText(tag.unit))
            await node.add_property(0, "EngineeringUnits", unit)
        self._nodes[tag.address] = node_id


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


def _data_value(sample: Sample) -> ua.DataValue:
    when = ua.DateTime.fromtimestamp(sample.time, UTC)
    return ua.DataValue(
        ua.Variant(sample.value, _variant_type(sample.tag)),
        StatusCode=ua.StatusCode(ua.UInt32(ua.StatusCodes.Good)),
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
