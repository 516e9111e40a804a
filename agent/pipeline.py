"""The stages in order, records in, records out.

Blocks of ISO 13374 and where they stand: data acquisition (`agent.acquisition`), data manipulation
(`agent.manipulation`: frames, quality, running state), state detection (`model.evaluate` through
`agent.unit_line`, limits in `agent.alarms`); health assessment, prognostics and advisory generation are rooms
still to be built.

Order of writing: the series first, then the journal, then the acknowledgement to the broker. Every step may
be repeated without harm: rows replace themselves, the event key is unique, a repeated message is a repeated
reading.
"""

import logging
import math
from collections.abc import Collection, Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

from agent.acquisition.receipts import HeldReceipts
from agent.alarms.limits import LimitAlarms
from agent.database import StoreError
from agent.journal.fold import states
from agent.journal.sqlite import JournalReader, JournalWriter
from agent.manipulation.frames import HISTORY_S, FrameBuilder
from agent.manipulation.late import late_change
from agent.records import (
    AlarmEvent,
    AlarmState,
    Commit,
    DerivedRow,
    EventKind,
    Frame,
    LinkState,
    Reading,
    Receipt,
    Request,
    SourceStatus,
)
from agent.siteplan.plan import SitePlan, UnitPlan
from agent.storage.sqlite_series import SeriesReader, SeriesWriter
from agent.unit_line import UnitLine
from model.quantities import QUANTITIES, series_unit

_log = logging.getLogger(__name__)

SETTLE_S: Final = 0.5  # a tick is judged this long after it, so that readings of its second have arrived
REPLAY_S: Final = 120  # rows a crash left unjudged are judged at start if they are no older than this
BACKLOG_TICKS: Final = 600  # kept in memory while the store refuses to write
PRUNE_EVERY_S: Final = 60
STEP_BACK_S: Final = 1  # a clock that is disciplined moves by less


@dataclass(slots=True)
class _Line:
    """What the pipeline remembers of one unit."""

    plan: UnitPlan
    frames: FrameBuilder
    line: UnitLine
    alarms: LimitAlarms
    late: list[Reading]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Judged:
    """Rows of one unit on their way to the alarms."""

    frame: Frame
    row: DerivedRow


class StoredFrames:
    """Stored frames in the order of a plan's inputs."""

    def __init__(self, reader: SeriesReader, plan: UnitPlan) -> None:
        self._reader = reader
        self._names = plan.input_names()

    def frame(self, unit: str, tick: int) -> Frame | None:
        found = self._reader.rows(unit, tick, tick + 1, inputs=self._names, results=())
        return found[0][0] if found else None


class Pipeline:
    """One site. Not thread-safe: one caller at a time, whichever thread it is in."""

    def __init__(
        self,
        site: SitePlan,
        *,
        store: SeriesWriter,
        reader: SeriesReader,
        journal: JournalWriter,
        journal_reader: JournalReader,
        lines: Mapping[str, UnitLine],
    ) -> None:
        self._site = site
        self._store = store
        self._reader = reader
        self._journal = journal
        self._journal_reader = journal_reader
        self._lines = {
            plan.id: _Line(
                plan=plan, frames=FrameBuilder(plan), line=lines[plan.id], alarms=LimitAlarms(plan), late=[]
            )
            for plan in site.units
        }
        self._backlog: list[_Judged] = []
        self._unwritten: list[AlarmEvent] = []
        self._held = HeldReceipts()
        self._late_receipts: list[Receipt] = []
        self._last_tick = 0
        self._pruned = -math.inf
        self._store_trouble = ""
        self.refused_late = 0
        self.clock_steps_back = 0
        self._waits_for_clock = False

    # -- start ---------------------------------------------------------------------------------------------

    def start(self, now: float) -> None:
        """Take up where the journal and the store left off.

        Seconds between the last stored tick and now are no longer live: readings for them go the late way.
        """
        newest = 0
        for unit, line in self._lines.items():
            newest = max(newest, self._reader.last_tick(unit) or 0)
            self._restore(unit, line, now)
        self._last_tick = max(newest, _due(now))

    def _restore(self, unit: str, line: _Line, now: float) -> None:
        line.alarms.reset(states(self._journal_reader.latest(unit)))
        judged = self._journal.last_tick(unit)
        if judged is None:
            return
        rows = self._reader.rows(
            unit,
            judged - line.alarms.warm_window_s,
            _due(now) + 1,
            inputs=line.plan.input_names(),
            results=line.plan.result_names(),
        )
        # Rows of a longer outage, made from a broker's queue, are history: they never alarm.
        oldest = _due(now) - REPLAY_S
        kept = [(frame, row) for frame, row in rows if row.tick <= judged or row.tick >= oldest]
        events = line.alarms.warm(kept, judged)
        if kept and kept[-1][1].tick > judged:
            self._append(events, {unit: kept[-1][1].tick})

    # -- readings ------------------------------------------------------------------------------------------

    @property
    def last_tick(self) -> int:
        return self._last_tick

    def accept(self, readings: Iterable[Reading], now: float) -> None:
        """Take in readings; those that a past tick should have seen are kept for `commit_late`."""
        self._skip_long_pause(now)
        for reading in readings:
            late = False
            for line in self._lines.values():
                if line.frames.accept((reading,), self._last_tick):
                    line.late.append(reading)
                    late = True
            if not late:
                self._held.hold((reading,))
            elif reading.receipt is not None:
                self._late_receipts.append(reading.receipt)

    @property
    def late_waiting(self) -> int:
        return sum(len(line.late) for line in self._lines.values())

    def commit_late(self) -> tuple[Receipt, ...]:
        """Rewrite or make the ticks that late readings belong to; never alarms. Receipts may be acknowledged.

        Nothing is lost if the store refuses: the readings wait for the next call.
        """
        if not self.late_waiting or self._store_trouble:
            return ()
        frames: list[Frame] = []
        rows: list[DerivedRow] = []
        refused = 0
        for line in self._lines.values():
            if line.late:
                change = late_change(
                    line.plan, line.late, StoredFrames(self._reader, line.plan), self._last_tick
                )
                frames += change.frames
                rows += line.line.again(change.frames)
                refused += change.refused
        if not self._write(Commit(frames=frames, derived=rows, sources=())):
            return ()
        if refused:
            self.refused_late += refused
            _log.warning("%d late readings were too old to be stored, %d in all", refused, self.refused_late)
        for line in self._lines.values():
            line.late.clear()
        receipts, self._late_receipts = tuple(self._late_receipts), []
        return receipts

    # -- ticks ---------------------------------------------------------------------------------------------

    def next_due(self) -> float:
        """When the next tick may be judged, unix seconds."""
        return self._last_tick + 1 + SETTLE_S

    def watch_clock(self, now: float) -> None:
        """Tell, once each time, that the clock was set back: no tick is judged twice, so the agent waits."""
        behind = self._last_tick - _due(now)
        if behind > STEP_BACK_S and not self._waits_for_clock:
            self._waits_for_clock = True
            self.clock_steps_back += 1
            _log.warning("the clock was set back by %d s: no new tick until it has caught up", behind)
        elif behind <= 0 and self._waits_for_clock:
            self._waits_for_clock = False
            _log.warning("the clock has caught up; live again")

    def tick(self, now: float, sources: Sequence[SourceStatus]) -> tuple[Receipt, ...]:
        """Judge every second that is due; returns what may now be acknowledged."""
        self._skip_long_pause(now)
        due = _due(now)
        ticks = range(self._last_tick + 1, due + 1)
        if not ticks:
            return ()
        up = {s.source for s in sources if s.state is LinkState.UP}
        fresh = self._evaluate(ticks, up)
        self._last_tick = due
        if not self._commit(fresh, sources, now):
            return ()
        return self._held.release(due)

    def _evaluate(self, ticks: Iterable[int], up: Collection[str]) -> list[_Judged]:
        fresh = []
        for line in self._lines.values():
            frames = [line.frames.frame(t, up) for t in ticks]
            rows = line.line.live(frames)
            fresh += [_Judged(frame=f, row=r) for f, r in zip(frames, rows, strict=True)]
        return fresh

    def _commit(self, fresh: Sequence[_Judged], sources: Sequence[SourceStatus], now: float) -> bool:
        """Series first, then the journal. While the store refuses, rows wait here, the oldest lost first."""
        self._backlog += fresh
        excess = len(self._backlog) - BACKLOG_TICKS * len(self._lines)
        if excess > 0:
            del self._backlog[:excess]
        commit = Commit(
            frames=[j.frame for j in self._backlog], derived=[j.row for j in self._backlog], sources=sources
        )
        if not self._write(commit):
            return False
        judged, self._backlog = self._backlog, []
        written = self._judge(judged, self._pending_requests())
        self._prune(now)
        return written

    def _write(self, commit: Commit) -> bool:
        try:
            self._store.commit(commit)
        except StoreError as error:
            self._tell_store(str(error))
            return False
        self._tell_store("")
        return True

    def _judge(self, judged: Sequence[_Judged], requests: Sequence[Request]) -> bool:
        """Feed committed rows to the alarms and write what they say; False if the journal refuses."""
        events = list(self._unwritten)
        ticks: dict[str, int] = {}
        newest = {j.row.unit: j.row.tick for j in judged}
        for item in judged:
            unit = item.row.unit
            # A request is answered once, on the newest row.
            asked = [r for r in requests if r.unit == unit] if item.row.tick == newest[unit] else []
            events += self._lines[unit].alarms.update(item.row, item.frame, asked)
            ticks[unit] = item.row.tick
        events += _answers_for_strangers(requests, self._lines.keys(), newest)
        return self._append(events, ticks)

    def _append(self, events: Sequence[AlarmEvent], ticks: Mapping[str, int]) -> bool:
        try:
            self._journal.append(events, ticks)
        except StoreError as error:
            # The alarms have moved on: what they said is kept until the journal takes it.
            self._unwritten = list(events)
            self._tell_store(str(error))
            return False
        self._unwritten = []
        return True

    def _pending_requests(self) -> tuple[Request, ...]:
        answered = {e.request for e in self._unwritten if e.request}
        try:
            return tuple(r for r in self._journal.pending_requests() if r.id not in answered)
        except StoreError as error:
            self._tell_store(str(error))
            return ()

    def _prune(self, now: float) -> None:
        if now - self._pruned < PRUNE_EVERY_S:
            return
        self._pruned = now
        try:
            self._store.prune(now)
        except StoreError as error:
            self._tell_store(str(error))

    def _skip_long_pause(self, now: float) -> None:
        """After a pause longer than the readings' memory the seconds slept through go the late way."""
        due = _due(now)
        if self._last_tick and due - self._last_tick > HISTORY_S - 20:
            _log.warning("the agent slept", extra={"seconds": due - self._last_tick})
            self._last_tick = due

    def _tell_store(self, trouble: str) -> None:
        if trouble and not self._store_trouble:
            _log.error("store refuses to write: %s", trouble)
        if not trouble and self._store_trouble:
            _log.warning("store writes again")
        self._store_trouble = trouble


def _due(now: float) -> int:
    return math.floor(now - SETTLE_S)


def result_columns(plan: UnitPlan) -> list[tuple[str, str]]:
    """Name and SI unit of each derived series of a unit."""
    return [(name, series_unit(name)) for name in plan.result_names()]


def input_columns(plan: UnitPlan) -> list[tuple[str, str]]:
    return [(i.name, QUANTITIES[i.quantity].unit) for i in plan.inputs]


def _answers_for_strangers(
    requests: Iterable[Request], known: Collection[str], newest: Mapping[str, int]
) -> list[AlarmEvent]:
    """A request for a unit this agent does not hold is refused, else it would wait for ever."""
    return [
        AlarmEvent(
            unit=r.unit, alarm=r.alarm, tick=max(newest.values(), default=0), kind=EventKind.REFUSED,
            state=AlarmState.NORMAL, text=f"Request refused: there is no unit {r.unit} here.",
            actor=r.actor, reason=r.reason, request=r.id,
        )
        for r in requests
        if r.unit not in known
    ]  # fmt: skip
