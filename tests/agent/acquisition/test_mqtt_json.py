"""What only the MQTT source does: sessions, acknowledgement after the commit, the broker's window."""

import asyncio
import contextlib
import re
import signal
import socket
import threading
import time
from collections.abc import Callable, Iterator
from typing import Any

import pytest

from agent.acquisition.build import build_source
from agent.clock import SystemClock
from agent.records import LinkState, Reading
from agent.siteplan.plan import Input, MqttVersion, Source, SourceKind

both_versions = pytest.mark.parametrize("version", list(MqttVersion))


def receipts(readings: list[Reading]) -> list[Any]:
    assert all(r.receipt is not None for r in readings)
    return [r.receipt for r in readings]


def is_up(heard: Any) -> bool:
    return heard.source.status().state is LinkState.UP


@pytest.fixture
def tag(make_input: Callable[..., Input]) -> Input:
    return make_input("PT")


@pytest.mark.mosquitto
@both_versions
def test_what_was_not_acknowledged_comes_again_and_what_was_does_not(
    version: MqttVersion, mosquitto: Any, tag: Input, listening: Any, until: Any
) -> None:
    plant = mosquitto(version)

    async def scenario() -> None:
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            for n in range(6):
                plant.send("PT", float(n), time.time())
            await until(lambda: len(heard.readings) == 6, "six readings")
            heard.source.acknowledge(receipts(heard.readings[:3]))
        async with listening(plant.source(tag)) as heard:
            await until(lambda: len(heard.readings) == 3, "the three that were not acknowledged")
            heard.source.acknowledge(receipts(heard.readings))
            assert heard.values("PT") == [3.0, 4.0, 5.0]
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            plant.send("PT", 9.0, time.time())
            await until(lambda: heard.readings, "the next one")
            assert heard.values("PT") == [9.0]

    asyncio.run(scenario())


@pytest.mark.mosquitto
@both_versions
def test_a_receipt_of_an_earlier_connection_does_nothing(
    version: MqttVersion, mosquitto: Any, tag: Input, listening: Any, until: Any
) -> None:
    plant = mosquitto(version)

    async def scenario() -> None:
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            plant.send("PT", 1.0, time.time())
            await until(lambda: heard.readings, "a reading")
            plant.state_file.unlink(missing_ok=True)
            plant.child.signal(signal.SIGUSR1)  # save now
            await until(plant.state_file.exists, "the broker has written its state")
            await asyncio.to_thread(plant.kill)
            await until(lambda: not is_up(heard), "down")
            await asyncio.to_thread(plant.start)
            await until(lambda: len(heard.readings) == 2, "the same message on the new connection")
            old, new = receipts(heard.readings)
            assert old.connection < new.connection
            heard.source.acknowledge([old])
        async with listening(plant.source(tag)) as heard:
            await until(lambda: heard.readings, "it comes once more")
            heard.source.acknowledge(receipts(heard.readings))

    asyncio.run(scenario())


@pytest.mark.mosquitto
@both_versions
def test_rejected_messages_and_foreign_topics_are_acknowledged_at_once(
    version: MqttVersion, mosquitto: Any, tag: Input, listening: Any, until: Any
) -> None:
    plant = mosquitto(version)

    async def scenario() -> None:
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            for _ in range(30):  # more than the broker's window of 20
                plant.send_raw("PT", b"garbage")
                plant.send_raw("elsewhere", b"whatever")
            await until(lambda: heard.source.status().rejected == 30, "all rejected")
            assert heard.source.status().last_rejection == "site/PT: the payload is not JSON"
            plant.send("PT", 1.0, time.time())
            await until(lambda: heard.readings, "and a good one")

    asyncio.run(scenario())


@pytest.mark.mosquitto
@both_versions
def test_a_queue_of_900_is_drained_by_acknowledging_as_it_comes(
    version: MqttVersion, mosquitto: Any, make_input: Callable[..., Input], listening: Any, until: Any
) -> None:
    """Nine tags for a hundred seconds, through the default window of 20; none waits for a tick."""
    plant = mosquitto(version)
    tags = [make_input(f"T{n}") for n in range(9)]

    async def scenario() -> None:
        async with listening(plant.source(*tags)) as heard:
            await until(lambda: is_up(heard), "the session is made")
        start = time.time() - 200
        for n in range(900):
            plant.send(f"T{n % 9}", float(n), start + n / 9)
        source = plant.source(*tags)
        seen: list[float | None] = []
        async with source:
            async with asyncio.timeout(30):
                async for batch in source:
                    seen.extend(r.value for r in batch)
                    source.acknowledge(receipts(list(batch)))
                    if len(seen) >= 900:
                        break
        assert seen == [float(n) for n in range(900)]

    asyncio.run(scenario())


@pytest.mark.mosquitto
@both_versions
def test_nothing_is_lost_when_acknowledged_once_a_tick(
    version: MqttVersion, mosquitto: Any, make_input: Callable[..., Input], listening: Any, until: Any
) -> None:
    """Nine messages per tick, acknowledged at the next one, for 40 (hurried) ticks."""
    plant = mosquitto(version)
    tags = [make_input(f"T{n}") for n in range(9)]

    async def scenario() -> None:
        async with listening(plant.source(*tags)) as heard:
            await until(lambda: is_up(heard), "up")
            settled = 0
            for tick in range(40):
                for n in range(9):
                    plant.send(f"T{n}", float(tick * 9 + n), time.time())
                await asyncio.sleep(0.1)
                ready = heard.readings[settled:]
                heard.source.acknowledge(receipts(ready))
                settled += len(ready)
            await until(lambda: len(heard.readings) >= 360, "all of them")
            assert sorted(r.value or 0.0 for r in heard.readings) == [float(n) for n in range(360)]

    asyncio.run(scenario())


@pytest.mark.mosquitto
def test_version_5_lets_many_messages_wait_and_311_says_when_its_window_is_full(
    mosquitto: Any, tag: Input, listening: Any, until: Any
) -> None:
    plant = mosquitto(MqttVersion.V311)

    async def scenario() -> None:
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            for n in range(50):
                plant.send("PT", float(n), time.time())
            await until(lambda: "wait for a commit" in heard.source.status().detail, "it says so")
            assert len(heard.readings) == 20  # Mosquitto's default window
            while len(heard.readings) < 50:
                heard.source.acknowledge(receipts(heard.readings))
                await asyncio.sleep(0.01)
            heard.source.acknowledge(receipts(heard.readings))
        plant._version = MqttVersion.V5
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            for n in range(500):
                plant.send("PT", float(n), time.time())
            await until(lambda: len(heard.readings) == 500, "all, none acknowledged")

    asyncio.run(scenario())


@pytest.mark.mosquitto
def test_a_broker_that_falls_silent_is_noticed(
    mosquitto: Any, tag: Input, listening: Any, until: Any
) -> None:
    plant = mosquitto(MqttVersion.V5)

    async def scenario() -> None:
        async with listening(plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            plant.child.signal(signal.SIGSTOP)
            await until(lambda: not is_up(heard), "twice the keep-alive of 5 s", 13.0)
            plant.child.signal(signal.SIGCONT)
            await until(lambda: is_up(heard), "up again")

    asyncio.run(scenario())


def test_a_retained_message_keeps_its_own_old_time(
    amqtt_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    an_hour_ago = time.time() - 3600
    amqtt_plant.send_raw("PT", f'{{"value": 4, "time": {an_hour_ago}}}'.encode(), retain=True)

    async def scenario() -> None:
        async with listening(amqtt_plant.source(tag)) as heard:
            await until(lambda: heard.readings, "the retained one")
            assert heard.readings[0].source_time == pytest.approx(an_hour_ago)

    asyncio.run(scenario())


def test_a_reading_dated_ahead_does_not_hold_a_place_in_the_window(
    amqtt_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(amqtt_plant.source(tag)) as heard:
            await until(lambda: is_up(heard), "up")
            for n in range(40):
                amqtt_plant.send("PT", float(n), time.time() + 5.0)
            await until(lambda: len(heard.readings) == 40, "all, none acknowledged by the pipeline")
            assert {r.receipt for r in heard.readings} == {None}
            assert "40 readings dated ahead" in heard.source.status().detail

    asyncio.run(scenario())


def test_a_broker_of_another_version_is_told_and_not_spoken_to_in_an_older_one(
    amqtt_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    """The embedded broker speaks 3.1.1 only, and says nothing to a client of version 5."""
    amqtt_plant._version = MqttVersion.V5

    async def scenario() -> None:
        async with listening(amqtt_plant.source(tag)) as heard:
            await until(lambda: heard.source.status().state is LinkState.DOWN, "down")
            assert re.search("does not answer to MQTT 5|refused", heard.source.status().detail)
            assert heard.source.status().connections == 0

    asyncio.run(scenario())


@pytest.fixture
def refusing_port() -> Iterator[int]:
    """A port where every connection is answered with "not authorized"."""
    listener = socket.create_server(("127.0.0.1", 0))

    def serve() -> None:
        while True:
            try:
                connection, _ = listener.accept()
            except OSError:  # the listener is shut down
                return
            with connection, contextlib.suppress(OSError):  # the source may be gone already
                connection.recv(100)
                connection.sendall(bytes.fromhex("20020005"))  # source: MQTT 3.1.1 section 3.2, return code 5

    thread = threading.Thread(target=serve)
    thread.start()
    yield int(listener.getsockname()[1])
    listener.shutdown(socket.SHUT_RDWR)
    listener.close()
    thread.join()


def test_a_refusal_of_the_broker_is_told(
    refusing_port: int, make_input: Callable[..., Input], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        source = build_source(
            Source(
                name="plant",
                kind=SourceKind.MQTT_JSON,
                address=f"mqtt://127.0.0.1:{refusing_port}",
                mqtt_version=MqttVersion.V311,
                client_id="throwline-test",
                topics=("site/#",),
            ),
            (make_input("PT"),),
            SystemClock(),
        )
        async with listening(source) as heard:
            await until(lambda: heard.source.status().state is LinkState.DOWN, "down")
            assert "refused the connection: Not authorized" in heard.source.status().detail

    asyncio.run(scenario())
