"""The alarm states and what moves between them, as one table.

The states are the first four of IEC 62682: normal; active and unacknowledged; active and acknowledged;
returned to normal and unacknowledged. Alarms here do not latch and have no re-alarm timer, so an active alarm
whose condition stays true stays where it is.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from types import MappingProxyType
from typing import Final

from agent.records import AlarmEvent, AlarmState, EventKind


class Trigger(StrEnum):
    CONDITION_TRUE = "condition true"  # after its on-delay
    CONDITION_FALSE = "condition false"  # past its deadband, after its off-delay
    ACKNOWLEDGE = "acknowledge"


_NORMAL, _UNACK = AlarmState.NORMAL, AlarmState.UNACKNOWLEDGED
_ACKED, _RETURNED = AlarmState.ACKNOWLEDGED, AlarmState.RETURNED

# Every pair that moves. A pair that is not here is ignored.
TRANSITIONS: Final[Mapping[tuple[AlarmState, Trigger], AlarmState]] = MappingProxyType(
    {
        (_NORMAL, Trigger.CONDITION_TRUE): _UNACK,
        (_UNACK, Trigger.CONDITION_FALSE): _RETURNED,
        (_UNACK, Trigger.ACKNOWLEDGE): _ACKED,
        (_ACKED, Trigger.CONDITION_FALSE): _NORMAL,
        (_RETURNED, Trigger.CONDITION_TRUE): _UNACK,
        (_RETURNED, Trigger.ACKNOWLEDGE): _NORMAL,
    }
)

EVENT_OF: Final[Mapping[Trigger, EventKind]] = MappingProxyType(
    {
        Trigger.CONDITION_TRUE: EventKind.RAISED,
        Trigger.CONDITION_FALSE: EventKind.CLEARED,
        Trigger.ACKNOWLEDGE: EventKind.ACKNOWLEDGED,
    }
)

ACTIVE: Final = frozenset({_UNACK, _ACKED})  # the condition is held to be true


def step(state: AlarmState, trigger: Trigger) -> AlarmState | None:
    """State after the trigger; None where the trigger means nothing in this state."""
    return TRANSITIONS.get((state, trigger))


@dataclass(frozen=True, slots=True, kw_only=True)
class Standing:
    """Where one alarm of one unit stands, as its events tell.

    The state and why are kept apart: an alarm that cannot be judged keeps its state and is blind.
    """

    state: AlarmState = AlarmState.NORMAL
    since: int | None = None  # tick of the last change of state
    raised: AlarmEvent | None = None  # the latest, whatever became of it
    acknowledged: AlarmEvent | None = None  # of the latest raise
    blind: AlarmEvent | None = None  # set while it cannot be evaluated
