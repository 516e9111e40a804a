"""What stands on the wires is what the plant says, with its time, and nobody can write to it."""

import asyncio
import functools
import json
import time
from collections.abc import Coroutine, Iterator
from contextlib import AsyncExitStack
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
import pytest
from asyncua import Client, Node, ua
from asyncua.ua.uaerrors import BadUserAccessDenied

from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from simulator.opcua_history import Ring
from simulator.plant import Plant
from simulator.plant_main import scenario_path
from simulator.sample import Sample
from simulator.scenario import load_scenario
from simulator.serve_mqtt import MqttWire, payload
from simulator.serve_opcua import NAMESPACE, OpcuaWire, unit_id
from tests.simulator.wires import Broker, Subscriber, free_port, until

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"
NOW = 1_800_000_000.4
Result = TypeVar("Result")


@pytest.fixture
def broker() -> Iterator[Broker]:
    made = Broker()
    yield made
    made.stop()


def site(mqtt: int = 1, opcua: int = 1) -> SitePlan:
    return load_site(
        SITE,
        addresses={
            "field-bus": f"mqtt://127.0.0.1:{mqtt}",
            "field-gateway": f"mqtt://127.0.0.1:{mqtt}",
            "control-system": f"opc.tcp://127.0.0.1:{opcua}/ostmere",
        },
    )


@functools.cache
def plant() -> Plant:
    """One for all: to settle it takes seconds."""
    plan = site()
    return Plant(plan, load_scenario(scenario_path("quiet"), plan), pace=1.0, seed=1, steps=720)


def samples(source: str, at: float = NOW) -> list[Sample]:
    return [s for s in plant().sample(at, None) if s.tag.source == source]


def test_every_message_on_the_field_bus_is_the_plants_sample(broker: Broker) -> None:
    plan = site(mqtt=broker.port)
    sent = samples("field-bus")
    reader = Subscriber(broker.port, "ostmere/#")
    wire = MqttWire(plan.sources["field-bus"].address, tags=len(sent))
    wire.open()
    try:
        until(lambda: wire.up)
        wire.publish(sent)
        messages = reader.messages_of(len(sent))
    finally:
        wire.close()
        reader.close()
    found = {m.topic: json.loads(m.payload) for m in messages}
    assert {m.qos for m in messages} == {1}
    assert not any(m.retain for m in messages)
    assert set(found) == {i.address for i in plan.unit("K-110").inputs}
    for sample in sent:
        message = found[sample.tag.address]
        assert message["value"] == sample.value
        assert type(message["value"]) is type(sample.value)
        assert datetime.fromisoformat(message["time"]).timestamp() == NOW
        assert (message["quality"], message["simulated"]) == ("good", True)


def test_ledger_holds_what_the_broker_confirmed_and_nothing_else(broker: Broker, tmp_path: Path) -> None:
    plan = site(mqtt=broker.port)
    ledger = tmp_path / "ledger"
    wire = MqttWire(plan.sources["field-bus"].address, tags=9, ledger=ledger)
    wire.open()
    try:
        until(lambda: wire.up)
        first = samples("field-bus")
        wire.publish(first)
        until(lambda: wire.note_confirmed() or len(ledger.read_text().splitlines()) == len(first))
        broker.stop()
        until(lambda: not wire.up)
        second = samples("field-bus", NOW + 1)
        wire.publish(second)
        wire.note_confirmed()
        assert len(ledger.read_text().splitlines()) == len(first)  # nobody confirmed the second lot
        broker.start()
        # it connects again by itself and then sends what it kept
        until(lambda: wire.note_confirmed() or len(ledger.read_text().splitlines()) == len(first + second))
    finally:
        wire.close()
    rows = [json.loads(line) for line in ledger.read_text().splitlines()]
    assert [(r["topic"], r["time"], r["value"]) for r in rows] == [
        (s.tag.address, s.time, s.value) for s in first + second
    ]


def test_field_bus_without_a_broker_refuses_what_it_cannot_keep() -> None:
    plan = site(mqtt=free_port())
    wire = MqttWire(plan.sources["field-bus"].address, tags=9)
    wire.open()
    lot = samples("field-bus")
    for _ in range(605):
        wire.publish(lot)
    begun = time.monotonic()
    wire.close()
    assert time.monotonic() - begun < 0.5
    assert wire.refused == 5 * 9  # hand: 600 s are kept


def test_payload_keeps_milliseconds_and_says_utc() -> None:
    sample = samples("field-bus")[0]
    assert json.loads(payload(sample))["time"] == "2027-01-15T08:00:00.400Z"  # hand: 1.8e9 s after 1970


class Served:
    """One server with one client, in a loop of its own; starting a server takes seconds."""

    def __init__(self) -> None:
        self.plan = site(opcua=free_port())
        self.sent = samples("control-system")
        self._runner = asyncio.Runner()
        self._stack = AsyncExitStack()

    def run(self, work: Coroutine[Any, Any, Result]) -> Result:
        return self._runner.run(work)

    async def open(self) -> None:
        address = self.plan.sources["control-system"].address
        self.wire = await self._stack.enter_async_context(
            OpcuaWire(address, self.plan.units, "control-system")
        )
        self.client = await self._stack.enter_async_context(Client(address, timeout=5))
        self.index = await self.client.get_namespace_index(NAMESPACE)
        self.before_the_first_sample = await self.node("K-220.PT-2201").read_data_value(
            raise_on_bad_status=False
        )

    def node(self, name: str) -> Node:
        return self.client.get_node(f"ns={self.index};s={name}")

    def close(self) -> None:
        self.run(self._stack.aclose())
        self._runner.close()


@pytest.fixture(scope="module")
def served() -> Iterator[Served]:
    made = Served()
    made.run(made.open())
    yield made
    made.close()


def test_value_is_bad_until_the_first_sample(served: Served) -> None:
    assert served.before_the_first_sample.StatusCode.value == ua.StatusCodes.BadWaitingForInitialData


def test_every_node_of_the_control_system_is_the_plants_sample(served: Served) -> None:
    async def check() -> None:
        assert {s.tag.address for s in served.sent} == {i.address for i in served.plan.unit("K-220").inputs}
        await served.wire.write(served.sent)
        for sample in served.sent:
            found = await served.node(sample.tag.address.rpartition("s=")[2]).read_data_value()
            value = found.Value.Value
            if found.Value.VariantType is ua.VariantType.Float:
                assert value == np.float32(sample.value)
            else:
                assert value == sample.value
                assert type(value) is type(sample.value)
            assert found.StatusCode.is_good()
            assert found.SourceTimestamp == datetime.fromtimestamp(NOW, UTC)

    served.run(check())


def test_nodes_say_unit_range_and_that_they_are_simulated(served: Served) -> None:
    async def check() -> None:
        nodes = await served.node("K-220.PT-2206").get_properties()
        found = {(await n.read_browse_name()).Name: await n.read_value() for n in nodes}
        assert found["EngineeringUnits"].DisplayName.Text == "barg"
        assert (found["EURange"].Low, found["EURange"].High) == pytest.approx((0, 250))  # site file
        assert await served.node("Ostmere.Simulated").read_value() is True

    served.run(check())


@pytest.mark.parametrize(
    ("code", "number"),
    # source: OPC Foundation, UNECE_to_OPCUA.csv, for RPM and C16; the others by the same rule, by hand
    [("RPM", 5394509), ("C16", 4403510), ("BAR", 4342098), ("CEL", 4408652), ("KWT", 4937556), ("P1", 20529)],
)
def test_a_unit_code_is_a_number_by_the_published_rule(code: str, number: int) -> None:
    assert unit_id(code) == number


def test_units_are_told_by_code_and_by_name(served: Served) -> None:
    async def check() -> None:
        seen = {}
        for name in ("PT-2201", "TT-2201", "JT-2201", "FT-2201"):
            node = served.node(f"K-220.{name}")
            assert await node.read_type_definition() == ua.NodeId(ua.ObjectIds.AnalogItemType)
            unit = await (await node.get_child("0:EngineeringUnits")).read_value()
            assert unit.NamespaceUri == "http://www.opcfoundation.org/UA/units/un/cefact"
            seen[name] = (unit.UnitId, unit.DisplayName.Text)
        assert seen == {
            "PT-2201": (4342098, "barg"),
            "TT-2201": (4408652, "degC"),
            "JT-2201": (4937556, "kW"),
            "FT-2201": (-1, "Nm3/h"),  # unknown: no code for this one
        }
        assert await served.node("K-220.UY-2201").read_type_definition() == ua.NodeId(
            ua.ObjectIds.BaseDataVariableType
        )

    served.run(check())


def test_history_is_what_was_written_with_times_and_status(served: Served) -> None:
    async def check() -> None:
        [pressure] = [s for s in served.sent if s.tag.tag == "PT-2203"]
        [word] = [s for s in served.sent if s.tag.tag == "UY-2201"]
        start = NOW + 100
        for n in range(10):
            value = None if n == 4 else 30.5 + n
            await served.wire.write([Sample(tag=pressure.tag, time=start + n, value=value)])
            await served.wire.write([Sample(tag=word.tag, time=start + n, value="100" if n < 5 else "50")])
        node = served.node("K-220.PT-2203")

        async def history(of: Node, first: float, last: float, count: int = 0) -> list[Any]:
            times = (datetime.fromtimestamp(first, UTC), datetime.fromtimestamp(last, UTC))
            found = await of.read_raw_history(*times, count)
            return [(v.SourceTimestamp.timestamp(), v.Value.Value) for v in found if v.StatusCode.is_good()]

        assert await history(node, start + 2, start + 6) == [(start + n, 30.5 + n) for n in (2, 3, 5, 6)]
        assert await history(node, start + 6, start + 2) == [(start + n, 30.5 + n) for n in (6, 5, 3, 2)]
        assert await history(node, start + 2, start + 6, 2) == [(start + 2, 32.5), (start + 3, 33.5)]
        words = await history(served.node("K-220.UY-2201"), start + 4, start + 5)
        assert words == [(start + 4, "100"), (start + 5, "50")]
        newest = await node.read_raw_history(None, datetime.fromtimestamp(start + 5, UTC), 2)
        assert [v.SourceTimestamp.timestamp() for v in newest] == [start + 5, start + 4]
        assert newest[1].StatusCode.value == ua.StatusCodes.BadSensorFailure
        assert (await node.read_attribute(ua.AttributeIds.Historizing)).Value.Value is True
        assert ua.AccessLevel.HistoryRead in await node.get_access_level()
        assert ua.AccessLevel.CurrentWrite not in await node.get_user_access_level()

    served.run(check())


def test_history_keeps_an_hour_and_no_more() -> None:
    ring = Ring(ua.VariantType.Float, 60)
    for n in range(1000):
        ring.put(NOW + n, float(n), 0)
    found = list(ring.between(0.0, 1e12, newest_first=False))
    assert [t for t, _ in found] == [NOW + n for n in range(940, 1000)]
    assert [v.Value.Value for _, v in found] == [float(n) for n in range(940, 1000)]


def test_client_can_neither_write_a_value_nor_add_a_node(served: Served) -> None:
    async def check() -> None:
        await served.wire.write(served.sent)
        node = served.node("K-220.PT-2201")
        before = await node.read_value()
        with pytest.raises(BadUserAccessDenied):
            await node.write_value(ua.Variant(1.0, ua.VariantType.Float))
        with pytest.raises(BadUserAccessDenied):
            await served.client.nodes.objects.add_object(served.index, "intruder")
        assert await node.read_value() == before

    served.run(check())


def test_subscription_hears_a_change_and_not_a_repetition(served: Served) -> None:
    """On-change tags rely on this: a word that stays is sent once."""

    async def check() -> None:
        heard: asyncio.Queue[float] = asyncio.Queue()

        class Handler:
            def datachange_notification(self, _node: object, value: float, _data: object) -> None:
                heard.put_nowait(value)

        [sample] = [s for s in served.sent if s.tag.tag == "PT-2201"]
        await served.wire.write([sample])
        subscription = await served.client.create_subscription(50, Handler())
        await subscription.subscribe_data_change(served.node("K-220.PT-2201"))
        async with asyncio.timeout(10):
            assert await heard.get() == np.float32(sample.value)
            await served.wire.write([Sample(tag=sample.tag, time=NOW + 1, value=sample.value)])
            await served.wire.write([Sample(tag=sample.tag, time=NOW + 2, value=18.5)])
            assert await heard.get() == 18.5
        await subscription.delete()

    served.run(check())


@pytest.mark.parametrize(
    ("address", "said"),
    [
        ("opc.tcp://0.0.0.0:4840/x", "loopback only"),
        ("opc.tcp://192.0.2.7:4840/x", "loopback only"),
        ("http://127.0.0.1:4840", "is not opc.tcp://host:port/path"),
        ("opc.tcp://127.0.0.1/x", "is not opc.tcp://host:port/path"),
    ],
)
def test_server_address_must_be_loopback_and_whole(address: str, said: str) -> None:
    with pytest.raises(ValueError, match=said):
        OpcuaWire(address, (), "control-system")


def test_broker_address_must_be_mqtt() -> None:
    with pytest.raises(ValueError, match="is not mqtt://host:port"):
        MqttWire("http://127.0.0.1:1883", tags=1)
