"""The limit alarms of one unit: stored rows and people's requests in, events out.

Nothing here asks the time: delays count ticks. All numbers are those of the stored row, so that page, alarm
and store say the same.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from types import MappingProxyType
from typing import Final

from agent.alarms import wording
from agent.alarms.answers import objection, tidy
from agent.alarms.catalogue import CATALOGUE, AlarmType
from agent.alarms.delay import Delay
from agent.alarms.table import EVENT_OF, Standing, Trigger, step
from agent.alarms.watch import Condition, Point, Sight, configured, look, points, run_state, unarmed, worst
from agent.records import AlarmEvent, AlarmState, DerivedRow, EventKind, Frame, Request, RunState
from agent.siteplan.plan import UnitPlan
from model.quantities import series_name

_NOTHING: Final[Mapping[tuple[str, str], Standing]] = MappingProxyType({})


class _Alarm:
    """One alarm: its points, its state and its two delays."""

    def __init__(self, kind: AlarmType, watched: tuple[Point, ...]) -> None:
        self.kind = kind
        self.points = watched
        self.on_delay = Delay(kind.on_delay_s)
        self.off_delay = Delay(kind.off_delay_s)
        self.reset(Standing())

    def reset(self, standing: Standing) -> None:
        self.state = standing.state
        self.blind = standing.blind is not None
        self.on_delay.reset()
        self.off_delay.reset()

    def judge(self, row: DerivedRow, frame: Frame, running: RunState) -> tuple[Condition, list[Sight]]:
        """What the row says.

        A machine that is known to stand has no such condition; neither has one whose limit was taken away.
        """
        if running is RunState.STOPPED or not self.points:
            return Condition.FALSE, []
        if running is RunState.NOT_KNOWN:
            return Condition.NOT_JUDGED, []
        sights = [look(point, self.kind, row, frame) for point in self.points]
        return worst(sights).condition, sights

    def count(self, tick: int, condition: Condition) -> Trigger | None:
        """Move both delays; the trigger that the condition now amounts to.

        The delays follow the rows alone, never the state: after a restart the same rows give the same delays.
        """
        if condition is Condition.NOT_JUDGED:
            return None
        on = self.on_delay.update(tick, seen=condition is Condition.TRUE)
        off = self.off_delay.update(tick, seen=condition is Condition.FALSE)
        return Trigger.CONDITION_TRUE if on else Trigger.CONDITION_FALSE if off else None


class LimitAlarms:
    """All limit alarms of one unit.

    At start: `reset` with what the journal folds to, then `warm` with the stored rows from `warm_window_s`
    before the journal's last judged tick on. Then `update` once a tick, in rising order.
    """

    def __init__(self, plan: UnitPlan, catalogue: Mapping[str, AlarmType] = CATALOGUE) -> None:
        self._plan = plan
        self._alarms = {
            key: _Alarm(kind, points(plan, kind)) for key, kind in configured(plan, catalogue).items()
        }
        self.unarmed = unarmed(plan, catalogue)
        self._running_at = plan.result_names().index(series_name("unit", "run_state"))
        self._lengths = (len(plan.inputs), len(plan.result_names()))
        self.reset()

    @property
    def warm_window_s(self) -> int:
        """How much of the past the delays remember."""
        return max(max(a.on_delay.memory_s, a.off_delay.memory_s) for a in self._alarms.values())

    @property
    def states(self) -> Mapping[str, AlarmState]:
        return {key: alarm.state for key, alarm in self._alarms.items()}

    def reset(self, states: Mapping[tuple[str, str], Standing] = _NOTHING) -> None:
        """Forget all, and take over where each alarm of this unit stands."""
        self._tick: int | None = None
        self._answered: set[str] = set()
        for key, alarm in self._alarms.items():
            alarm.reset(states.get((self._plan.id, key), Standing()))

    def warm(self, rows: Iterable[tuple[Frame, DerivedRow]], last_judged: int | None) -> list[AlarmEvent]:
        """Replay stored rows, in plan order of columns, after a restart.

        Up to the journal's last judged tick they only rebuild the delays. Rows after it were stored but
        never judged: their events are returned, to be appended.
        """
        events: list[AlarmEvent] = []
        for frame, row in rows:
            if last_judged is None or row.tick > last_judged:
                events += self.update(row, frame)
                continue
            running = self._check(row, frame)
            for alarm in self._alarms.values():
                alarm.count(row.tick, alarm.judge(row, frame, running)[0])
        return events

    def update(self, row: DerivedRow, frame: Frame, requests: Sequence[Request] = ()) -> list[AlarmEvent]:
        """Take one tick.

        Requests come first: they answer what the person saw, which was before this tick. Requests of other
        units are passed over.
        """
        running = self._check(row, frame)
        events = self._answer(row.tick, requests)
        for alarm in self._alarms.values():
            events += self._follow(alarm, row, frame, running)
        return events

    def _check(self, row: DerivedRow, frame: Frame) -> RunState:
        if not row.unit == frame.unit == self._plan.id or row.tick != frame.tick:
            raise ValueError(f"{self._plan.id}: a row and a frame of one tick of this unit are needed")
        if (len(frame.values), len(row.values)) != self._lengths:
            raise ValueError(f"{self._plan.id}: frame and row must have the columns of the plan")
        if self._tick is not None and row.tick <= self._tick:
            raise ValueError(f"{self._plan.id}: tick {row.tick} after {self._tick}")
        self._tick = row.tick
        return run_state(row, self._running_at)

    def _follow(self, alarm: _Alarm, row: DerivedRow, frame: Frame, running: RunState) -> list[AlarmEvent]:
        events = []
        condition, sights = alarm.judge(row, frame, running)
        if condition is Condition.NOT_JUDGED:
            pending = alarm.on_delay.running(row.tick)
            if not alarm.blind and (alarm.state is not AlarmState.NORMAL or pending):
                alarm.blind = True
                events.append(self._blind(alarm, row.tick, sights))
        elif alarm.blind:
            alarm.blind = False
            text = wording.sighted(self._plan.id, alarm.kind)
            events.append(self._event(alarm, row.tick, EventKind.SIGHTED, text))
        trigger = alarm.count(row.tick, condition)
        after = None if trigger is None else step(alarm.state, trigger)
        if trigger is not None and after is not None:
            alarm.state = after
            stopped = running is RunState.STOPPED
            events.append(self._moved(alarm, row.tick, EVENT_OF[trigger], sights, stopped=stopped))
        return events

    def _moved(
        self, alarm: _Alarm, tick: int, kind: EventKind, sights: Sequence[Sight], *, stopped: bool
    ) -> AlarmEvent:
        found = worst(sights) if sights else None
        if kind is EventKind.RAISED and found is not None:
            text = wording.raised(self._plan.id, alarm.kind, found, sights)
        else:
            text = wording.returned(self._plan.id, alarm.kind, found, alarm.state, stopped=stopped)
        return self._event(alarm, tick, kind, text, found)

    def _blind(self, alarm: _Alarm, tick: int, sights: Sequence[Sight]) -> AlarmEvent:
        found = worst(sights) if sights else None
        text = wording.blind(self._plan.id, alarm.kind, found, alarm.state)
        return self._event(alarm, tick, EventKind.BLIND, text, found)

    def _event(
        self, alarm: _Alarm, tick: int, kind: EventKind, text: str, found: Sight | None = None
    ) -> AlarmEvent:
        event = AlarmEvent(
            unit=self._plan.id, alarm=alarm.kind.key, tick=tick, kind=kind, state=alarm.state, text=text
        )
        if found is None:
            return event
        return replace(event, value=found.value, limit=found.point.limit.value, subject=found.point.subject)

    def _answer(self, tick: int, requests: Sequence[Request]) -> list[AlarmEvent]:
        events: list[AlarmEvent] = []
        taken: set[tuple[str, EventKind]] = set()
        for request in requests:
            if request.unit != self._plan.id or request.id in self._answered:
                continue
            event = self._answer_one(tick, request)
            # The journal holds one event of a kind for an alarm and tick; a second answer waits for the next.
            if (event.alarm, event.kind) in taken:
                continue
            taken.add((event.alarm, event.kind))
            self._answered.add(request.id)
            events.append(event)
        return events

    def _answer_one(self, tick: int, request: Request) -> AlarmEvent:
        alarm = self._alarms.get(request.alarm)
        actor, reason = tidy(request.actor), tidy(request.reason)
        why_not = objection(request, None if alarm is None else alarm.state)
        if alarm is None or why_not:
            kind, text = (
                EventKind.REFUSED,
                f"{self._plan.id}. Request of {actor or 'nobody'} refused: {why_not}.",
            )
            state = AlarmState.NORMAL if alarm is None else alarm.state
        else:
            state = step(alarm.state, Trigger.ACKNOWLEDGE) or alarm.state
            alarm.state = state
            kind = EventKind.ACKNOWLEDGED
            text = f"{self._plan.id}. {alarm.kind.words}: acknowledged by {actor}. Reason: {reason}"
        return AlarmEvent(
            unit=self._plan.id, alarm=request.alarm, tick=tick, kind=kind, state=state, text=text,
            actor=actor, reason=reason, request=request.id,
        )  # fmt: skip
