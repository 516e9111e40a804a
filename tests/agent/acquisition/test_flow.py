import asyncio
import math

import pytest

from agent.acquisition.flow import BATCH_SIZE, Backoff, ClockOffset, ReadingQueue
from agent.acquisition.receipts import HeldReceipts
from agent.clock import HandClock, SystemClock
from agent.records import Quality, Reading, Receipt


def reading(number: int, source_time: float = 0.0) -> Reading:
    return Reading(
        source="plant",
        address="site/PT",
        source_time=source_time,
        received_time=0.0,
        value=float(number),
        word=None,
        quality=Quality.GOOD,
        receipt=Receipt(source="plant", connection=1, message=number),
    )


def test_a_full_queue_drops_the_oldest_and_counts() -> None:
    async def scenario() -> None:
        queue = ReadingQueue(size=3)
        for number in range(5):
            queue.put(reading(number))
        assert [r.value for r in await queue.take()] == [2.0, 3.0, 4.0]
        assert queue.dropped == 2

    asyncio.run(scenario())


def test_a_closed_queue_gives_what_is_left_and_then_nothing() -> None:
    async def scenario() -> None:
        queue = ReadingQueue()
        for number in range(BATCH_SIZE + 1):
            queue.put(reading(number))
        queue.close()
        assert [len(await queue.take()) for _ in range(3)] == [BATCH_SIZE, 1, 0]

    asyncio.run(scenario())


def test_take_waits_for_a_reading() -> None:
    async def scenario() -> None:
        queue = ReadingQueue()
        asyncio.get_running_loop().call_later(0.02, queue.put, reading(7))
        assert [r.value for r in await queue.take()] == [7.0]

    asyncio.run(scenario())


def test_waits_double_up_to_the_cap_with_jitter() -> None:
    backoff = Backoff(first_s=0.5, cap_s=10.0)
    waits = [backoff.wait_s(connected_s=0.0) for _ in range(40)]
    full = [min(10.0, 0.5 * 2.0**n) for n in range(40)]  # hand
    assert all(f / 2 <= w <= f for w, f in zip(waits, full, strict=True))
    assert len(set(waits)) > 30


def test_waits_start_over_only_after_a_connection_that_held() -> None:
    backoff = Backoff(first_s=0.5, cap_s=10.0, held_s=10.0)
    for _ in range(8):
        backoff.wait_s(connected_s=1.0)  # two agents with one client id end each other's connection
    assert backoff.wait_s(connected_s=1.0) >= 5.0
    assert backoff.wait_s(connected_s=60.0) <= 0.5


def test_the_clock_offset_is_not_fooled_by_messages_that_waited() -> None:
    offset = ClockOffset()
    assert math.isnan(offset.value_s)
    for n in range(100):
        offset.update(1000.0 + n / 10, 900.0 + n)  # a queue being drained
    for n in range(10):
        offset.update(1010.0 + n, 1009.9 + n)
    assert offset.value_s == pytest.approx(0.1)


def test_the_clock_offset_follows_a_clock_that_is_set() -> None:
    offset = ClockOffset(window_s=30.0)
    for n in range(30):
        offset.update(1000.0 + n, 1000.0 + n)
    for n in range(90):
        offset.update(1030.0 + n, 1023.0 + n)
    assert offset.value_s == pytest.approx(7.0)


def test_receipts_are_held_until_the_tick_that_holds_their_reading() -> None:
    held = HeldReceipts()
    held.hold([reading(1, 100.2), reading(2, 101.0), reading(3, 99.9), reading(4, 101.001)])
    assert [r.message for r in held.release(99)] == []
    assert [r.message for r in held.release(101)] == [3, 1, 2]
    assert len(held) == 1
    assert [r.message for r in held.release(102)] == [4]


def test_a_hand_clock_moves_only_when_told() -> None:
    clock = HandClock(1000.0)
    clock.advance(2.5)
    clock.step(-3600.0)
    assert (clock.now(), clock.monotonic()) == (1000.0 + 2.5 - 3600.0, 2.5)
    with pytest.raises(ValueError, match="negative"):
        clock.advance(-1.0)


def test_the_system_clock_runs_forward() -> None:
    clock = SystemClock()
    first = clock.monotonic()
    assert clock.monotonic() >= first
    assert clock.now() > 1.7e9  # hand: November 2023
