from agent.alarms.table import Standing
from agent.journal.fold import states
from agent.records import AlarmEvent, AlarmState, EventKind

KEY = ("K-1", "reversal")


def event(tick: int, kind: EventKind, state: AlarmState) -> AlarmEvent:
    # Numbers, not NaN, so that events compare equal.
    return AlarmEvent(
        unit="K-1", alarm="reversal", tick=tick, kind=kind, state=state, text="t", value=1.0, limit=2.0
    )


RAISED = event(10, EventKind.RAISED, AlarmState.UNACKNOWLEDGED)
ACKED = event(20, EventKind.ACKNOWLEDGED, AlarmState.ACKNOWLEDGED)
BLIND = event(30, EventKind.BLIND, AlarmState.ACKNOWLEDGED)
SIGHTED = event(40, EventKind.SIGHTED, AlarmState.ACKNOWLEDGED)
CLEARED = event(50, EventKind.CLEARED, AlarmState.NORMAL)
AGAIN = event(60, EventKind.RAISED, AlarmState.UNACKNOWLEDGED)


def test_nothing_happened_yet() -> None:
    assert states([]) == {}


def test_a_life_of_an_alarm() -> None:
    assert states([RAISED]) == {KEY: Standing(state=AlarmState.UNACKNOWLEDGED, since=10, raised=RAISED)}
    assert states([RAISED, ACKED])[KEY].acknowledged == ACKED
    blind = states([RAISED, ACKED, BLIND])[KEY]
    assert (blind.state, blind.since, blind.blind) == (AlarmState.ACKNOWLEDGED, 20, BLIND)
    assert states([RAISED, ACKED, BLIND, SIGHTED])[KEY].blind is None
    cleared = states([RAISED, ACKED, BLIND, SIGHTED, CLEARED])[KEY]
    assert (cleared.state, cleared.since, cleared.raised) == (AlarmState.NORMAL, 50, RAISED)
    again = states([RAISED, ACKED, CLEARED, AGAIN])[KEY]
    assert (again.raised, again.acknowledged) == (AGAIN, None)


def test_a_refused_request_changes_nothing() -> None:
    refused = event(70, EventKind.REFUSED, AlarmState.UNACKNOWLEDGED)
    assert states([RAISED, refused]) == states([RAISED])


def test_alarms_and_units_are_kept_apart() -> None:
    other = AlarmEvent(
        unit="K-2",
        alarm="reversal",
        tick=11,
        kind=EventKind.RAISED,
        state=AlarmState.UNACKNOWLEDGED,
        text="t",
    )
    found = states([RAISED, other, CLEARED])
    assert found[KEY].state is AlarmState.NORMAL
    assert found["K-2", "reversal"].state is AlarmState.UNACKNOWLEDGED
