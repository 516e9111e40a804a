"""Events to the present: where each alarm stands is what its events add up to."""

from collections.abc import Iterable
from dataclasses import replace

from agent.alarms.table import Standing
from agent.records import AlarmEvent, EventKind

NOTHING = Standing()


def states(events: Iterable[AlarmEvent]) -> dict[tuple[str, str], Standing]:
    """Standing of each (unit, alarm) that ever had an event, from events in journal order.

    Every field depends on the latest event of a kind alone, so `JournalReader.latest` gives the same as the
    whole journal.
    """
    found: dict[tuple[str, str], Standing] = {}
    for event in events:
        key = (event.unit, event.alarm)
        found[key] = after(found.get(key, NOTHING), event)
    return found


def after(standing: Standing, event: AlarmEvent) -> Standing:
    """Standing after one more event."""
    match event.kind:
        case EventKind.RAISED:
            return replace(standing, state=event.state, since=event.tick, raised=event, acknowledged=None)
        case EventKind.CLEARED:
            return replace(standing, state=event.state, since=event.tick)
        case EventKind.ACKNOWLEDGED:
            return replace(standing, state=event.state, since=event.tick, acknowledged=event)
        case EventKind.BLIND:
            return replace(standing, blind=event)
        case EventKind.SIGHTED:
            return replace(standing, blind=None)
        case EventKind.REFUSED:
            return standing
