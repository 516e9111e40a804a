"""Alarms and journal in words."""

from collections.abc import Sequence
from typing import Any

from agent.alarms.catalogue import CATALOGUE
from agent.alarms.table import Standing
from agent.journal.fold import states
from agent.records import AlarmEvent, AlarmState, EventKind, Priority
from agent.siteplan.plan import SitePlan
from dashboard.wording import NOT_EVALUATED, clock

_TO_ACKNOWLEDGE = frozenset({AlarmState.UNACKNOWLEDGED, AlarmState.RETURNED})
_STATE_WORDS = {
    AlarmState.UNACKNOWLEDGED: "active, not acknowledged",
    AlarmState.ACKNOWLEDGED: "active, acknowledged",
    AlarmState.RETURNED: "over, not acknowledged",
    AlarmState.NORMAL: "normal",
}


def open_alarms(events: Sequence[AlarmEvent], site: SitePlan, now: float) -> list[dict[str, Any]]:
    """Alarms that are not normal, and those that cannot be judged; the most urgent first."""
    ids = {p.id for p in site.units}
    found = [
        _alarm(unit, key, standing, site, now)
        for (unit, key), standing in states(events).items()
        if unit in ids and standing.state is not AlarmState.NORMAL
    ]
    return sorted(
        found,
        key=lambda a: (-a["priority"], not a["unacknowledged"], -a["since_tick"], a["unit"], a["alarm"]),
    )


def title_of(key: str) -> str:
    kind = CATALOGUE.get(key)
    return key if kind is None else kind.words


def _alarm(unit: str, key: str, standing: Standing, site: SitePlan, now: float) -> dict[str, Any]:
    kind = CATALOGUE.get(key)
    state = _STATE_WORDS[standing.state]
    if standing.blind is not None:
        state += f"; {NOT_EVALUATED} since {clock(standing.blind.tick, site.zone, now=now)}"
    since = standing.since or 0
    return {
        "unit": unit,
        "alarm": key,
        "title": title_of(key),
        "priority": int(Priority.NOTICE if kind is None else kind.priority),
        "state": state,
        "unacknowledged": standing.state in _TO_ACKNOWLEDGE,
        "text": standing.raised.text if standing.raised else "",
        "action": "" if kind is None else kind.action,
        "since": f"since {clock(since, site.zone, now=now)}",
        "since_tick": since,
    }


def journal_rows(events: Sequence[AlarmEvent], site: SitePlan, now: float) -> list[dict[str, Any]]:
    """The newest first."""
    return [
        {
            "key": f"{e.unit}/{e.alarm}/{e.tick}/{e.kind.value}/{e.request}",
            "at": clock(e.tick, site.zone, now=now),
            "unit": e.unit,
            "title": title_of(e.alarm),
            "what": e.kind.value,
            "text": e.text,
            "who": e.actor,
            "reason": e.reason,
            "request": e.request,
            "refused": e.kind is EventKind.REFUSED,
        }
        for e in reversed(events)
    ]
