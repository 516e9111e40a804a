"""Quality and lost links on the wires: each protocol says it in its own way."""

import asyncio
import json
from collections.abc import Iterator
from contextlib import AsyncExitStack
from dataclasses import replace
from datetime import UTC, datetime
from typing import Any

import pytest
from asyncua import Client, ua
from google.protobuf.json_format import MessageToDict

from agent.siteplan.load import load_site
from agent.siteplan.plan import Input
from agent.sparkplug.wire import Metric
from simulator.delivery import Delivery
from simulator.instrument_faults import LinkState, SampleQuality
from simulator.sample import Sample
from simulator.serve_mqtt import MqttWire, payload
from simulator.serve_opcua import NAMESPACE, OpcuaWire
from simulator.serve_sparkplug import SparkplugWire, put_properties
from tests.simulator.wires import ROOT, Broker, Host, Subscriber, free_port, until

SITE = ROOT / "simulator" / "sites" / "ostmere.yaml"
PLAIN = load_site(ROOT / "tests" / "config_errors" / "no_mistake.yaml").units[0]
NOW = 1_800_000_000.4
MS = 1_800_000_000_400
GOOD, UNCERTAIN, BAD = SampleQuality
LOST = LinkState(lost=True, buffered=True)


def bus_tag() -> Input:
    return next(i for u in load_site(SITE).units for i in u.inputs if i.source == "field-bus")


def gateway_tags() -> list[Input]:
    wanted = ("stage1.suction_pressure", "unit.load_step")
    found = [i for i in PLAIN.inputs if i.name in wanted]
    return [replace(i, address=f"gw/K-1/{i.tag}", source="gateway") for i in found]


@pytest.fixture
def broker() -> Iterator[Broker]:
    made = Broker()
    yield made
    made.stop()


# MQTT JSON


@pytest.mark.parametrize(
    ("value", "quality", "said"),
    [
        (20.5, GOOD, (20.5, "good")),
        (20.5, UNCERTAIN, (20.5, "uncertain")),
        (20.5, BAD, (20.5, "bad")),  # a sender that repeats its last value
        (None, BAD, (None, "bad")),
        (None, GOOD, (None, "bad")),  # what has no value is bad whatever is said
    ],
)
def test_json_says_quality_in_a_word(value: Any, quality: SampleQuality, said: tuple[Any, str]) -> None:
    found = json.loads(payload(Sample(tag=bus_tag(), time=NOW, value=value, quality=quality)))
    assert (found["value"], found["quality"], found["simulated"]) == (*said, True)
    assert "historical" not in found


def test_json_marks_the_past() -> None:
    assert (
        json.loads(payload(Sample(tag=bus_tag(), time=NOW, value=1.0, historical=True)))["historical"] is True
    )


def test_a_cut_field_bus_is_silent_and_comes_back_with_what_was_kept(broker: Broker) -> None:
    tag = bus_tag()
    wire, link = MqttWire(broker.address, tags=1), Delivery("1")
    reader = Subscriber(broker.port, "ostmere/#")
    wire.open()
    try:
        until(lambda: wire.up)
        for n, state in enumerate([LinkState(), LOST, LOST, LOST, LinkState(), LinkState()]):
            if state.lost:
                wire.cut()
                assert not wire.up
            elif n == 4:
                wire.restore()
                until(lambda: wire.up)
            wire.publish(link.update(NOW + n, [Sample(tag=tag, time=NOW + n, value=float(n))], state))
        # at least once: what was not confirmed before the cut comes again
        heard: dict[str, dict[str, Any]] = {}
        while len(heard) < 6:
            [message] = reader.messages_of(1)
            heard.setdefault(message.payload.decode(), json.loads(message.payload))
        wire.cut()
        wire.cut()  # once is enough
    finally:
        wire.close()
        reader.close()
    found = list(heard.values())
    assert [f["value"] for f in found] == [0.0, 1.0, 2.0, 3.0, 4.0, 5.0]
    assert [f.get("historical", False) for f in found] == [False, True, True, True, False, False]
    times = [datetime.fromisoformat(f["time"]).timestamp() for f in found]
    assert times == pytest.approx([NOW + n for n in range(6)], abs=1e-3)


# Sparkplug


def properties(metric: Metric) -> dict[str, Any]:
    values = [
        next(iter(set(MessageToDict(v).items()) - {("type", v.type)}))[1] for v in metric.properties.values
    ]
    return dict(zip(metric.properties.keys, values, strict=True))


@pytest.mark.parametrize(
    ("quality", "code", "more"), [(GOOD, 192, {}), (UNCERTAIN, 192, {"uncertain": True}), (BAD, 0, {})]
)
def test_a_metric_says_how_good_it_is_and_that_it_is_invented(
    quality: SampleQuality, code: int, more: dict[str, bool]
) -> None:
    metric = Metric()
    put_properties(metric, quality)
    # source: Sparkplug 3.0: property "Quality", type Int32 (3), 0 bad, 192 good, 500 stale
    assert properties(metric) == {"Quality": code, "simulated": True} | more
    kinds = dict(zip(metric.properties.keys, (v.type for v in metric.properties.values), strict=True))
    assert kinds == {"Quality": 3, "simulated": 11} | ({"uncertain": 11} if more else {})


def lot(n: int, *, value: float | None = None, quality: SampleQuality = GOOD) -> list[Sample]:
    pressure, word = sorted(gateway_tags(), key=lambda t: t.on_change)
    at = NOW + n
    return [
        Sample(tag=pressure, time=at, value=20.0 + n if value is None else value, quality=quality),
        Sample(tag=word, time=at, value="full"),
    ]


@pytest.fixture
def gateway(broker: Broker) -> Iterator[tuple[Host, SparkplugWire]]:
    host = Host(broker.port)
    wire = SparkplugWire(broker.address, group="g", tags=gateway_tags())
    wire.open()
    until(lambda: wire.up)
    yield host, wire
    wire.close()
    host.close()


def test_every_metric_of_births_and_data_bears_the_mark(gateway: tuple[Host, SparkplugWire]) -> None:
    host, wire = gateway
    wire.publish(lot(0))
    wire.publish(lot(1, quality=UNCERTAIN))
    wire.publish([replace(lot(2)[0], value=None)])
    _, (_, birth), (_, data), (_, bad) = host.take(4)
    for message in (birth, data, bad):
        assert all(properties(m)["simulated"] is True for m in message.metrics)
    assert properties(data.metrics[0])["uncertain"] is True
    assert (bad.metrics[0].is_null, properties(bad.metrics[0])["Quality"]) == (True, 0)


def test_a_word_whose_quality_changes_is_told_again(gateway: tuple[Host, SparkplugWire]) -> None:
    host, wire = gateway
    word = lot(0)[1]
    wire.publish([word])
    wire.publish([replace(word, time=NOW + 1)])  # the same: not sent
    wire.publish([replace(word, time=NOW + 2, quality=BAD)])
    _, _, (_, data) = host.take(3)
    assert [(m.timestamp, properties(m)["Quality"]) for m in data.metrics] == [(MS + 2000, 0)]


def test_a_cut_gateway_dies_and_is_born_anew_with_its_past(gateway: tuple[Host, SparkplugWire]) -> None:
    host, wire = gateway
    link = Delivery("1")
    wire.publish(link.update(NOW, lot(0), LinkState()))
    (_, node), _ = host.take(2)
    wire.cut()
    [(topic, death)] = host.take(1)
    assert (topic, death.metrics[0].long_value) == ("spBv1.0/g/NDEATH/gw", node.metrics[0].long_value)
    for n in (1, 2, 3):
        assert not link.update(NOW + n, lot(n), LOST)
    wire.restore()
    assert not wire.is_cut
    until(lambda: wire.up)
    wire.publish(link.update(NOW + 4, lot(4), LinkState()))
    messages = host.take(5)
    assert [t.split("/")[2] for t, _ in messages] == ["NBIRTH", "DBIRTH", "DDATA", "DDATA", "DDATA"]
    assert [p.seq for _, p in messages] == [0, 1, 2, 3, 4]
    assert messages[0][1].metrics[0].long_value == node.metrics[0].long_value + 1  # bdSeq
    assert not any(m.is_historical for m in messages[1][1].metrics)
    past = [m for _, p in messages[2:] for m in p.metrics if m.WhichOneof("value") == "float_value"]
    assert [(m.timestamp, m.float_value, m.is_historical) for m in past] == [
        (MS + 1000 * n, 20.0 + n, True) for n in (1, 2, 3)
    ]


def test_samples_out_of_order_are_all_sent_and_a_birth_says_the_newest(
    gateway: tuple[Host, SparkplugWire],
) -> None:
    host, wire = gateway
    wire.publish([*lot(1), lot(0)[0], lot(2)[0]])
    _, (_, birth), (_, first), (_, second) = host.take(4)
    pressures = [m.float_value for m in birth.metrics if m.WhichOneof("value") == "float_value"]
    assert pressures == [22.0]
    assert [m.timestamp for m in (*first.metrics, *second.metrics)] == [MS, MS + 1000]
    wire.publish([lot(1)[0]])  # still later
    assert [m.timestamp for m in host.take(1)[0][1].metrics] == [MS + 1000]


# OPC UA


class Served:
    """A server that is cut and restored, and a new client for each look."""

    def __init__(self) -> None:
        address = f"opc.tcp://127.0.0.1:{free_port()}/ostmere"
        plan = load_site(SITE, addresses={"control-system": address})
        self.address = address
        self.tags = {i.tag: i for u in plan.units for i in u.inputs if i.source == "control-system"}
        self.runner = asyncio.Runner()
        self._stack = AsyncExitStack()
        self.wire = OpcuaWire(address, plan.units, "control-system")
        self.runner.run(self._stack.enter_async_context(self.wire))

    async def look(
        self, tag: str, first: float, last: float
    ) -> tuple[ua.DataValue, list[tuple[float, Any, int]]]:
        async with Client(self.address, timeout=5) as client:
            index = await client.get_namespace_index(NAMESPACE)
            node = client.get_node(f"ns={index};s={self.tags[tag].address.rpartition('s=')[2]}")
            now = await node.read_data_value(raise_on_bad_status=False)
            times = (datetime.fromtimestamp(first, UTC), datetime.fromtimestamp(last, UTC))
            past = await node.read_raw_history(*times)
        return now, [(v.SourceTimestamp.timestamp(), v.Value.Value, v.StatusCode.value) for v in past]

    def close(self) -> None:
        self.runner.run(self._stack.aclose())
        self.runner.close()


@pytest.fixture(scope="module")
def served() -> Iterator[Served]:
    made = Served()
    yield made
    made.close()


# source: OPC UA Part 6, status codes
GOOD_CODE, UNCERTAIN_CODE, BAD_CODE = 0x0, 0x40930000, 0x808C0000


def test_status_codes_stand_beside_the_value_and_in_the_history(served: Served) -> None:
    tag = served.tags["PT-2201"]
    told = [(20.0, GOOD), (21.0, UNCERTAIN), (21.0, BAD), (None, BAD), (22.0, GOOD), (23.0, UNCERTAIN)]

    async def check() -> None:
        for n, (value, quality) in enumerate(told):
            await served.wire.write([Sample(tag=tag, time=NOW + n, value=value, quality=quality)])
        now, past = await served.look("PT-2201", NOW, NOW + 10)
        assert (now.Value.Value, now.StatusCode.value) == (23.0, UNCERTAIN_CODE)
        assert [code for _, _, code in past] == [
            GOOD_CODE, UNCERTAIN_CODE, BAD_CODE, BAD_CODE, GOOD_CODE, UNCERTAIN_CODE
        ]  # fmt: skip
        assert [value for _, value, _ in past] == [20.0, 21.0, 21.0, 0.0, 22.0, 23.0]
        assert [time for time, _, _ in past] == pytest.approx([NOW + n for n in range(6)], abs=1e-3)

    served.runner.run(check())


def test_a_cut_server_does_not_answer_and_comes_back_with_its_history(served: Served) -> None:
    tag, link = served.tags["PT-2203"], Delivery("1", catch_up=None)

    def sampled(n: int, state: LinkState) -> list[Sample]:
        return list(link.update(NOW + n, [Sample(tag=tag, time=NOW + n, value=30.0 + n)], state))

    async def check() -> None:
        await served.wire.write(sampled(0, LinkState()))
        async with AsyncExitStack() as stack:
            client = Client(served.address, timeout=2)
            await client.connect()
            stack.callback(client.disconnect_socket)
            await served.wire.cut()
            assert served.wire.is_cut
            with pytest.raises((ConnectionError, TimeoutError, asyncio.CancelledError)):
                async with asyncio.timeout(5):
                    await client.nodes.server_state.read_value()
        with pytest.raises(ConnectionRefusedError):
            await Client(served.address, timeout=2).connect()
        for n in (1, 2, 3):
            await served.wire.write(sampled(n, LOST))
        await served.wire.restore()
        await served.wire.write(sampled(4, LinkState()))
        now, past = await served.look("PT-2203", NOW, NOW + 10)
        assert now.Value.Value == 34.0
        assert [(value, code) for _, value, code in past] == [(30.0 + n, 0) for n in range(5)]
        await served.wire.cut()
        await served.wire.restore()
        assert (await served.look("PT-2203", NOW, NOW + 10))[0].Value.Value == 34.0

    served.runner.run(check())


def test_history_is_in_order_of_time_whatever_the_order_of_arrival(served: Served) -> None:
    tag = served.tags["PT-2206"]

    async def check() -> None:
        order = [5, 1, 3, 2, 4, 0]
        for n in order:
            past = Sample(tag=tag, time=NOW + n, value=float(n), historical=n != 5)
            await served.wire.write([past])
        now, past = await served.look("PT-2206", NOW, NOW + 10)
        assert now.Value.Value == 5.0  # what is past is never what holds now
        assert [value for _, value, _ in past] == [0.0, 1.0, 2.0, 3.0, 4.0, 5.0]
        _, back = await served.look("PT-2206", NOW + 10, NOW)
        assert [value for _, value, _ in back] == [5.0, 4.0, 3.0, 2.0, 1.0, 0.0]

    served.runner.run(check())


def test_the_server_tells_what_may_be_asked_of_the_past(served: Served) -> None:
    async def check() -> None:
        async with Client(served.address, timeout=5) as client:
            told = {}
            for name in ("AccessHistoryDataCapability", "UpdateDataCapability", "MaxReturnDataValues"):
                number = getattr(ua.ObjectIds, f"HistoryServerCapabilities_{name}")
                told[name] = await client.get_node(ua.NodeId(number)).read_value()
        assert told == {
            "AccessHistoryDataCapability": True, "UpdateDataCapability": False, "MaxReturnDataValues": 3600
        }  # fmt: skip

    served.runner.run(check())
