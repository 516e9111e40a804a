"""Nothing confirmed is lost: source, frames and late data together, with an agent that dies at any moment.

The broker here is a list: what is not acknowledged when the agent dies comes again. The store is a dict. The
agent loses all else.
"""

import math
import random
from collections.abc import Callable
from dataclasses import replace

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agent.acquisition.receipts import HeldReceipts
from agent.manipulation.frames import FrameBuilder
from agent.manipulation.late import late_change
from agent.records import Frame, Reading, Receipt
from agent.siteplan.plan import UnitPlan

START, SECONDS = 1000, 90
UP = frozenset({"bus", "dcs"})


class Store:
    def __init__(self) -> None:
        self.frames: dict[int, Frame] = {}

    def frame(self, unit: str, tick: int) -> Frame | None:
        found = self.frames.get(tick)
        return found if found is not None and found.unit == unit else None


class Agent:
    """What the pipeline does with the doors, without the rest of it."""

    def __init__(self, plan: UnitPlan, store: Store, now: float) -> None:
        self.plan = plan
        self.store = store
        self.builder = FrameBuilder(plan)
        self.held = HeldReceipts()
        self.last_tick = math.floor(now)  # ticks up to here were slept through: they belong to the late path

    def take(self, batch: list[Reading]) -> list[Receipt]:
        late = self.builder.accept(batch, self.last_tick)
        self.held.hold(r for r in batch if r not in late)
        change = late_change(self.plan, late, self.store, self.last_tick)
        assert change.refused == 0
        self.store.frames.update((f.tick, f) for f in change.frames)
        return [r.receipt for r in late if r.receipt is not None]

    def tick(self) -> tuple[Receipt, ...]:
        self.last_tick += 1
        self.store.frames[self.last_tick] = self.builder.frame(self.last_tick, UP)
        return self.held.release(self.last_tick)


@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    seed=st.integers(0, 10_000),
    deaths=st.lists(st.tuples(st.integers(2, SECONDS), st.integers(0, 20)), max_size=6),
)
def test_every_confirmed_value_is_stored_or_superseded(
    plan: UnitPlan, read: Callable[..., Reading], seed: int, deaths: list[tuple[int, int]]
) -> None:
    chance = random.Random(seed)
    messages = []
    for number in range(SECONDS * 5):
        source_time = round(START + number / 5 + chance.uniform(0, 0.19), 2)
        reading = read(number % 5, source_time, 10.0)
        receipt = Receipt(source="bus", connection=0, message=number)
        arrival = source_time + chance.choice([0.01, 0.05, 0.4, 1.7, 6.0])
        messages.append((arrival, replace(reading, receipt=receipt)))
    store, acknowledged = Store(), set[int]()
    delivered: set[int] = set()
    agent: Agent | None = Agent(plan, store, START)
    asleep_until = 0.0
    down = dict(deaths)
    for second in range(1, SECONDS + 30):
        now = START + second
        if second in down:
            agent, asleep_until = None, now + down[second]
        if agent is None:
            if now < asleep_until:
                continue
            agent, delivered = Agent(plan, store, now), set(acknowledged)
        batch = [r for at, r in messages if at <= now and r.receipt and r.receipt.message not in delivered]
        chance.shuffle(batch)
        delivered |= {r.receipt.message for r in batch if r.receipt}
        for cut in range(0, len(batch), 7):
            acknowledged |= {r.message for r in agent.take(batch[cut : cut + 7])}
        while agent.last_tick < now:
            acknowledged |= {r.message for r in agent.tick()}
    assert acknowledged == set(range(len(messages)))
    for _, reading in messages:
        place = next(i for i, entry in enumerate(plan.inputs) if entry.address == reading.address)
        frame = store.frames[math.ceil(reading.source_time)]
        stored_time = frame.tick - float(frame.ages[place])
        assert stored_time >= reading.source_time - 0.002
        assert stored_time == pytest.approx(
            max(
                r.source_time
                for _, r in messages
                if r.address == reading.address and r.source_time <= frame.tick
            ),
            abs=0.002,
        )
