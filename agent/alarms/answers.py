"""What a person asks of an alarm: taken, or refused with the reason in words."""

from typing import Final

from agent.alarms.table import Trigger, step
from agent.records import AlarmState, EventKind, Request

MAX_WORDS: Final = 200  # characters of a name or of a reason


def tidy(text: str) -> str:
    """Stripped, on one line, no longer than allowed."""
    return " ".join(text.split())[:MAX_WORDS]


def objection(request: Request, state: AlarmState | None) -> str:
    """Why the request cannot be met; "" where it can. ``state`` is None for an alarm that does not exist."""
    if request.kind is not EventKind.ACKNOWLEDGED:
        return f"only an acknowledgement can be asked for, not: {request.kind}"
    if state is None:
        return f"there is no alarm {tidy(request.alarm)}"
    for what, text in (("a name", request.actor), ("a reason", request.reason)):
        words = " ".join(text.split())
        if not words:
            return f"an acknowledgement needs {what}"
        if len(words) > MAX_WORDS:
            return f"an acknowledgement needs {what} of at most {MAX_WORDS} characters"
    if step(state, Trigger.ACKNOWLEDGE) is None:
        already = state is AlarmState.ACKNOWLEDGED
        return "it is acknowledged already" if already else "it is normal: there is nothing to acknowledge"
    return ""
