import math
import os
import random
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from agent.database import StoreBusyError, StoreError, StoreForeignError, StoreMissingError, StoreTooNewError
from agent.journal.fold import states
from agent.journal.sqlite import JournalReader, JournalWriter, RequestWriter
from agent.records import AlarmEvent, AlarmState, EventKind, Request
from agent.storage.sqlite_series import SeriesWriter

T0 = 1_800_000_000


def event(
    tick: int,
    kind: EventKind = EventKind.RAISED,
    *,
    alarm: str = "reversal",
    unit: str = "K-1",
    text: str = "said",
    request: str = "",
) -> AlarmEvent:
    state = {EventKind.RAISED: AlarmState.UNACKNOWLEDGED, EventKind.ACKNOWLEDGED: AlarmState.ACKNOWLEDGED}
    return AlarmEvent(
        unit=unit, alarm=alarm, tick=tick, kind=kind, state=state.get(kind, AlarmState.NORMAL), text=text,
        value=1.25, subject="cylinder2", request=request,
    )  # fmt: skip


def request(name: str, alarm: str = "reversal") -> Request:
    return Request(
        id=name, at=float(T0), unit="K-1", alarm=alarm, kind=EventKind.ACKNOWLEDGED, actor="R. Holm",
        reason="step changed",
    )  # fmt: skip


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "journal.db"


@pytest.fixture
def journal(path: Path) -> Iterator[JournalWriter]:
    journal = JournalWriter(path)
    journal.open()
    yield journal
    journal.close()


@pytest.fixture
def asking(path: Path) -> Iterator[RequestWriter]:
    asking = RequestWriter(path)
    yield asking
    asking.close()


@pytest.fixture
def jreader(path: Path) -> Iterator[JournalReader]:
    jreader = JournalReader(path)
    yield jreader
    jreader.close()


def test_events_are_read_back_as_written(journal: JournalWriter, jreader: JournalReader) -> None:
    written = event(T0, text="Cylinder 2: 31°, ± 2°")
    journal.append([written], {"K-1": T0})
    (got,) = jreader.events()
    assert math.isnan(got.limit)
    same = (
        "unit",
        "alarm",
        "tick",
        "kind",
        "state",
        "text",
        "value",
        "subject",
        "actor",
        "reason",
        "request",
    )
    assert [getattr(got, f) for f in same] == [getattr(written, f) for f in same]
    assert journal.last_tick("K-1") == T0
    assert jreader.last_tick("K-1") == T0
    assert jreader.last_tick("K-9") is None


def test_repeating_a_tick_adds_nothing_and_the_first_text_stands(
    journal: JournalWriter, jreader: JournalReader
) -> None:
    journal.append([event(T0, text="first")], {"K-1": T0})
    journal.append([event(T0, text="again"), event(T0, EventKind.CLEARED)], {"K-1": T0})
    assert [e.text for e in jreader.events()] == ["first", "said"]
    assert jreader.length() == 2


def test_the_judged_tick_never_goes_back(journal: JournalWriter) -> None:
    journal.append([], {"K-1": T0, "K-2": T0 + 9})
    journal.append([], {"K-1": T0 - 5, "K-2": T0 + 10})
    assert (journal.last_tick("K-1"), journal.last_tick("K-2")) == (T0, T0 + 10)


def test_events_and_judged_ticks_go_together_or_not_at_all(
    path: Path, journal: JournalWriter, jreader: JournalReader
) -> None:
    impatient = JournalWriter(path, busy_timeout_s=0.01)
    impatient.open()
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(StoreBusyError):
        impatient.append([event(T0)], {"K-1": T0})
    other.execute("ROLLBACK")
    other.execute("DROP TABLE judged")
    with pytest.raises(StoreError):
        impatient.append([event(T0)], {"K-1": T0})
    other.close()
    assert jreader.events() == ()
    impatient.close()


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE event SET text = 'nothing happened'",
        "DELETE FROM event",
        "UPDATE request SET reason = 'other'",
        "DELETE FROM request",
        "UPDATE OR REPLACE event SET tick = 1",
    ],
)
def test_what_is_written_cannot_be_changed(
    path: Path, journal: JournalWriter, asking: RequestWriter, jreader: JournalReader, statement: str
) -> None:
    journal.append([event(T0)], {"K-1": T0})
    asking.ask(request("a"))
    before = jreader.events(), jreader.requests()
    connection = sqlite3.connect(path)
    with pytest.raises(sqlite3.IntegrityError, match="append-only"):
        connection.execute(statement)
    connection.close()
    assert repr((jreader.events(), jreader.requests())) == repr(before)


def test_replacing_a_row_is_passed_over(
    path: Path, journal: JournalWriter, asking: RequestWriter, jreader: JournalReader
) -> None:
    journal.append([event(T0)], {"K-1": T0})
    asking.ask(request("a"))
    before = repr((jreader.events(), jreader.requests()))
    connection = sqlite3.connect(path)
    row = "'K-1', 'reversal', ?, 'raised', 'normal', 'forged', 0, 0, '', '', '', ''"
    connection.execute(f"REPLACE INTO event VALUES (NULL, {row})", (T0,))  # its key
    connection.execute(f"REPLACE INTO event VALUES (1, {row})", (T0 + 1,))  # its number
    connection.execute("REPLACE INTO request VALUES (NULL, 'a', 0, 'K-1', 'x', 'raised', 'forged', '')")
    connection.execute("REPLACE INTO request VALUES (1, 'b', 0, 'K-1', 'x', 'raised', 'forged', '')")
    connection.commit()
    connection.close()
    assert repr((jreader.events(), jreader.requests())) == before


def test_a_request_is_open_until_an_event_answers_it(
    journal: JournalWriter, asking: RequestWriter, jreader: JournalReader
) -> None:
    assert asking.ask(request("a")) is True
    assert asking.ask(request("b", alarm="discharge_temperature")) is True
    assert [r.id for r in journal.pending_requests()] == ["a", "b"]
    journal.append([event(T0, EventKind.REFUSED, request="b")], {"K-1": T0})
    assert [r.id for r in journal.pending_requests()] == ["a"]
    assert jreader.answer("a") is None
    assert jreader.answer("b").kind == EventKind.REFUSED
    journal.append([event(T0 + 1, EventKind.ACKNOWLEDGED, request="a")], {"K-1": T0 + 1})
    assert journal.pending_requests() == ()
    asking.ask(request("c"))
    assert journal.pending_requests() == (request("c"),)
    assert [r.id for r in jreader.requests()] == ["a", "b", "c"]
    assert [r.id for r in jreader.requests(limit=1)] == ["c"]


def test_asking_twice_is_harmless(journal: JournalWriter, asking: RequestWriter) -> None:
    asking.ask(request("a"))
    assert asking.ask(request("a")) is False
    assert len(journal.pending_requests()) == 1
    journal.append([event(T0, EventKind.ACKNOWLEDGED, request="a")], {"K-1": T0})
    assert asking.ask(request("a")) is False  # a page that sends its form again
    assert journal.pending_requests() == ()
    with pytest.raises(ValueError, match="needs an id"):
        asking.ask(request(""))


def test_events_by_unit_and_the_newest_only(journal: JournalWriter, jreader: JournalReader) -> None:
    journal.append([event(T0 + i, unit=f"K-{i % 2}") for i in range(6)], {})
    assert [e.tick - T0 for e in jreader.events(limit=2)] == [4, 5]
    assert [e.tick - T0 for e in jreader.events(unit="K-1")] == [1, 3, 5]
    assert [e.tick - T0 for e in jreader.latest()] == [4, 5]
    assert [e.tick - T0 for e in jreader.latest(unit="K-0")] == [4]


def test_the_latest_of_each_kind_fold_to_the_same_as_all(
    journal: JournalWriter, jreader: JournalReader
) -> None:
    chance = random.Random(7)
    kinds = list(EventKind)
    written = [
        AlarmEvent(
            unit=chance.choice(["K-1", "K-2"]), alarm=chance.choice(["x", "y"]), tick=T0 + i,
            kind=chance.choice(kinds), state=chance.choice(list(AlarmState)), text=str(i),
            value=0.0, limit=0.0,
        )
        for i in range(300)
    ]  # fmt: skip
    for upto in (1, 5, 20, 300):
        journal.append(written[:upto], {})
        assert states(jreader.latest()) == states(written[:upto])


def test_the_dashboard_waits_for_the_agent_to_make_the_file(
    path: Path, asking: RequestWriter, jreader: JournalReader
) -> None:
    with pytest.raises(StoreMissingError):
        asking.ask(request("a"))
    with pytest.raises(StoreMissingError):
        jreader.events()
    assert not path.exists()
    writer = JournalWriter(path)
    writer.open()
    asking.ask(request("a"))
    assert [r.id for r in writer.pending_requests()] == ["a"]
    writer.close()


def test_a_newer_journal_and_a_series_store_are_refused(
    tmp_path: Path, path: Path, journal: JournalWriter
) -> None:
    journal.close()
    connection = sqlite3.connect(path)
    connection.execute("PRAGMA user_version = 2")
    connection.close()
    for side in (JournalWriter(path).open, lambda: RequestWriter(path).ask(request("a"))):
        with pytest.raises(StoreTooNewError, match="has schema 2, this program knows 1"):
            side()
    series = SeriesWriter(tmp_path / "series.db")
    series.open()
    series.close()
    with pytest.raises(StoreForeignError):
        JournalWriter(tmp_path / "series.db").open()


def test_closing_twice_and_using_after_close(journal: JournalWriter, asking: RequestWriter) -> None:
    asking.ask(request("a"))
    for side in (journal, asking):
        side.close()
        side.close()
    with pytest.raises(StoreError, match="is not open"):
        journal.append([], {})


ASKER = """
import sys
from pathlib import Path
from agent.journal.sqlite import RequestWriter
from agent.records import EventKind, Request
asking = RequestWriter(Path(sys.argv[1]))
for i in range(100):
    asking.ask(Request(
        id=f"r{i}", at=0.0, unit="K-1", alarm="reversal", kind=EventKind.ACKNOWLEDGED, actor="a", reason="b"))
asking.close()
"""


def test_another_process_asks_while_the_agent_writes(path: Path, journal: JournalWriter) -> None:
    root = Path(sys.modules["agent"].__file__ or "").parent.parent
    answered: list[str] = []
    tick = T0
    with subprocess.Popen(
        [sys.executable, "-P", "-c", ASKER, str(path)], env={**os.environ, "PYTHONPATH": str(root)}
    ) as asker:
        while len(answered) < 100:
            over = asker.poll() is not None
            tick += 1
            pending = journal.pending_requests()
            answers = [
                event(tick, EventKind.ACKNOWLEDGED, alarm=f"a{i}", request=r.id)
                for i, r in enumerate(pending)
            ]
            journal.append(answers, {"K-1": tick})
            answered += [r.id for r in pending]
            if over and not pending:
                break
    assert asker.returncode == 0
    assert sorted(answered) == sorted(f"r{i}" for i in range(100))
