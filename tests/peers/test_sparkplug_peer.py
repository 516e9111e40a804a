"""The public JavaScript library for Sparkplug payloads reads our plant, and our source reads its payloads."""

import asyncio
import math
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from agent.acquisition.build import build_source
from agent.clock import SystemClock
from agent.records import Quality, Reading
from agent.siteplan.load import load_site
from agent.siteplan.plan import Input, MqttVersion, Source, SourceKind
from simulator.sample import Sample
from simulator.serve_sparkplug import SparkplugWire

pytestmark = pytest.mark.peers

ROOT = Path(__file__).resolve().parents[2]
START = 1_800_000_000.4
VALUES = {"suction_pressure": 20.1, "load_step": "full", "run_signal": True, "flow": -1234.56}


@pytest.fixture
def port() -> Iterator[int]:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        found = int(probe.getsockname()[1])
    command = [sys.executable, "-P", "-m", "simulator.broker_main", "--port", str(found)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, cwd=ROOT) as broker:
        assert broker.stdout is not None
        assert broker.stdout.readline() == b"broker up\n"
        yield found
        broker.terminate()


def tags() -> list[Input]:
    plain = load_site(ROOT / "tests" / "config_errors" / "no_mistake.yaml").units[0]
    found = [i for i in plain.inputs if i.quantity in VALUES]
    assert len(found) == 4
    return [replace(i, address=f"gw/K-1/{i.tag}", source="gateway") for i in found]


def instant(at: float, **changes: Any) -> list[Sample]:
    return [Sample(tag=tag, time=at, value=(VALUES | changes)[tag.quantity]) for tag in tags()]


def test_the_peer_reads_what_the_plant_sends(port: int, start_peer: Any) -> None:
    peer = start_peer("sparkplug.mjs", str(port), "ostmere")
    wire = SparkplugWire(f"mqtt://127.0.0.1:{port}", group="ostmere", tags=tags())
    with closing(wire):
        wire.publish(instant(START - 1, flow=7.5))  # kept: there is no connection yet
        wire.open()
        end = time.monotonic() + 20
        while not wire.up:
            assert time.monotonic() < end
            time.sleep(0.01)
        wire.publish(instant(START))
        wire.publish(instant(START + 1, suction_pressure=None, load_step="half"))
        node, device, kept, data = (peer.answer() for _ in range(4))
    assert peer.answer()["topic"] == "spBv1.0/ostmere/NDEATH/gw"
    topics = [f"spBv1.0/ostmere/{kind}" for kind in ("NBIRTH/gw", "DBIRTH/gw/K-1", "DDATA/gw/K-1")]
    assert [m["topic"] for m in (node, device, kept, data)] == [*topics, topics[2]]
    assert [m["seq"] for m in (node, device, kept, data)] == [0, 1, 2, 3]
    assert not any(m["retain"] for m in (node, device, kept, data))
    assert node["metrics"][0] | {"timestamp": 0} == {
        "name": "bdSeq", "type": "Int64", "value": 0, "timestamp": 0
    }  # fmt: skip
    names = {m["alias"]: m["name"] for m in device["metrics"]}
    by_tag = {tag.tag: tag for tag in tags()}
    types = {"suction_pressure": "Float", "load_step": "String", "run_signal": "Boolean", "flow": "Double"}
    for metric in device["metrics"]:
        tag = by_tag[metric["name"]]
        assert metric["type"] == types[tag.quantity]
        assert metric["timestamp"] == round(START * 1000)
        assert metric["properties"]["engUnit"] == {"type": "String", "value": tag.unit}
        assert metric["value"] == as_sent(tag, VALUES[tag.quantity])
    for metric in (*device["metrics"], *kept["metrics"], *data["metrics"]):
        code = 0 if metric["value"] is None else 192
        assert metric["properties"]["Quality"] == {"type": "Int32", "value": code}
        assert metric["properties"]["simulated"] == {"type": "Boolean", "value": True}
    later = {by_tag[names[m["alias"]]].quantity: m["value"] for m in data["metrics"]}
    assert later == {"suction_pressure": None, "load_step": "half", "flow": -1234.56}
    assert {m["timestamp"] for m in data["metrics"]} == {round((START + 1) * 1000)}
    assert [m.get("isHistorical") for m in kept["metrics"]] == [True] * 4
    assert {m["timestamp"] for m in kept["metrics"]} == {round((START - 1) * 1000)}
    assert {by_tag[names[m["alias"]]].quantity: m["value"] for m in kept["metrics"]}["flow"] == 7.5


def as_sent(tag: Input, value: Any) -> Any:
    return float(np.float32(value)) if tag.quantity == "suction_pressure" else value


# One metric of each type: name, type, value as the peer takes it, unit of our input, what we must read.
KINDS: list[tuple[str, str, Any, str, float | str]] = [
    ("i8", "Int8", -5, "barg", -5.0),
    ("i16", "Int16", -300, "barg", -300.0),
    ("i32", "Int32", -70_000, "barg", -70_000.0),
    ("u8", "UInt8", 200, "barg", 200.0),
    ("u16", "UInt16", 60_000, "barg", 60_000.0),
    ("u32", "UInt32", 4_000_000_000, "barg", 4e9),
    ("u64", "UInt64", 5_000_000_000, "barg", 5e9),
    ("f", "Float", 20.1, "barg", float(np.float32(20.1))),
    ("d", "Double", -20.1, "barg", -20.1),
    ("b", "Boolean", True, "switch", 1.0),
    ("s", "String", "100", "word", "100"),
    ("t", "Text", "50", "word", "50"),
]


def test_our_source_reads_what_the_peer_sends(port: int, start_peer: Any) -> None:
    model = tags()[0]
    inputs = [
        replace(model, tag=n, address=f"edge/dev/{n}", source="plant", unit=unit, span_low=-math.inf)
        for n, _, _, unit, _ in KINDS
    ]
    source = build_source(
        Source(
            name="plant",
            kind=SourceKind.MQTT_SPARKPLUG,
            address=f"mqtt://127.0.0.1:{port}",
            mqtt_version=MqttVersion.V311,
            client_id="throwline-test",
            group="g",
        ),
        inputs,
        SystemClock(),
    )
    at = round(time.time() * 1000)
    session = {"name": "bdSeq", "type": "UInt64", "value": 3}
    metrics = [
        {"name": n, "alias": k, "type": t, "value": v, "timestamp": at + k}
        for k, (n, t, v, _, _) in enumerate(KINDS)
    ]
    again = [
        {"alias": 7, "type": "Float", "value": None, "timestamp": at + 100},
        {"alias": 8, "type": "Double", "value": 1.5, "timestamp": at + 100, "isHistorical": True},
        {
            "alias": 0, "type": "Int8", "value": 1, "timestamp": at + 100,
            "properties": {"Quality": {"type": "Int32", "value": 500}},
        },
    ]  # fmt: skip
    messages = [
        ("NBIRTH/edge", {"seq": 0, "metrics": [session]}),
        ("DBIRTH/edge/dev", {"seq": 1, "metrics": metrics}),
        ("DDATA/edge/dev", {"seq": 2, "metrics": again}),
        ("NDEATH/edge", {"metrics": [session]}),
    ]
    readings: list[Reading] = []

    async def scenario() -> None:
        peer = await asyncio.to_thread(start_peer, "sparkplug.mjs", str(port), "none")
        async with source:
            async with asyncio.timeout(30):
                while source.status().connections == 0:  # noqa: ASYNC110 - a status has no event
                    await asyncio.sleep(0.01)
                for place, payload in messages:
                    peer.tell({"topic": f"spBv1.0/g/{place}", "payload": {"timestamp": at} | payload})
                    assert await asyncio.to_thread(peer.answer) == {"done": f"spBv1.0/g/{place}"}
                async for batch in source:
                    readings.extend(batch)
                    if len(readings) >= 2 * len(KINDS) + 3:
                        break
        assert source.status().rejected == 0, source.status().last_rejection

    asyncio.run(scenario())
    born = {r.address.rpartition("/")[2]: r for r in readings[: len(KINDS)]}
    for k, (name, _, _, _, expected) in enumerate(KINDS):
        reading = born[name]
        assert (reading.word if reading.value is None else reading.value) == expected
        assert (reading.quality, reading.source_time) == (Quality.GOOD, (at + k) / 1000)
    null, old, stale = readings[len(KINDS) : len(KINDS) + 3]
    assert (null.quality, null.value) == (Quality.BAD, None)
    assert (old.quality, old.value, old.source_time) == (Quality.GOOD, 1.5, (at + 100) / 1000)
    assert (stale.quality, stale.value) == (Quality.STALE, None)
    dead = readings[len(KINDS) + 3 :]
    assert {r.address for r in dead} == {i.address for i in inputs}
    assert {r.quality for r in dead} == {Quality.BAD}
