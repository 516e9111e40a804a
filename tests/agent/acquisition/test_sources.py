"""What every source must do, on a real broker and a real server in processes of their own."""

import asyncio
import logging
import threading
import time
from collections.abc import Callable
from typing import Any

import pytest

from agent.records import LinkState, Quality
from agent.siteplan.plan import Input


def state(source: Any) -> LinkState:
    return source.status().state


@pytest.fixture
def inputs(plant: Any, make_input: Callable[..., Input]) -> tuple[Input, ...]:
    return (
        make_input("PT", address=plant.address("PT")),
        make_input("UY", unit="word", address=plant.address("UY"), on_change=True),
        make_input("XS", unit="switch", address=plant.address("XS"), on_change=True),
    )


def test_values_arrive_with_their_source_time_and_quality(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        now = time.time()
        async with listening(plant.source(*inputs)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "the source is up")
            # One at a time: a server may keep only the last of several within a sampling interval.
            for n, quality in enumerate((Quality.GOOD, Quality.UNCERTAIN, Quality.BAD)):
                plant.send("PT", 20.5 + n, now + n / 4, quality)
                await until(
                    lambda n=n: any(r.source_time >= now + n / 4 - 1e-5 for r in heard.readings), f"{n}"
                )
            readings = [r for r in heard.readings if r.source_time >= now - 0.001]
            assert [r.quality for r in readings] == [Quality.GOOD, Quality.UNCERTAIN, Quality.BAD]
            assert [r.value for r in readings] == [20.5, 21.5, None]
            assert [r.source_time for r in readings] == pytest.approx([now, now + 0.25, now + 0.5], abs=1e-5)
            assert {r.address for r in readings} == {plant.address("PT")}
            assert all(r.source == "plant" and r.word is None for r in readings)
            status = heard.source.status()
            assert status.rejected == status.dropped == 0
            assert -1.0 < status.clock_offset_s < 5.0

    asyncio.run(scenario())


def test_words_and_switches_arrive_as_such(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(plant.source(*inputs)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "the source is up")
            plant.send("UY", "50", time.time())
            plant.send("XS", True, time.time())
            await until(lambda: 1.0 in heard.values("XS"), "the switch")
            await until(lambda: "50" in [r.word for r in heard.readings], "the word")
            plant.send("UY", 100, time.time())
            await until(lambda: "100" in [r.word for r in heard.readings], "the number as a word")

    asyncio.run(scenario())


def test_garbage_never_becomes_a_number_and_is_counted(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(plant.source(*inputs)) as heard:
            source = heard.source
            await until(lambda: state(source) is LinkState.UP, "the source is up")
            now = time.time()
            bad = [("PT", float("nan")), ("PT", "20.5"), ("PT", True), ("XS", 2), ("XS", "true"), ("UY", "")]
            for n, (tag, value) in enumerate(bad, start=1):
                plant.send(tag, value, now + n / 100)
                await until(lambda n=n: source.status().rejected >= n, f"rejection {n}")
            plant.send("PT", 21.0, now + 30)
            await until(lambda: source.status().rejected > len(bad), "the one of the future is rejected")
            assert "future" in source.status().last_rejection
            assert plant.address("PT") in source.status().last_rejection
            plant.send("PT", 22.0, time.time())
            await until(lambda: 22.0 in heard.values("PT"), "a good one after all that")
            assert [r for r in heard.readings if r.quality.usable] == [heard.readings[-1]]

    asyncio.run(scenario())


def test_a_killed_plant_is_noticed_and_found_again(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        async with listening(plant.source(*inputs)) as heard:
            source = heard.source
            for restart in range(2):
                await until(lambda: state(source) is LinkState.UP, "the source is up")
                plant.send("PT", 20.0 + restart, time.time())
                await until(lambda r=restart: 20.0 + r in heard.values("PT"), "a value")
                await asyncio.to_thread(plant.kill)
                await until(lambda: state(source) is LinkState.DOWN, "the loss is noticed", 6.0)
                await asyncio.to_thread(plant.start)
            await until(lambda: source.status().connections == 3, "the third connection")
            plant.send("PT", 23.0, time.time())
            await until(lambda: 23.0 in heard.values("PT"), "a value again")

    asyncio.run(scenario())


def test_a_plant_that_is_not_there_yet_is_waited_for_and_each_change_of_state_is_one_line(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any, caplog: pytest.LogCaptureFixture
) -> None:
    caplog.set_level(logging.INFO)

    async def scenario() -> None:
        await asyncio.to_thread(plant.kill)
        async with listening(plant.source(*inputs)) as heard:
            source = heard.source
            assert state(source) is LinkState.CONNECTING
            await until(lambda: state(source) is LinkState.DOWN, "it says so")
            assert "no connection to" in source.status().detail
            await asyncio.sleep(2.0)  # several attempts, one line
            await asyncio.to_thread(plant.start)
            await until(lambda: state(source) is LinkState.UP, "it comes up by itself")

    asyncio.run(scenario())
    lines = [r.getMessage() for r in caplog.records if not r.name.startswith("asyncio")]
    assert len(lines) == 2
    assert "source plant is down: no connection to" in lines[0]
    assert "source plant is up: connected to" in lines[1]


def test_a_closed_source_ends_its_readings_and_leaves_nothing_behind(
    plant: Any, inputs: tuple[Input, ...], listening: Any, until: Any
) -> None:
    async def scenario() -> None:
        before = asyncio.all_tasks()
        async with listening(plant.source(*inputs)) as heard:
            await until(lambda: state(heard.source) is LinkState.UP, "the source is up")
        assert heard.ended
        await until(lambda: asyncio.all_tasks() == before, "no task is left", 5.0)

    threads = threading.active_count()
    asyncio.run(scenario())
    assert threading.active_count() <= threads + 1  # the loop's own worker may idle


def test_an_error_beside_the_source_stays_what_it_is(plant: Any, inputs: tuple[Input, ...]) -> None:
    async def scenario() -> None:
        async with plant.source(*inputs):
            raise LookupError("elsewhere")

    with pytest.raises(LookupError, match="elsewhere"):
        asyncio.run(scenario())
