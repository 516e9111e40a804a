"""Why something received could not become a reading, and the checks all sources share."""

import math
from dataclasses import dataclass
from typing import Final

from agent.siteplan.plan import SWITCH, WORD, Input

FUTURE_LIMIT_S: Final = 10.0
PAST_LIMIT_S: Final = 7 * 86400.0

# The store keeps float32; what is larger is no plant value.
_LARGEST: Final = 3.0e38
_LONGEST_WORD: Final = 64


# What an invented plant says must never stand beside what a real one says.
SIMULATED: Final = "it is marked as simulated, and this site is not"


@dataclass(frozen=True, slots=True, kw_only=True)
class Rejection:
    reason: str  # never quotes what was received


class Rejected(Exception):  # noqa: N818 - it says what happened
    """Raised and caught inside a decoder; the message is the reason."""


def plain_number(raw: object) -> float:
    """A finite number from an int or a float and from nothing else; a boolean is not a number."""
    if isinstance(raw, bool) or not isinstance(raw, int | float):
        raise Rejected("the value is not a number")
    try:
        number = float(raw)
    except OverflowError:
        raise Rejected("the value is out of range") from None
    if not math.isfinite(number):
        raise Rejected("the value is not finite")
    if abs(number) > _LARGEST:
        raise Rejected("the value is out of range")
    return number


def switch_number(raw: object) -> float:
    if isinstance(raw, bool | int | float) and raw in (0, 1):
        return float(raw)
    raise Rejected("the value is not a switch (true, false, 0 or 1)")


def word_text(raw: object) -> str:
    """A word from a text, or from a number as people write it: 50.0 is "50"."""
    if isinstance(raw, str):
        word = raw.strip()
    else:
        number = plain_number(raw)
        word = f"{number:.0f}" if number.is_integer() and abs(number) < 1e15 else repr(number)
    if not word or len(word) > _LONGEST_WORD or not word.isprintable():
        raise Rejected("the value is not a word")
    return word


def value_and_word(entry: Input, raw: object) -> tuple[float | None, str | None]:
    """What an input's reading carries: a word for word inputs, a number for all others."""
    if entry.unit == WORD:
        return None, word_text(raw)
    if entry.unit == SWITCH:
        return switch_number(raw), None
    return plain_number(raw), None


def check_not_future(source_time: float, received_time: float) -> None:
    if source_time > received_time + FUTURE_LIMIT_S:
        raise Rejected(f"future: its time is more than {FUTURE_LIMIT_S:.0f} s ahead")


def check_time(entry: Input, source_time: float, received_time: float) -> None:
    """Neither ahead of the agent's clock nor older than what the store could still take."""
    check_not_future(source_time, received_time)
    if source_time < received_time - PAST_LIMIT_S and not entry.on_change:
        raise Rejected(f"its time is more than {PAST_LIMIT_S / 86400:.0f} days ago")
