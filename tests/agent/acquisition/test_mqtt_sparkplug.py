"""What only the Sparkplug source does, on real brokers, with the invented edge node at the other end."""

import asyncio
import queue
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import replace
from typing import Any

import pytest
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from agent.acquisition.build import build_source
from agent.acquisition.rejection import SIMULATED
from agent.clock import HandClock, SystemClock
from agent.records import LinkState, Quality
from agent.siteplan.plan import Input, MqttVersion, Source, SourceKind
from agent.sparkplug.wire import DataType, MessageType, Metric, Payload, Topic
from simulator.sample import Sample
from simulator.serve_sparkplug import SparkplugWire

MakeInput = Callable[..., Input]


@pytest.fixture
def tags(make_input: MakeInput) -> tuple[Input, ...]:
    plain = make_input("PT", address="gw/K/PT")
    return (
        plain,
        replace(make_input("UY", unit="word", address="gw/K/UY", on_change=True), quantity="load_step"),
        replace(make_input("XS", unit="switch", address="gw/K/XS", on_change=True), quantity="run_signal"),
        replace(make_input("FT", address="gw/K/FT"), subject="unit"),
    )


def source(
    port: int,
    tags: tuple[Input, ...],
    version: MqttVersion = MqttVersion.V311,
    *,
    takes_simulated: bool = True,
) -> Any:
    entry = Source(
        name="plant",
        kind=SourceKind.MQTT_SPARKPLUG,
        address=f"mqtt://127.0.0.1:{port}",
        mqtt_version=version,
        client_id="throwline-test",
        group="g",
        takes_simulated=takes_simulated,
    )
    return build_source(entry, tags, SystemClock())


def instant(tags: tuple[Input, ...], *values: Any, at: float | None = None) -> list[Sample]:
    when = round(time.time() if at is None else at, 3)
    return [Sample(tag=tag, time=when, value=value) for tag, value in zip(tags, values, strict=False)]


def is_up(heard: Any) -> bool:
    return heard.source.status().state is LinkState.UP


@contextmanager
def gateway(port: int, tags: tuple[Input, ...], **settings: Any) -> Iterator[SparkplugWire]:
    wire = SparkplugWire(f"mqtt://127.0.0.1:{port}", group="g", tags=tags, **settings)
    wire.open()
    try:
        end = time.monotonic() + 20
        while not wire.up:
            assert time.monotonic() < end
            time.sleep(0.01)
        yield wire
    finally:
        wire.close()


@pytest.mark.mosquitto
@pytest.mark.parametrize("version", list(MqttVersion))
def test_what_the_edge_node_sends_is_read(
    version: MqttVersion, mosquitto: Any, tags: tuple[Input, ...], listening: Any, until: Any
) -> None:
    port = mosquitto(version).port

    async def scenario() -> None:
        async with listening(source(port, tags, version)) as heard:
            await until(lambda: is_up(heard), "up")
            assert "edge node gw: no birth since we listen" in heard.source.status().detail
            start = round(time.time() - 2, 3)
            with gateway(port, tags) as wire:
                wire.publish(instant(tags, 20.25, "100", True, 1e-3, at=start))
                wire.publish(instant(tags, 21.25, "50", True, None, at=start + 1))
                await until(lambda: len(heard.readings) == 7, "four of the birth, three of the data")
                assert [(r.address, r.source_time, r.value, r.word, r.quality) for r in heard.readings] == [
                    ("gw/K/PT", start, 20.25, None, Quality.GOOD),
                    ("gw/K/UY", start, None, "100", Quality.GOOD),
                    ("gw/K/XS", start, 1.0, None, Quality.GOOD),
                    ("gw/K/FT", start, 1e-3, None, Quality.GOOD),
                    ("gw/K/PT", start + 1, 21.25, None, Quality.GOOD),
                    ("gw/K/UY", start + 1, None, "50", Quality.GOOD),
                    ("gw/K/FT", start + 1, None, None, Quality.BAD),  # null; the switch has not changed
                ]
                assert "edge node" not in heard.source.status().detail
                assert {r.receipt for r in heard.readings} == {None}
                heard.source.acknowledge([])
            await until(lambda: len(heard.readings) == 11, "it took its leave: all four bad")
            assert {r.quality for r in heard.readings[7:]} == {Quality.BAD}
            assert "edge node gw: dead" in heard.source.status().detail
            assert heard.source.status().rejected == 0

    asyncio.run(scenario())


@pytest.mark.mosquitto
def test_the_edge_node_sends_at_most_once_and_dies_at_least_once(
    mosquitto: Any, tags: tuple[Input, ...], until: Any
) -> None:
    """Seen by a subscriber that would take either."""
    port = mosquitto(MqttVersion.V311).port
    voice = Voice(port)
    with gateway(port, tags) as wire:
        wire.publish(instant(tags, 20.0, "100", True, 1.0))
        wire.publish(instant(tags, 21.0, "100", True, 1.0))
    seen = [voice.heard.get(timeout=20) for _ in range(4)]
    voice.close()
    assert [(t.split("/")[2], qos) for t, qos in seen] == [
        ("NBIRTH", 0), ("DBIRTH", 0), ("DDATA", 0), ("NDEATH", 1)
    ]  # fmt: skip


class Voice:
    """A client that says what no edge node should, and hears everything on the broker."""

    def __init__(self, port: int) -> None:
        self.heard: queue.SimpleQueue[tuple[str, int]] = queue.SimpleQueue()
        subscribed: queue.SimpleQueue[bool] = queue.SimpleQueue()
        self._client = Client(CallbackAPIVersion.VERSION2, client_id="voice")
        self._client.on_message = lambda _c, _u, message: self.heard.put((message.topic, message.qos))
        self._client.on_subscribe = lambda *_: subscribed.put(True)
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()
        self._client.subscribe("#", qos=1)
        subscribed.get(timeout=20)

    def say(self, topic: str | Topic, payload: bytes | Payload, *, retain: bool = False) -> None:
        content = payload if isinstance(payload, bytes) else payload.SerializeToString()
        self._client.publish(str(topic), content, qos=1, retain=retain).wait_for_publish(20)

    def close(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()


@pytest.fixture
def voice(amqtt_plant: Any) -> Iterator[Voice]:
    made = Voice(amqtt_plant.port)
    yield made
    made.close()


def topic(kind: MessageType) -> Topic:
    return Topic(group="g", type=kind, node="gw", device="K" if kind.startswith("D") else "")


def births(at: float, *, seq: int = 0) -> list[tuple[Topic, Payload]]:
    when = round(at * 1000)
    session = Metric(name="bdSeq", datatype=DataType.INT64, long_value=0)
    tag = Metric(name="PT", alias=1, datatype=DataType.INT32, int_value=2**32 - 5)
    return [
        (topic(MessageType.NODE_BIRTH), Payload(timestamp=when, seq=seq, metrics=[session])),
        (topic(MessageType.DEVICE_BIRTH), Payload(timestamp=when, seq=seq + 1, metrics=[tag])),
    ]


def test_a_gap_is_bad_until_the_next_birth_and_the_agent_says_nothing(
    amqtt_plant: Any, voice: Voice, make_input: MakeInput, listening: Any, until: Any
) -> None:
    tag = make_input("PT", address="gw/K/PT")

    async def scenario() -> None:
        async with listening(source(amqtt_plant.port, (tag,))) as heard:
            await until(lambda: is_up(heard), "up")
            for message in births(time.time()):
                voice.say(*message)
            lost = Payload(timestamp=round(time.time() * 1000), seq=9, metrics=[Metric(alias=1, int_value=7)])
            voice.say(topic(MessageType.DEVICE_DATA), lost)
            voice.say("spBv1.0/g/DDATA/gw/K", b"garbage")
            voice.say("spBv1.0/g/nonsense", b"")
            await until(lambda: heard.source.status().rejected == 3, "all three are refused")
            assert heard.source.status().last_rejection == (
                "spBv1.0/g/nonsense: no topic of an edge node or device"
            )
            await until(lambda: len(heard.readings) == 2, "the value and its mark")
            assert [r.value for r in heard.readings] == [-5.0, None]
            assert [r.quality for r in heard.readings] == [Quality.GOOD, Quality.BAD]
            assert "waits for its next birth" in heard.source.status().detail
            for message in births(time.time(), seq=254):
                voice.say(*message)
            when = round(time.time() * 1000)
            after = Payload(timestamp=when, seq=0, metrics=[Metric(alias=1, int_value=8)])
            voice.say(topic(MessageType.DEVICE_DATA), after)  # 255 is followed by 0
            await until(lambda: 8.0 in heard.values("PT"), "and again")

    asyncio.run(scenario())
    said = [voice.heard.get(timeout=20) for _ in range(8)]
    assert {t.split("/")[2] for t, _ in said} == {"NBIRTH", "DBIRTH", "DDATA", "nonsense"}
    assert voice.heard.empty()


@pytest.mark.mosquitto
def test_a_retained_message_is_not_believed(
    mosquitto: Any, make_input: MakeInput, listening: Any, until: Any
) -> None:
    tag = make_input("PT", address="gw/K/PT")
    port = mosquitto(MqttVersion.V311).port
    voice = Voice(port)
    for message in births(time.time()):
        voice.say(*message, retain=True)
    voice.close()

    async def scenario() -> None:
        async with listening(source(port, (tag,))) as heard:
            await until(lambda: heard.source.status().rejected == 2, "both are refused")
            assert "retained" in heard.source.status().last_rejection
            assert heard.readings == []

    asyncio.run(scenario())


def test_inputs_wait_for_a_birth_after_every_connection(
    amqtt_plant: Any, tags: tuple[Input, ...], listening: Any, until: Any
) -> None:
    """What was sent while the broker was away comes late, with its own time, and revives nothing."""

    async def scenario() -> None:
        async with listening(source(amqtt_plant.port, tags)) as heard:
            await until(lambda: is_up(heard), "up")
            with gateway(amqtt_plant.port, tags) as wire:
                wire.publish(instant(tags, 20.0, "100", True, 1.0))
                await until(lambda: len(heard.readings) == 4, "a birth")
                await asyncio.to_thread(amqtt_plant.kill)
                await until(lambda: not wire.up and not is_up(heard), "both notice")
                between = round(time.time(), 3)
                wire.publish(instant(tags, 20.5, "50", True, 1.5, at=between))
                await asyncio.to_thread(amqtt_plant.start)
                await until(lambda: is_up(heard), "the source is up again", 40.0)
                assert {r.quality for r in heard.readings[4:]} == {Quality.BAD}
                await until(lambda: wire.up, "the edge node as well", 40.0)
                now = round(time.time(), 3)
                wire.publish(instant(tags, 21.0, "100", True, 2.0, at=now))
                await until(lambda: len(heard.readings) == 16, "marks, a birth and history")
                told = [(r.source_time, r.word or r.value) for r in heard.readings[8:]]
                assert told[:4] == [(now, 21.0), (now, "100"), (now, 1.0), (now, 2.0)]
                assert told[4:] == [(between, 20.5), (between, "50"), (between, 1.0), (between, 1.5)]

    asyncio.run(scenario())


def test_a_real_site_takes_nothing_of_an_invented_gateway_and_says_so(
    amqtt_plant: Any, tags: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(source(amqtt_plant.port, tags, takes_simulated=False)) as heard:
            await until(lambda: is_up(heard), "up")
            with gateway(amqtt_plant.port, tags) as wire:
                wire.publish(instant(tags, 20.0, "100", True, 1.0))
                await until(lambda: heard.source.status().rejected == 4, "four refusals")
                assert heard.source.status().last_rejection.endswith(SIMULATED)
                assert heard.readings == []

    asyncio.run(scenario())


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"group": ""}, "no Sparkplug group"),
        ({"group": "g/#"}, "no Sparkplug group"),
        ({"client_id": ""}, "client id"),
        ({"address": "http://h"}, "mqtt://host:port"),
    ],
)
def test_what_cannot_work_is_refused(changes: dict[str, str], reason: str) -> None:
    entry = Source(
        name="plant", kind=SourceKind.MQTT_SPARKPLUG, address="mqtt://h:1883", client_id="c", group="g"
    )
    with pytest.raises(ValueError, match=reason):
        build_source(replace(entry, **changes), (), HandClock(0.0))  # type: ignore[arg-type]


def test_an_address_that_is_none_is_refused_at_the_start(make_input: MakeInput) -> None:
    with pytest.raises(ValueError, match="<edge node>/<device>/<metric>"):
        source(1883, (make_input("PT", address="gw"),))
