"""Running state of one unit, by votes with hysteresis.

Votes are the run signal, the speed (above half of rated) and compression (some stage with a pressure ratio
above 1.15 whose discharge is more than 10 K hotter than its suction). The run signal decides, unless both
other votes are there and both contradict it. Without it, speed and compression decide together or speed
alone. Compression alone decides nothing: an idling machine compresses nothing, and a stopped one keeps
pressure and heat for a while.
"""

import math
from enum import Enum, auto
from types import MappingProxyType
from typing import Final

from agent.records import Frame, Quality, RunState
from agent.siteplan.plan import UnitPlan
from model.quantities import series_name

AGREEMENT_S = 5  # how long the votes must say the same before a stopped machine runs or a running one stands
SETTLING_S = 30  # how long a machine that was seen to start counts as starting
DISPUTE_S = 60  # how long votes may contradict each other before the state is not known

_SPEED_SHARE = 0.5
_PRESSURE_RATIO = 1.15
_TEMPERATURE_RISE_K = 10.0


class Vote(Enum):
    RUNS = auto()
    STANDS = auto()
    ABSENT = auto()


class Judgement(Enum):
    """What the votes of one frame say together."""

    RUNS = auto()
    STANDS = auto()
    DISPUTED = auto()
    BLIND = auto()


class Event(Enum):
    """What moves the state: a judgement that is new, or one that has lasted."""

    RUNS = auto()  # the votes say so now
    STANDS = auto()
    RUNS_FIRMLY = auto()  # for AGREEMENT_S
    STANDS_FIRMLY = auto()
    SETTLED = auto()  # running for SETTLING_S since the start was seen
    DISPUTED = auto()
    DISPUTED_LONG = auto()  # for DISPUTE_S
    BLIND = auto()


_N, _STOP, _START, _RUN = RunState.NOT_KNOWN, RunState.STOPPED, RunState.STARTING, RunState.RUNNING

# Every pair is listed. From NOT_KNOWN the first clear judgement counts at once: no start or stop was seen.
TRANSITIONS: Final = MappingProxyType(
    {
        (_N, Event.RUNS): _RUN,
        (_N, Event.RUNS_FIRMLY): _RUN,
        (_N, Event.SETTLED): _RUN,
        (_N, Event.STANDS): _STOP,
        (_N, Event.STANDS_FIRMLY): _STOP,
        (_N, Event.DISPUTED): _N,
        (_N, Event.DISPUTED_LONG): _N,
        (_N, Event.BLIND): _N,
        (_STOP, Event.RUNS): _STOP,
        (_STOP, Event.RUNS_FIRMLY): _START,
        (_STOP, Event.SETTLED): _START,
        (_STOP, Event.STANDS): _STOP,
        (_STOP, Event.STANDS_FIRMLY): _STOP,
        (_STOP, Event.DISPUTED): _STOP,
        (_STOP, Event.DISPUTED_LONG): _N,
        (_STOP, Event.BLIND): _N,
        (_START, Event.RUNS): _START,
        (_START, Event.RUNS_FIRMLY): _START,
        (_START, Event.SETTLED): _RUN,
        (_START, Event.STANDS): _START,
        (_START, Event.STANDS_FIRMLY): _STOP,
        (_START, Event.DISPUTED): _START,
        (_START, Event.DISPUTED_LONG): _N,
        (_START, Event.BLIND): _N,
        (_RUN, Event.RUNS): _RUN,
        (_RUN, Event.RUNS_FIRMLY): _RUN,
        (_RUN, Event.SETTLED): _RUN,
        (_RUN, Event.STANDS): _RUN,
        (_RUN, Event.STANDS_FIRMLY): _STOP,
        (_RUN, Event.DISPUTED): _RUN,
        (_RUN, Event.DISPUTED_LONG): _N,
        (_RUN, Event.BLIND): _N,
    }
)


def judge(run_signal: Vote, speed: Vote, compression: Vote) -> Judgement:
    """What the three votes of one frame say together."""
    if run_signal is not Vote.ABSENT:
        contradicted = speed is compression and speed not in (Vote.ABSENT, run_signal)
        return _said(speed if contradicted else run_signal)
    if speed is Vote.ABSENT:
        return Judgement.BLIND
    if compression in (Vote.ABSENT, speed):
        return _said(speed)
    return Judgement.DISPUTED


def _said(vote: Vote) -> Judgement:
    return Judgement.RUNS if vote is Vote.RUNS else Judgement.STANDS


class RunningState:
    """Fed one frame per tick, in order of time; ticks may be missing.

    A unit that loses the inputs it needs is NOT_KNOWN at once. Frames rewritten by late data are fed to a
    fresh one.
    """

    def __init__(self, plan: UnitPlan) -> None:
        names = plan.input_names()
        self._place = {name: place for place, name in enumerate(names)}
        self._rated_speed_rad_s = plan.unit.rated_speed_rad_s
        self._stages = tuple(stage.subject for stage in plan.unit.stages)
        self.reset()

    def reset(self) -> None:
        self._state = RunState.NOT_KNOWN
        self._judgement = Judgement.BLIND
        self._judged_since = 0  # tick from which the judgement has been the same
        self._started = 0  # tick of the last start that was seen
        self._last_tick: int | None = None

    @property
    def state(self) -> RunState:
        return self._state

    def update(self, frame: Frame) -> RunState:
        if self._last_tick is not None and frame.tick <= self._last_tick:
            raise ValueError(f"frame of tick {frame.tick} after one of tick {self._last_tick}")
        self._last_tick = frame.tick
        judgement = judge(*self.votes(frame))
        if judgement is not self._judgement:
            self._judgement, self._judged_since = judgement, frame.tick
        before = self._state
        self._state = TRANSITIONS[before, self._event(frame.tick)]
        if self._state is RunState.STARTING and before is not RunState.STARTING:
            self._started = self._judged_since
        return self._state

    def votes(self, frame: Frame) -> tuple[Vote, Vote, Vote]:
        """Run signal, speed, compression."""
        return self._run_signal(frame), self._speed(frame), self._compression(frame)

    def _event(self, tick: int) -> Event:
        lasted_s = tick - self._judged_since
        match self._judgement:
            case Judgement.BLIND:
                return Event.BLIND
            case Judgement.DISPUTED:
                return Event.DISPUTED_LONG if lasted_s >= DISPUTE_S else Event.DISPUTED
            case Judgement.STANDS:
                return Event.STANDS_FIRMLY if lasted_s >= AGREEMENT_S else Event.STANDS
            case Judgement.RUNS:
                if self._state is RunState.STARTING and tick - self._started >= SETTLING_S:
                    return Event.SETTLED
                return Event.RUNS_FIRMLY if lasted_s >= AGREEMENT_S else Event.RUNS

    def _value(self, frame: Frame, name: str) -> float:
        place = self._place.get(name)
        if place is None or frame.quality[place] > Quality.UNCERTAIN:
            return math.nan
        return float(frame.values[place])

    def _run_signal(self, frame: Frame) -> Vote:
        return _vote(self._value(frame, series_name("unit", "run_signal")), above=0.5)

    def _speed(self, frame: Frame) -> Vote:
        speed_rad_s = self._value(frame, series_name("unit", "speed"))
        return _vote(speed_rad_s, above=_SPEED_SHARE * self._rated_speed_rad_s)

    def _compression(self, frame: Frame) -> Vote:
        votes = {self._stage_compresses(frame, subject) for subject in self._stages}
        if Vote.RUNS in votes:
            return Vote.RUNS
        return Vote.STANDS if Vote.STANDS in votes else Vote.ABSENT

    def _stage_compresses(self, frame: Frame, subject: str) -> Vote:
        suction_pa = self._value(frame, series_name(subject, "suction_pressure"))
        discharge_pa = self._value(frame, series_name(subject, "discharge_pressure"))
        suction_k = self._value(frame, series_name(subject, "suction_temperature"))
        discharge_k = self._value(frame, series_name(subject, "discharge_temperature"))
        if not math.isfinite(suction_pa + discharge_pa + suction_k + discharge_k) or suction_pa <= 0:
            return Vote.ABSENT
        compresses = (
            discharge_pa / suction_pa > _PRESSURE_RATIO and discharge_k - suction_k > _TEMPERATURE_RISE_K
        )
        return Vote.RUNS if compresses else Vote.STANDS


def _vote(value: float, *, above: float) -> Vote:
    if math.isnan(value):
        return Vote.ABSENT
    return Vote.RUNS if value > above else Vote.STANDS
