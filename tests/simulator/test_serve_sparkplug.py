"""The edge node keeps the rules of Sparkplug B 3.0: session, order, names, deaths, history."""

import socket
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from agent.siteplan.load import load_site
from agent.siteplan.plan import Input
from agent.sparkplug.wire import DataType, Metric
from simulator.sample import Sample
from simulator.serve_sparkplug import SparkplugWire, data_type, put_value
from tests.simulator.wires import Broker, Host, until

ROOT = Path(__file__).resolve().parents[2]
PLAIN = load_site(ROOT / "tests" / "config_errors" / "no_mistake.yaml").units[0]
NOW = 1_800_000_000.4
MS = 1_800_000_000_400


def tags() -> list[Input]:
    """A pressure, a word and a switch sent on change, and a flow, on one device."""
    wanted = ("stage1.suction_pressure", "unit.load_step", "unit.run_signal", "unit.flow")
    found = [i for i in PLAIN.inputs if i.name in wanted]
    assert len(found) == 4
    return [replace(i, address=f"gw/K-1/{i.tag}", source="gateway") for i in found]


def instant(values: dict[str, Any], at: float = NOW) -> list[Sample]:
    return [Sample(tag=tag, time=at, value=values[tag.quantity]) for tag in tags()]


FIRST = {"suction_pressure": 20.25, "load_step": "full", "run_signal": True, "flow": 1234.5}


@pytest.fixture
def broker() -> Iterator[Broker]:
    made = Broker()
    yield made
    made.stop()


@pytest.fixture
def host(broker: Broker) -> Iterator[Host]:
    made = Host(broker.port)
    yield made
    made.close()


@pytest.fixture
def wire(broker: Broker) -> Iterator[SparkplugWire]:
    made = SparkplugWire(f"mqtt://127.0.0.1:{broker.port}", group="g", tags=tags())
    made.open()
    until(lambda: made.up)
    yield made
    made.close()


def test_births_name_everything_and_data_says_the_alias_alone(host: Host, wire: SparkplugWire) -> None:
    wire.publish(instant(FIRST))
    wire.publish(instant(FIRST | {"suction_pressure": 20.5}, NOW + 1))
    wire.publish(instant(FIRST | {"load_step": "half", "flow": None}, NOW + 2))
    (t0, node), (t1, device), (t2, data), (t3, more) = host.take(4)
    assert [t0, t1, t2, t3] == [
        "spBv1.0/g/NBIRTH/gw", "spBv1.0/g/DBIRTH/gw/K-1", "spBv1.0/g/DDATA/gw/K-1", "spBv1.0/g/DDATA/gw/K-1"
    ]  # fmt: skip
    assert [p.seq for p in (node, device, data, more)] == [0, 1, 2, 3]
    assert [p.timestamp for p in (node, device, data, more)] == [MS, MS, MS + 1000, MS + 2000]
    assert {m.name: m.WhichOneof("value") for m in node.metrics} == {
        "bdSeq": "long_value", "Node Control/Rebirth": "boolean_value", "Simulated": "boolean_value"
    }  # fmt: skip
    assert [m.boolean_value for m in node.metrics[1:]] == [False, True]
    assert all(m.HasField("datatype") and m.HasField("timestamp") for m in (*node.metrics, *device.metrics))
    born = {m.name: m for m in device.metrics}
    by_quantity = {tag.quantity: born[tag.tag] for tag in tags()}
    assert by_quantity["suction_pressure"].float_value == 20.25
    assert by_quantity["load_step"].string_value == "full"
    assert by_quantity["run_signal"].boolean_value is True
    assert by_quantity["flow"].double_value == 1234.5
    names = {m.alias: m.name for m in device.metrics}
    assert len(names) == 4
    assert not any(m.HasField("name") or m.HasField("datatype") for m in (*data.metrics, *more.metrics))
    # what is sent on change is left out while it stays the same
    assert {names[m.alias] for m in data.metrics} == {
        by_quantity["suction_pressure"].name,
        by_quantity["flow"].name,
    }
    assert {names[m.alias]: m.is_null for m in more.metrics} == {
        by_quantity["suction_pressure"].name: False,
        by_quantity["load_step"].name: False,
        by_quantity["flow"].name: True,
    }


def test_numbers_run_from_0_to_255_over_all_messages_since_the_birth(host: Host, wire: SparkplugWire) -> None:
    for n in range(300):
        wire.publish(instant(FIRST, NOW + n / 1000))
    assert [p.seq for _, p in host.take(301)] == [n % 256 for n in range(301)]


def test_it_bears_itself_anew_when_asked_and_by_its_own_timer(host: Host, wire: SparkplugWire) -> None:
    wire.publish(instant(FIRST))
    host.take(2)
    host.ask_for_birth(MS)
    until(wire._birth_due.is_set)
    wire.publish(instant(FIRST, NOW + 1))
    assert [(t.split("/")[2], p.seq) for t, p in host.take(2)] == [("NBIRTH", 0), ("DBIRTH", 1)]
    wire.publish(instant(FIRST, NOW + 5.9))
    assert host.take(1)[0][1].seq == 2
    wire.publish(instant(FIRST, NOW + 6))  # five seconds after the last
    assert [(t.split("/")[2], p.seq) for t, p in host.take(2)] == [("NBIRTH", 0), ("DBIRTH", 1)]


def test_a_farewell_is_its_death_with_the_number_of_its_birth(host: Host, wire: SparkplugWire) -> None:
    wire.publish(instant(FIRST))
    (_, birth), _ = host.take(2)
    wire.close()
    [(topic, death)] = host.take(1)
    assert topic == "spBv1.0/g/NDEATH/gw"
    assert not death.HasField("seq")
    assert death.metrics[0].name == birth.metrics[0].name == "bdSeq"
    assert death.metrics[0].long_value == birth.metrics[0].long_value == 0


def test_a_lost_connection_is_a_death_and_the_next_session_has_the_next_number(
    broker: Broker, host: Host, wire: SparkplugWire
) -> None:
    wire.publish(instant(FIRST))
    host.take(2)
    sock = wire._link.client.socket()
    assert sock is not None
    sock.shutdown(socket.SHUT_RDWR)  # as a cut cable: no word of farewell
    [(topic, death)] = host.take(1)
    assert (topic, death.metrics[0].long_value) == ("spBv1.0/g/NDEATH/gw", 0)
    until(lambda: not wire.up)
    wire.publish(instant(FIRST | {"flow": 5.0}, NOW + 1))
    until(lambda: wire.up)
    wire.publish(instant(FIRST | {"flow": 6.0}, NOW + 2))
    (_, node), (_, device), (topic, kept) = host.take(3)
    assert node.metrics[0].long_value == 1
    assert topic == "spBv1.0/g/DDATA/gw/K-1"
    assert all(m.is_historical and m.timestamp == MS + 1000 for m in kept.metrics)
    assert len(kept.metrics) == 4
    assert [m.double_value for m in kept.metrics if m.WhichOneof("value") == "double_value"] == [5.0]
    assert not any(m.is_historical for m in device.metrics)


def test_samples_are_kept_for_ten_minutes_while_there_is_no_broker() -> None:
    made = SparkplugWire("mqtt://127.0.0.1:1", group="g", tags=tags())
    for n in range(700):
        made.publish(instant(FIRST, NOW + n))
    assert (len(made._kept), made._kept[0][0].time) == (600, NOW + 100)


@pytest.mark.parametrize(
    ("address", "group", "names", "said"),
    [
        ("http://127.0.0.1", "g", ["gw/K/A"], "is not mqtt://host:port"),
        ("mqtt://127.0.0.1", "", ["gw/K/A"], "a group and tags"),
        ("mqtt://127.0.0.1", "g", [], "a group and tags"),
        ("mqtt://127.0.0.1", "g", ["gw/K/A", "other/K/B"], "of one edge node"),
        ("mqtt://127.0.0.1", "g", ["gw/A"], "of one edge node"),
    ],
)
def test_what_cannot_be_served_is_refused(address: str, group: str, names: list[str], said: str) -> None:
    made = [replace(tags()[0], address=name) for name in names]
    with pytest.raises(ValueError, match=said):
        SparkplugWire(address, group=group, tags=made)


@pytest.mark.parametrize("value", [None, float("nan"), float("inf")])
def test_what_is_no_value_is_null(value: float | None) -> None:
    metric = Metric()
    put_value(metric, value, DataType.DOUBLE)
    assert metric.is_null
    assert metric.WhichOneof("value") is None


def test_types_follow_the_tag() -> None:
    assert {tag.quantity: data_type(tag) for tag in tags()} == {
        "suction_pressure": DataType.FLOAT,
        "load_step": DataType.STRING,
        "run_signal": DataType.BOOLEAN,
        "flow": DataType.DOUBLE,
    }
