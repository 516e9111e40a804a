"""What an alarm says: plain sentences that make sense when read aloud over the radio."""

import math
import re
from collections.abc import Sequence

from agent.alarms.catalogue import COVERAGE_WORDS, AlarmType, Rule
from agent.alarms.watch import Condition, Sight
from agent.records import AlarmState
from model.machine import Limit
from model.quantities import QUANTITIES
from model.units import format_with_unit

_NUMBERED = re.compile(r"([a-z]+)(\d+)")


def subject_words(subject: str) -> str:
    """A subject as it is said, e.g. "cylinder 2" for "cylinder2"."""
    return _NUMBERED.sub(r"\1 \2", subject)


def shown(quantity: str, value: float) -> str:
    """The value as every page shows it, with its unit."""
    row = QUANTITIES[quantity]
    return format_with_unit(value, row.display_unit, row.dimension, row.decimals)


def setting_words(alarm: AlarmType) -> str:
    """When the alarm is raised, for a page that lists the alarms."""
    delay = f"for {alarm.on_delay_s:g} s"
    match alarm.rule:
        case Rule.ABOVE_SHARE:
            return f"estimate plus band above {100 * alarm.setting:g} % of the limit entered, {delay}"
        case Rule.LITTLE_LEFT:
            return f"less than {alarm.setting:g} K left to the limit entered, {delay}"
        case Rule.BELOW_SHARE if alarm.setting == 1:
            return f"estimate less band below the minimum entered, {delay}"
        case Rule.BELOW_SHARE:
            return f"estimate less band below {100 * alarm.setting:g} % of the minimum entered, {delay}"


def raised(unit: str, alarm: AlarmType, found: Sight, sights: Sequence[Sight]) -> str:
    also = sorted(
        {subject_words(s.point.subject) for s in sights if s.condition is Condition.TRUE}
        - {subject_words(found.point.subject)}
    )
    others = f" Also past it: {', '.join(also)}." if also else ""
    return f"{unit}. {alarm.words}. {_numbers(alarm, found)}{others}"


def returned(unit: str, alarm: AlarmType, found: Sight | None, state: AlarmState, *, stopped: bool) -> str:
    if stopped:
        why = "The unit has stopped: there is nothing to judge."
    elif found is None:
        why = "No limit is entered any more."
    else:
        why = f"Nearest to it now: {_lower_first(_numbers(alarm, found))}"
    unseen = " Not acknowledged yet." if state is AlarmState.RETURNED else ""
    return f"{unit}. {alarm.words}: no longer. {why}{unseen}"


def blind(unit: str, alarm: AlarmType, found: Sight | None, state: AlarmState) -> str:
    if found is None:
        why = "the running state is not known"
    else:
        why = f"{subject_words(found.point.subject)}, {found.quality.words}"
    standing = "It was about to be raised." if state is AlarmState.NORMAL else f"It stays {state}."
    return (
        f"{unit}. {alarm.words}: not evaluated ({why}). {standing} "
        "Not evaluated is not normal: use the control system."
    )


def sighted(unit: str, alarm: AlarmType) -> str:
    return f"{unit}. {alarm.words}: evaluated again."


def _lower_first(text: str) -> str:
    return text[:1].lower() + text[1:]


def _numbers(alarm: AlarmType, found: Sight) -> str:
    """Subject, value with its band, alarm point and limit with its source."""
    point = found.point
    limit, quantity = point.limit, point.quantity
    subject = subject_words(point.subject).capitalize()
    if alarm.rule is Rule.LITTLE_LEFT:
        left = shown(f"{quantity}_margin", found.margin)
        measured = f"{subject}: {shown(quantity, found.value)} measured"
        return f"{measured}, {left} left to {_limit('limit', quantity, limit)}."
    kind = {"reversal_degrees": "duration ", "reversal_percent": "magnitude "}.get(quantity, "")
    estimate = f"{subject}: {kind}{shown(quantity, found.value)} by estimate, {_band(quantity, found.band)}."
    if alarm.rule is Rule.ABOVE_SHARE:
        edge = f"{shown(quantity, alarm.setting * limit.value)}, which is {100 * alarm.setting:g} %"
        counts = f"The upper end of that counts: the alarm point is {edge} of"
        return f"{estimate} {counts} {_limit('limit', quantity, limit)}."
    share = "" if alarm.setting == 1 else f"{100 * alarm.setting:g} % of "
    counts = f"The lower end of that counts: the alarm point is {share}"
    return f"{estimate} {counts}{_limit('minimum', quantity, limit)}."


def _band(quantity: str, band: float) -> str:
    if math.isnan(band):
        return "its band not known"
    return f"plus or minus {shown(quantity, band)} ({COVERAGE_WORDS})"


def _limit(word: str, quantity: str, limit: Limit) -> str:
    return f"the {word} of {shown(quantity, limit.value)} ({limit.source}, entered by {limit.entered_by})"
