"""What only the OPC UA source does: node ids, time stamps, silence, missing nodes."""

import asyncio
import signal
import time
from collections.abc import Callable
from datetime import UTC, datetime
from typing import Any

import pytest
from asyncua import ua

from agent.acquisition.opcua import node_id, split_address
from agent.acquisition.opcua_value import reading_from
from agent.acquisition.rejection import Rejection
from agent.records import LinkState, Quality, Reading
from agent.siteplan.plan import Input

NOW = 1_767_225_600.0  # 2026-01-01T00:00:00Z; hand
MOMENT = datetime(2026, 1, 1, tzinfo=UTC)


def state(source: Any) -> LinkState:
    return source.status().state


@pytest.fixture
def tag(make_input: Callable[..., Input]) -> Input:
    return make_input("PT", address="nsu=urn:invented:plant;s=PT")


def outcome(
    entry: Input,
    value: object,
    kind: ua.VariantType,
    *,
    status: int = 0,
    source: datetime | None = MOMENT,
    server: datetime | None = None,
) -> Reading | Rejection:
    data = ua.DataValue(
        ua.Variant(value, kind),
        StatusCode=ua.StatusCode(status),
        SourceTimestamp=source,
        ServerTimestamp=server,
    )
    return reading_from(data, entry, "plant", NOW)


@pytest.mark.parametrize(
    ("status", "expected"),
    [
        (0x00000000, Quality.GOOD),
        (0x00000480, Quality.GOOD),  # good, with the overflow bit set
        (0x40920000, Quality.UNCERTAIN),
        (0x80310000, Quality.BAD),
        (0xC0000000, Quality.BAD),  # reserved: to be taken as bad
    ],
)
def test_the_top_two_bits_of_the_status_are_the_quality(tag: Input, status: int, expected: Quality) -> None:
    reading = outcome(tag, 20.5, ua.VariantType.Double, status=status)
    assert isinstance(reading, Reading)
    assert reading.quality is expected
    assert reading.value == (None if expected is Quality.BAD else 20.5)


def test_no_status_means_good(tag: Input) -> None:
    data = ua.DataValue(ua.Variant(1.0, ua.VariantType.Double), StatusCode=None, SourceTimestamp=MOMENT)
    reading = reading_from(data, tag, "plant", NOW)
    assert isinstance(reading, Reading)
    assert reading.quality is Quality.GOOD


@pytest.mark.parametrize(
    ("source", "server", "expected_time", "expected_quality"),
    [
        (MOMENT, None, NOW, Quality.GOOD),
        (None, MOMENT, NOW, Quality.GOOD),
        (datetime(1601, 1, 1, tzinfo=UTC), MOMENT, NOW, Quality.GOOD),
        (None, None, NOW + 0.0, Quality.UNCERTAIN),
    ],
)
def test_the_time_is_the_sources_else_the_servers_else_that_of_arrival(
    tag: Input,
    source: datetime | None,
    server: datetime | None,
    expected_time: float,
    expected_quality: Quality,
) -> None:
    reading = outcome(tag, 1.0, ua.VariantType.Double, source=source, server=server)
    assert isinstance(reading, Reading)
    assert (reading.source_time, reading.quality) == (expected_time, expected_quality)


def test_arrival_time_does_not_make_a_bad_value_better(tag: Input) -> None:
    reading = outcome(tag, 1.0, ua.VariantType.Double, status=0x80000000, source=None)
    assert isinstance(reading, Reading)
    assert reading.quality is Quality.BAD


@pytest.mark.parametrize(
    ("value", "kind", "reason"),
    [
        (float("nan"), ua.VariantType.Double, "not finite"),
        (float("inf"), ua.VariantType.Float, "not finite"),
        ("20.5", ua.VariantType.String, "not a number"),
        (True, ua.VariantType.Boolean, "not a number"),
        ([20.5], ua.VariantType.Double, "array"),
        ([], ua.VariantType.Double, "array"),
        (None, ua.VariantType.Null, "no value"),
        (MOMENT, ua.VariantType.DateTime, "neither number"),
        (b"20.5", ua.VariantType.ByteString, "neither number"),
        (ua.LocalizedText("20.5"), ua.VariantType.LocalizedText, "neither number"),
        (1e300, ua.VariantType.Double, "out of range"),
    ],
)
def test_what_is_no_number_is_rejected(tag: Input, value: object, kind: ua.VariantType, reason: str) -> None:
    rejected = outcome(tag, value, kind)
    assert isinstance(rejected, Rejection)
    assert reason in rejected.reason


@pytest.mark.parametrize("kind", [ua.VariantType.SByte, ua.VariantType.UInt64, ua.VariantType.Int32])
def test_whole_numbers_are_numbers(tag: Input, kind: ua.VariantType) -> None:
    reading = outcome(tag, 20, kind)
    assert isinstance(reading, Reading)
    assert reading.value == 20.0


def test_node_ids_are_resolved_against_the_servers_namespaces() -> None:
    spaces = ["http://opcfoundation.org/UA/", "urn:other", "urn:invented:plant"]
    assert node_id("nsu=urn:invented:plant;s=K.PT;1", spaces) == ua.NodeId("K.PT;1", 2)
    assert node_id("nsu=urn:other;i=7", spaces) == ua.NodeId(7, 1)
    assert node_id("ns=2;s=PT", spaces) == ua.NodeId("PT", 2)
    assert node_id("nsu=urn:gone;s=PT", spaces) is None


@pytest.mark.parametrize("address", ["", "PT", "nsu=urn:plant", "nsu=urn:plant;", "ns=x;s=PT", "site/PT"])
def test_what_is_no_node_id_is_refused(address: str) -> None:
    with pytest.raises(ValueError, match="node id"):
        split_address(address)


def test_a_silent_server_is_noticed_and_found_again(
    opcua_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(opcua_plant.source(tag)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "up")
            opcua_plant.child.signal(signal.SIGSTOP)
            await until(lambda: state(heard.source) is LinkState.DOWN, "silence is noticed", 6.0)
            assert "silent" in heard.source.status().detail
            opcua_plant.child.signal(signal.SIGCONT)
            await until(lambda: state(heard.source) is LinkState.UP, "up again", 30.0)
            opcua_plant.send("PT", 7.0, time.time())
            await until(lambda: 7.0 in heard.values("PT"), "and reading")

    asyncio.run(scenario())


def test_missing_nodes_are_named_while_the_others_go_on(
    opcua_plant: Any, tag: Input, make_input: Callable[..., Input], listening: Any, until: Any
) -> None:
    gone = make_input("PT-9", address="nsu=urn:invented:plant;s=PT-9")
    elsewhere = make_input("PT-8", address="nsu=urn:gone;s=PT-8")

    async def scenario() -> None:
        async with listening(opcua_plant.source(gone, tag, elsewhere)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "up")
            detail = heard.source.status().detail
            assert "PT-8 (unknown namespace)" in detail
            assert "PT-9 (BadNodeIdUnknown)" in detail
            opcua_plant.send("PT", 7.0, time.time())
            await until(lambda: 7.0 in heard.values("PT"), "the one that is there")

    asyncio.run(scenario())


def test_a_server_with_none_of_the_nodes_is_up_and_says_so(
    opcua_plant: Any, make_input: Callable[..., Input], listening: Any, until: Any
) -> None:
    gone = make_input("PT-9", address="nsu=urn:gone;s=PT-9")

    async def scenario() -> None:
        async with listening(opcua_plant.source(gone)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "up")
            assert "PT-9 (unknown namespace)" in heard.source.status().detail

    asyncio.run(scenario())


def test_a_value_that_stays_the_same_but_is_measured_anew_stays_current(
    opcua_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(opcua_plant.source(tag)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "up")
            for n in range(3):
                opcua_plant.send("PT", 7.0, time.time())
                await until(lambda n=n: heard.values("PT").count(7.0) > n, f"notification {n}")
            times = [r.source_time for r in heard.readings if r.value == 7.0]
            assert len(set(times)) == len(times)

    asyncio.run(scenario())


def test_values_without_times_arrive_as_uncertain(
    opcua_plant: Any, tag: Input, listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(opcua_plant.source(tag)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "up")
            before = time.time()
            opcua_plant.write("PT", 7.0, "Double", source=None, server=None)
            await until(lambda: 7.0 in heard.values("PT"), "a value")
            reading = heard.readings[-1]
            assert reading.source_time >= before
            # This library's server may stamp the value itself; then it is the server's time and good.
            expected = Quality.UNCERTAIN if reading.source_time == reading.received_time else Quality.GOOD
            assert reading.quality is expected

    asyncio.run(scenario())
