"""An OPC UA server in a process of its own: `python opcua_child.py PORT NODE...`.

It says "up", then writes one data value per JSON line on its standard input and answers "done" to each.
"""

import asyncio
import json
import logging
import sys
from datetime import UTC, datetime

from asyncua import Server, ua
from asyncua.server.address_space import AddressSpace

URI = "urn:invented:plant"


def _moment(seconds: float | None) -> datetime | None:
    return None if seconds is None else datetime.fromtimestamp(seconds, UTC)


def _data_value(line: str) -> tuple[str, ua.DataValue]:
    order = json.loads(line)
    value = order["value"]
    if order["type"] in ("Double", "Float") and isinstance(value, str):
        value = float(value)  # NaN has no JSON
    return order["node"], ua.DataValue(
        ua.Variant(value, getattr(ua.VariantType, order["type"])),
        StatusCode=ua.StatusCode(order["status"]),
        SourceTimestamp=_moment(order["source_time"]),
        ServerTimestamp=_moment(order["server_time"]),
    )


async def main(port: int, names: list[str]) -> None:
    logging.disable(logging.CRITICAL)
    # A plant's server may change the type of a node; this library's would refuse.
    AddressSpace._is_expected_variant_type = lambda *_: True  # type: ignore[method-assign]
    server = Server()
    await server.init()
    server.set_endpoint(f"opc.tcp://127.0.0.1:{port}/plant")
    server.set_security_policy([ua.SecurityPolicyType.NoSecurity])
    await server.register_namespace("urn:invented:other")  # so that the index is not the first one
    index = await server.register_namespace(URI)
    nodes = {}
    for name in names:
        node_id = ua.NodeId(name, index)
        nodes[name] = (await server.nodes.objects.add_variable(node_id, name, 0.0)).nodeid
        code = ua.StatusCode(ua.StatusCodes.BadWaitingForInitialData)
        bad = ua.DataValue(StatusCode=code, SourceTimestamp=_moment(1e9))
        await server.write_attribute_value(nodes[name], bad)
    async with server:
        print("up", flush=True)
        loop = asyncio.get_running_loop()
        while line := await loop.run_in_executor(None, sys.stdin.readline):
            name, value = _data_value(line)
            await server.write_attribute_value(nodes[name], value)
            print("done", flush=True)


asyncio.run(main(int(sys.argv[1]), sys.argv[2:]))
