"""The live blob: what every viewer's page shows, built once per commit and shared by all of them."""

import gzip
import hashlib
import json
import logging
import threading
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from agent.clock import Clock
from agent.database import JOURNAL_FILE, SERIES_FILE, StoreError, StoreMissingError
from agent.journal.sqlite import JournalReader
from agent.records import AlarmEvent, LinkState, SourceStatus
from agent.siteplan.plan import SitePlan, UnitPlan
from agent.storage.series import Columns
from agent.storage.sqlite_series import SeriesReader
from agent.stored_site import StoredSites
from dashboard.alarm_view import journal_rows, open_alarms
from dashboard.margin_view import margins, smallest
from dashboard.readings import Blindness, Row, row_of
from dashboard.trend import DayLines, Line
from dashboard.unit_view import Reasons, Scene, empty_unit, rank, unit_view
from dashboard.wording import clock as clock_words

PERIOD_S: Final = 1.0
STALE_AFTER_S: Final = 5.0
_POLL_S: Final = 0.2
_MARGIN_MS: Final = 60  # a request that comes just before the commit would wait for the next one
_OVERDUE_MS: Final = 500
_JOURNAL_ROWS: Final = 200

_log = logging.getLogger(__name__)


@dataclass(frozen=True, slots=True, kw_only=True)
class Blob:
    """A body as it goes over the wire, and its name for the browser's cache."""

    body: bytes
    packed: bytes
    etag: str


def blob_of(payload: Mapping[str, Any]) -> Blob:
    body = json.dumps(payload, ensure_ascii=False, separators=(",", ":"), allow_nan=False).encode()
    return Blob(
        body=body,
        packed=gzip.compress(body, compresslevel=6, mtime=0),
        etag=hashlib.sha256(body).hexdigest()[:16],
    )


class _UnitMemory:
    """What one unit's view remembers between ticks."""

    def __init__(self, plan: UnitPlan) -> None:
        self.plan = plan
        self.blindness = Blindness(plan.id)
        self.lines = DayLines(plan.id)
        self.row: Row | None = None
        self.columns: Columns | None = None


class LiveFeed:
    """Polls the stores read-only and keeps the newest blob; without `start` each request looks itself."""

    def __init__(self, site: SitePlan, data: Path, clock: Clock, *, pages_version: str) -> None:
        self._site = site
        self._clock = clock
        self._pages_version = pages_version
        self._series = SeriesReader(data / SERIES_FILE)
        self._journal = JournalReader(data / JOURNAL_FILE)
        self.sites = StoredSites(site, self._series)
        self._build_lock = threading.Lock()
        self._stop = threading.Event()
        self._thread: threading.Thread | None = None
        self.reset()

    def reset(self) -> None:
        self._units = {p.id: _UnitMemory(p) for p in self._site.units}
        self._seen: tuple[Any, ...] | None = None
        self._fault = ""
        self.sites.reset()
        self._events: tuple[AlarmEvent, ...] = ()
        self._built_at = 0.0
        self._blob: Blob | None = None
        self._journal_blob = blob_of({"events": []})
        self._journal_at: int | None = None

    # --- running -------------------------------------------------------------------------------------------

    def start(self) -> None:
        """Poll in a thread of its own until `close`."""
        if self._thread is None:
            self._thread = threading.Thread(target=self._run, name="live feed", daemon=True)
            self._thread.start()

    def close(self) -> None:
        self._stop.set()
        if self._thread is not None:
            self._thread.join(timeout=5)
        self._series.close()
        self._journal.close()

    def _run(self) -> None:
        while not self._stop.is_set():
            try:
                self.refresh()
            except Exception:  # noqa: BLE001 - a fault of ours must not end the thread that tells of it
                # The pages say STALE by themselves; one cause is one line.
                self._say("the live blob could not be built", with_trace=True)
            self._stop.wait(_POLL_S)

    def _say(self, cause: str, *, with_trace: bool = False) -> None:
        if cause == self._fault:
            return
        if cause:
            _log.warning("%s", cause, exc_info=with_trace)
        elif self._fault:
            _log.info("the stores can be read again")
        self._fault = cause

    # --- what others read ----------------------------------------------------------------------------------

    def live(self) -> Blob:
        blob = self._ready()
        assert blob is not None
        return blob

    def journal(self) -> Blob:
        self._ready()
        return self._journal_blob

    def row(self, unit: str) -> Row | None:
        """The row that the newest blob was made of."""
        self._ready()
        return self._units[unit].row

    def _ready(self) -> Blob | None:
        if self._thread is None or self._blob is None:
            self.refresh()
        return self._blob

    def now(self) -> float:
        return self._clock.now()

    def milliseconds_to_next(self) -> int:
        """When a browser should ask again: just after the next blob is due."""
        due_ms = (self._built_at + PERIOD_S - self._clock.now()) * 1000 + _MARGIN_MS
        return round(due_ms) if 0 < due_ms <= PERIOD_S * 1000 + _MARGIN_MS else _OVERDUE_MS

    def ages(self) -> dict[str, float | None]:
        """Age of each unit's newest row in seconds; None where there is none.

        A row ahead of the clock (which was set back) counts as old by as much: nothing newer comes before.
        """
        self._ready()
        now = self._clock.now()
        return {u: None if m.row is None else abs(now - m.row.tick) for u, m in self._units.items()}

    # --- building ------------------------------------------------------------------------------------------

    def refresh(self) -> None:
        """Build anew if anything was committed since the last time."""
        with self._build_lock:
            try:
                seen = self._mark()
                if seen != self._seen or self._blob is None:
                    self._build(seen)
                    self._seen = seen
                self._say("")
            except StoreError as error:
                self._say(error.words)
                if self._blob is None:
                    self._blob = blob_of(self._payload((), (), Reasons(), {}))

    def _mark(self) -> tuple[Any, ...]:
        """Changes whenever something new can be shown."""
        return (*(self._newest(u) for u in self._units), self._length())

    def _newest(self, unit: str) -> int | None:
        try:
            return self._series.last_tick(unit)
        except StoreMissingError:
            return None

    def _length(self) -> int | None:
        try:
            return self._journal.length()
        except StoreMissingError:
            return None

    def _build(self, mark: tuple[Any, ...]) -> None:
        length = mark[-1]
        if length is not None and length != self._journal_at:
            self._events = self._journal.latest()
            rows = journal_rows(self._journal.events(limit=_JOURNAL_ROWS), self._site, self._clock.now())
            self._journal_blob = blob_of({"events": rows})
            self._journal_at = length
        sources: Sequence[SourceStatus] = ()
        if any(tick is not None for tick in mark[:-1]):
            sources = self._series.sources()
        lines = {unit: self._take_in(memory) for unit, memory in self._units.items()}
        self._blob = blob_of(self._payload(self._events, sources, Reasons(), lines))
        self._built_at = self._clock.now()

    def _take_in(self, memory: _UnitMemory) -> Line | None:
        """Read the unit's newest row and what the page remembers beside it."""
        unit = memory.plan.id
        try:
            last = self._series.last(unit)
        except StoreMissingError:
            last = None
        if last is None:
            memory.row = None
            return None
        frame, derived = last
        if memory.columns is None or len(memory.columns.results) != len(derived.values):
            memory.columns = self._series.columns(unit)
        row = row_of(memory.columns, frame, derived)
        memory.row = row
        memory.blindness.update(row, self._series)
        worst = smallest(margins(memory.plan, row))
        return None if worst is None else memory.lines.line(worst.series, row.tick, self._series)

    def _payload(
        self,
        events: Sequence[AlarmEvent],
        sources: Sequence[SourceStatus],
        reasons: Reasons,
        lines: Mapping[str, Line | None],
    ) -> dict[str, Any]:
        now = self._clock.now()
        scene = Scene(zone=self._site.zone, barometer_pa=self._site.barometer_pa, now=now)
        alarms = open_alarms(events, self._site, now)
        views = {
            u: empty_unit(m.plan)
            if m.row is None
            else unit_view(m.plan, m.row, m.blindness, lines.get(u), scene=scene, reasons=reasons)
            for u, m in self._units.items()
        }
        ticks = [m.row.tick for m in self._units.values() if m.row is not None]
        oldest = min(ticks) if ticks else None
        return {
            "pages": self._pages_version,
            "server_time": round(now, 3),
            "next_ms": round(PERIOD_S * 1000),
            "tick": oldest,
            "as_of": None if oldest is None else clock_words(oldest, scene.zone, now=now),
            "note": self._note(),
            "units": views,
            "plant_order": list(views),
            "worst_first": sorted(views, key=lambda u: rank(views[u], alarms)),
            "alarms": alarms,
            "journal": self._journal_at,
            "sources": [_source(s, scene) for s in sources],
            "reasons": reasons.table,
        }

    def _note(self) -> str:
        """Said on every page when agent and pages do not speak of the same site."""
        for memory in self._units.values():
            if memory.row is not None and not self.sites.is_own(memory.row.configuration):
                return (
                    "The agent works with another version of the site file than these pages: "
                    "limits shown here may not be the ones it judges by. Restart the pages."
                )
        return ""


def _source(status: SourceStatus, scene: Scene) -> dict[str, Any]:
    since = clock_words(status.since, scene.zone, now=scene.now)
    offset = status.clock_offset_s
    return {
        "name": status.source,
        "up": status.state is LinkState.UP,
        "link": f"{status.state.value} since {since}",
        "detail": status.detail,
        "received": f"{status.received:,}".replace(",", " "),
        "connections": f"connection {status.connections}" if status.connections else "",
        "rejected": str(status.rejected),
        "last_rejection": status.last_rejection,
        "dropped": str(status.dropped),
        "offset": "not known" if offset != offset else f"{offset:+.2f} s",  # noqa: PLR0124 - true for NaN
    }
