"""What one alarm looks at on one unit, and what a stored row says about it."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from enum import Enum, auto

from agent.alarms.catalogue import CATALOGUE, COVERAGE_FACTOR, AlarmType, Rule, Watched
from agent.records import DerivedRow, Frame, Priority, Quality, RunState
from agent.siteplan.plan import UnitPlan
from model.machine import Limit
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, Scope, series_name


class Condition(Enum):
    TRUE = auto()
    HOLD = auto()  # between the alarm point and the deadband: an active alarm stays, another does not start
    FALSE = auto()
    NOT_JUDGED = auto()


@dataclass(frozen=True, slots=True, kw_only=True)
class Point:
    """One quantity of one subject with the limit entered for it, and where a row holds it."""

    subject: str
    quantity: str
    limit: Limit
    deadband: float  # SI
    rest: float
    value_at: int  # in the frame for LITTLE_LEFT, else in the row
    support_at: int  # in the row: the margin for LITTLE_LEFT, else the standard uncertainty


@dataclass(frozen=True, slots=True, kw_only=True)
class Unarmed:
    """An alarm that cannot arise for a subject, and why."""

    alarm: str
    subject: str
    quantity: str
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Sight:
    """What a row says about one point; numbers are those stored."""

    point: Point
    condition: Condition
    value: float = math.nan
    band: float = math.nan  # of an estimate; nan where it is not known or there is none
    left: float = math.nan  # share or kelvin up to the alarm point; below nought is past it
    margin: float = math.nan  # of a measured value: left to the limit
    quality: Quality = Quality.GOOD


def configured(plan: UnitPlan, catalogue: Mapping[str, AlarmType] = CATALOGUE) -> dict[str, AlarmType]:
    """The catalogue with the site's own settings of this unit."""
    found = dict(catalogue)
    for site in plan.alarm_settings:
        if site.alarm not in found:
            raise ValueError(f"{plan.id}: no alarm {site.alarm}; known: {', '.join(catalogue)}")
        alarm = found[site.alarm]
        if site.setting is not None:
            alarm = replace(alarm, setting=site.setting)
        if site.on_delay_s is not None:
            alarm = replace(alarm, on_delay_s=site.on_delay_s)
        if site.deadband is not None:
            if alarm.deadband_dimension is None:
                raise ValueError(f"{plan.id}: one deadband does not fit what {site.alarm} watches")
            alarm = replace(alarm, watched=(replace(alarm.watched[0], deadband=site.deadband),))
        found[site.alarm] = alarm
    return found


def points(plan: UnitPlan, alarm: AlarmType) -> tuple[Point, ...]:
    """All that the alarm looks at: subjects with a limit, and for a measured value with its input."""
    inputs = {name: i for i, name in enumerate(plan.input_names())}
    results = {name: i for i, name in enumerate(plan.result_names())}
    found = []
    for subject, watched, limit in _candidates(plan, alarm):
        name = series_name(subject, watched.quantity)
        if limit is None or (alarm.rule is Rule.LITTLE_LEFT and name not in inputs):
            continue
        if alarm.rule is Rule.LITTLE_LEFT:
            value_at, support_at = inputs[name], results[f"{name}_margin"]
        else:
            value_at, support_at = results[name], results[name + UNCERTAINTY_SUFFIX]
        share = limit.value if alarm.rule is Rule.ABOVE_SHARE else 1.0
        found.append(
            Point(
                subject=subject, quantity=watched.quantity, limit=limit, rest=watched.rest,
                deadband=watched.deadband * share, value_at=value_at, support_at=support_at,
            )
        )  # fmt: skip
    return tuple(found)


def unarmed(plan: UnitPlan, catalogue: Mapping[str, AlarmType] = CATALOGUE) -> tuple[Unarmed, ...]:
    """What no alarm watches on this unit, so that a page can say so."""
    inputs = plan.input_names()
    found = []
    for alarm in catalogue.values():
        for subject, watched, limit in _candidates(plan, alarm):
            if limit is None:
                reason = "no limit entered"
            elif alarm.rule is Rule.LITTLE_LEFT and series_name(subject, watched.quantity) not in inputs:
                reason = "no such input in the site file"
            else:
                continue
            found.append(Unarmed(alarm=alarm.key, subject=subject, quantity=watched.quantity, reason=reason))
    return tuple(found)


def _candidates(plan: UnitPlan, alarm: AlarmType) -> list[tuple[str, Watched, Limit | None]]:
    subjects = {
        Scope.UNIT: ["unit"],
        Scope.STAGE: [s.subject for s in plan.unit.stages],
        Scope.CYLINDER: [c.subject for c in plan.unit.cylinders],
    }
    return [
        (subject, watched, plan.unit.limit(subject, watched.quantity))
        for watched in alarm.watched
        for subject in subjects[QUANTITIES[watched.quantity].scope]
    ]


def run_state(row: DerivedRow, place: int) -> RunState:
    """The stored running state; not known where it is missing or not good."""
    value = float(row.values[place])
    told = Quality(row.quality[place]) in (Quality.GOOD, Quality.UNCERTAIN, Quality.NOT_RUNNING)
    return RunState(int(value)) if told and math.isfinite(value) else RunState.NOT_KNOWN


def look(point: Point, alarm: AlarmType, row: DerivedRow, frame: Frame) -> Sight:
    """Judge one point from stored numbers alone."""
    if alarm.rule is Rule.LITTLE_LEFT:
        return _look_at_measured(point, alarm, row, frame)
    return _look_at_estimate(point, alarm, row)


def worst(sights: Sequence[Sight]) -> Sight:
    """The one that decides.

    Any point past its alarm point makes the alarm true. It is false only if every point could be judged:
    a point that cannot be seen may be the one that is still in trouble.
    """
    for condition in (Condition.TRUE, Condition.NOT_JUDGED, Condition.HOLD, Condition.FALSE):
        found = [s for s in sights if s.condition is condition]
        if found:
            return min(found, key=lambda s: s.left) if condition is not Condition.NOT_JUDGED else found[0]
    raise ValueError("nothing to compare")


def _believed(alarm: AlarmType, quality: Quality) -> bool:
    # What the source itself calls uncertain is shown, but moves nobody at Medium or High.
    return quality is Quality.GOOD or (quality is Quality.UNCERTAIN and alarm.priority <= Priority.LOW)


def _side(past: float, deadband: float) -> Condition:
    """``past`` is how far the value lies beyond its alarm point."""
    if past > 0:
        return Condition.TRUE
    return Condition.FALSE if past < -deadband else Condition.HOLD


def _look_at_measured(point: Point, alarm: AlarmType, row: DerivedRow, frame: Frame) -> Sight:
    margin, value = float(row.values[point.support_at]), float(frame.values[point.value_at])
    qualities = (Quality(frame.quality[point.value_at]), Quality(row.quality[point.support_at]))
    doubtful = next((q for q in qualities if not _believed(alarm, q)), None)
    if doubtful is not None or math.isnan(margin) or math.isnan(value):
        return Sight(point=point, condition=Condition.NOT_JUDGED, quality=doubtful or Quality.INPUT_MISSING)
    left = margin - alarm.setting
    return Sight(point=point, condition=_side(-left, point.deadband), value=value, left=left, margin=margin)


def _look_at_estimate(point: Point, alarm: AlarmType, row: DerivedRow) -> Sight:
    value, uncertainty = float(row.values[point.value_at]), float(row.values[point.support_at])
    quality = Quality(row.quality[point.value_at])
    if not _believed(alarm, quality) or math.isnan(value):
        quality = quality if quality is not Quality.GOOD else Quality.INPUT_MISSING
        return Sight(point=point, condition=Condition.NOT_JUDGED, quality=quality)
    band = COVERAGE_FACTOR * uncertainty
    reach = 0.0 if math.isnan(band) else band
    edge = alarm.setting * point.limit.value
    if alarm.rule is Rule.ABOVE_SHARE:
        past, span = value + reach - edge, abs(point.limit.value - point.rest)
    else:
        past, span = edge - (value - reach), abs(point.rest - point.limit.value)
    condition = _side(past, point.deadband)
    if math.isnan(band) and condition is not Condition.TRUE:
        # Past the alarm point without its band is past it; short of it without its band is not known.
        return Sight(point=point, condition=Condition.NOT_JUDGED, quality=Quality.INPUT_MISSING)
    return Sight(point=point, condition=condition, value=value, band=band, left=-past / span)
