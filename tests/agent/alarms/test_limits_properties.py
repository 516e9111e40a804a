"""Whatever rows and requests come: what must always hold of the events."""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agent.alarms.catalogue import CATALOGUE, AlarmType
from agent.alarms.limits import LimitAlarms
from agent.alarms.table import ACTIVE
from agent.journal.fold import states
from agent.records import AlarmEvent, AlarmState, EventKind, Quality, Request, RunState

GAS, TEMPERATURE = "gas_load_compression", "discharge_temperature"
C1, S1 = f"cylinder1.{GAS}", f"stage1.{TEMPERATURE}"

# Short delays, so that much happens in few ticks.
QUICK: Mapping[str, AlarmType] = {
    key: replace(a, on_delay_s=3.0, off_delay_s=2.0) for key, a in CATALOGUE.items()
}


@dataclass(frozen=True)
class Moment:
    step: int
    load: float
    temperature: float
    quality: Quality
    state: RunState
    asks: tuple[str, ...]


# Mostly plain seconds of one kind after another: independent draws would hardly ever outlast a delay.
MOMENT = st.builds(
    Moment,
    step=st.sampled_from([1, 1, 1, 1, 1, 2, 3, 4, 9]),
    load=st.sampled_from([140e3, 140e3, 158e3, 168e3, 168e3, 168e3]),
    temperature=st.sampled_from([374.0, 374.0, 391.0, 396.0, 396.0]),
    quality=st.sampled_from([Quality.GOOD] * 8 + [Quality.INPUT_MISSING, Quality.UNCERTAIN]),
    state=st.sampled_from([RunState.RUNNING] * 8 + [RunState.STOPPED, RunState.NOT_KNOWN]),
    asks=st.lists(st.sampled_from([GAS, TEMPERATURE, "nothing"]), max_size=3).map(tuple),
)
STORY = st.lists(st.tuples(MOMENT, st.integers(1, 6)), min_size=1, max_size=25)


def told(machine: Any, story: list[tuple[Moment, int]]) -> list[tuple[Any, Any, list[Request]]]:
    """Rows, frames and requests of a story; each moment lasts some ticks."""
    rows, tick = [], 100
    for number, (moment, lasts) in enumerate(story):
        for i in range(lasts):
            tick += moment.step
            row, frame = machine.tick(
                tick, {C1: moment.load, f"{C1}.u": 1e3, S1: moment.temperature},
                quality={C1: moment.quality, S1: moment.quality}, state=moment.state,
            )  # fmt: skip
            requests = [
                Request(
                    id=f"{number}-{k}", at=0.0, unit="K-1", alarm=alarm, kind=EventKind.ACKNOWLEDGED,
                    actor="a", reason="b",
                )
                for k, alarm in enumerate(moment.asks)
                if i == 0
            ]  # fmt: skip
            rows.append((row, frame, requests))
    return rows


def go(engine: LimitAlarms, rows: list[tuple[Any, Any, list[Request]]]) -> list[AlarmEvent]:
    return [event for row, frame, requests in rows for event in engine.update(row, frame, requests)]


def plain(events: list[AlarmEvent]) -> list[str]:
    return [repr(e) for e in events]  # nan equals nan here


CHECK = settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


@CHECK
@given(story=STORY)
def test_a_raise_is_followed_by_a_return_before_the_next(
    machine: Any, story: list[tuple[Moment, int]]
) -> None:
    active: dict[str, bool] = {}
    for event in go(LimitAlarms(machine.plan, QUICK), told(machine, story)):
        if event.kind in (EventKind.RAISED, EventKind.CLEARED):
            assert active.get(event.alarm, False) == (event.kind is EventKind.CLEARED)
            active[event.alarm] = event.kind is EventKind.RAISED
        if event.kind is not EventKind.REFUSED:
            assert (event.state in ACTIVE) == active.get(event.alarm, False)


@CHECK
@given(story=STORY)
def test_the_events_fold_to_the_states_of_the_engine(machine: Any, story: list[tuple[Moment, int]]) -> None:
    engine = LimitAlarms(machine.plan, QUICK)
    events: list[AlarmEvent] = []
    for row, frame, requests in told(machine, story):
        events += engine.update(row, frame, requests)
        folded = states(events)
        for alarm, state in engine.states.items():
            standing = folded.get(("K-1", alarm))
            assert state is (AlarmState.NORMAL if standing is None else standing.state)


@CHECK
@given(story=STORY)
def test_no_event_has_the_journal_key_of_another(machine: Any, story: list[tuple[Moment, int]]) -> None:
    events = go(LimitAlarms(machine.plan, QUICK), told(machine, story))
    keys = [(e.unit, e.alarm, e.tick, e.kind) for e in events]
    assert len(keys) == len(set(keys))


@CHECK
@given(story=STORY)
def test_blind_and_evaluated_again_take_turns(machine: Any, story: list[tuple[Moment, int]]) -> None:
    blind: dict[str, bool] = {}
    for event in go(LimitAlarms(machine.plan, QUICK), told(machine, story)):
        if event.kind in (EventKind.BLIND, EventKind.SIGHTED):
            assert blind.get(event.alarm, False) == (event.kind is EventKind.SIGHTED)
            blind[event.alarm] = event.kind is EventKind.BLIND
        elif event.kind in (EventKind.RAISED, EventKind.CLEARED):
            assert not blind.get(event.alarm, False)  # nothing is decided blind


@CHECK
@given(story=STORY)
def test_each_request_is_answered_at_most_once(machine: Any, story: list[tuple[Moment, int]]) -> None:
    engine, pending, answers = LimitAlarms(machine.plan, QUICK), [], []
    rows = told(machine, story)
    for row, frame, requests in rows:
        pending += requests
        events = engine.update(row, frame, pending)
        answers += [e.request for e in events if e.request]
        pending = [r for r in pending if r.id not in answers]
    assert len(answers) == len(set(answers))
    for tick in range(rows[-1][0].tick + 1, rows[-1][0].tick + 80):  # then all are, a tick at a time
        events = engine.update(*machine.tick(tick), pending)
        pending = [r for r in pending if r.id not in {e.request for e in events}]
    assert pending == []


@CHECK
@given(story=STORY, cut=st.integers(0, 150), lost=st.integers(0, 4))
def test_a_restart_anywhere_gives_the_same_events(
    machine: Any, story: list[tuple[Moment, int]], cut: int, lost: int
) -> None:
    """The journal may be some ticks behind the store; those rows are judged at start, without requests."""
    rows = told(machine, story)
    cut = min(cut, len(rows))
    judged = max(cut - lost, 0)
    rows = [(r, f, [] if judged <= i < cut else q) for i, (r, f, q) in enumerate(rows)]
    whole = go(LimitAlarms(machine.plan, QUICK), rows)

    journal = go(LimitAlarms(machine.plan, QUICK), rows[:judged])
    engine = LimitAlarms(machine.plan, QUICK)
    engine.reset(states(journal))
    last = rows[judged - 1][0].tick if judged else None
    oldest = -1 if last is None else last - engine.warm_window_s
    stored = [(f, r) for r, f, _ in rows[:cut] if r.tick > oldest]
    again = engine.warm(stored, last)
    assert plain(journal + again + go(engine, rows[cut:])) == plain(whole)


def test_the_stories_above_do_reach_every_kind_of_event(machine: Any) -> None:
    """Else the properties would hold of nothing."""
    normal = Moment(1, 140e3, 374.0, Quality.GOOD, RunState.RUNNING, ())
    high = replace(normal, load=168e3)
    story = [
        (high, 5), (replace(high, quality=Quality.INPUT_MISSING, asks=("nothing",)), 2), (normal, 5),
        (replace(normal, asks=(GAS,)), 1),
    ]  # fmt: skip
    events = go(LimitAlarms(machine.plan, QUICK), told(machine, story))
    assert {e.kind for e in events} == set(EventKind)
