import gc
import math
import os
import sqlite3
import subprocess
import sys
import threading
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from agent.database import (
    StoreBusyError,
    StoreError,
    StoreForeignError,
    StoreFullError,
    StoreMissingError,
    StoreReadOnlyError,
    StoreTooNewError,
    UnknownSeriesError,
)
from agent.records import Commit, DerivedRow, Frame, LinkState, Quality, SourceStatus
from agent.storage.series import KEEP_DERIVED_S, KEEP_INPUTS_S, PRUNE_ROWS, SeriesSink, SeriesSource
from agent.storage.sqlite_series import SeriesReader, SeriesWriter

INPUTS = [("stage1.suction_pressure", "Pa"), ("unit.speed", "rad/s"), ("unit.load_step", "1")]
RESULTS = [("unit.power", "W"), ("unit.power.u", "W")]
T0 = 1_800_000_000


def frame(tick: int, values: Sequence[float], unit: str = "K-1", quality: Sequence[int] = ()) -> Frame:
    row = np.array(values, dtype=np.float32)
    marks = np.array(quality or [0] * len(values), np.uint8)
    return Frame(unit=unit, tick=tick, values=row, quality=marks, ages=row * 0 + np.float32(0.5))


def derived(tick: int, values: Sequence[float], unit: str = "K-1", configuration: int = 1) -> DerivedRow:
    row = np.array(values, dtype=np.float32)
    return DerivedRow(
        unit=unit, tick=tick, configuration=configuration, values=row,
        quality=np.where(np.isnan(row), Quality.INPUT_MISSING, Quality.GOOD).astype(np.uint8),
    )  # fmt: skip


def both(tick: int, values: Sequence[float], results: Sequence[float], unit: str = "K-1") -> Commit:
    return Commit(frames=[frame(tick, values, unit)], derived=[derived(tick, results, unit)], sources=[])


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "series.db"


@pytest.fixture
def writer(path: Path) -> Iterator[SeriesWriter]:
    writer = SeriesWriter(path)
    writer.open()
    writer.register("K-1", INPUTS, RESULTS)
    yield writer
    writer.close()


@pytest.fixture
def reader(path: Path) -> Iterator[SeriesReader]:
    reader = SeriesReader(path)
    yield reader
    reader.close()


def test_what_is_committed_is_read_back_to_the_last_bit(writer: SeriesWriter, reader: SeriesReader) -> None:
    sent = frame(T0, [3.1e6, math.nan, 2.0], quality=[0, 3, 1])
    result = derived(T0, [6.283e5, 1.5e3], configuration=7)
    writer.commit(Commit(frames=[sent], derived=[result], sources=[]))
    got, row = reader.last("K-1")
    np.testing.assert_array_equal(got.values, sent.values)
    np.testing.assert_array_equal(got.quality, sent.quality)
    np.testing.assert_array_equal(got.ages, sent.ages)
    np.testing.assert_array_equal(row.values, result.values)
    assert (got.values.dtype, got.quality.dtype, row.values.dtype) == (np.float32, np.uint8, np.float32)
    assert (got.tick, row.tick, row.configuration) == (T0, T0, 7)
    assert [c.name for c in reader.columns("K-1").inputs] == [n for n, _ in INPUTS]
    assert [(c.index, c.unit) for c in reader.columns("K-1").results] == [(0, "W"), (1, "W")]


def test_an_unknown_unit_has_nothing_and_a_wrong_name_is_told(
    writer: SeriesWriter, reader: SeriesReader
) -> None:
    assert reader.last("K-9") is None
    assert reader.last_tick("K-9") is None
    assert reader.frame("K-9", T0) is None
    assert reader.columns("K-9").inputs == ()
    assert reader.last("K-1") is None  # registered, nothing stored
    assert reader.last_tick("K-1") is None
    with pytest.raises(UnknownSeriesError, match=r"K-1 has no series unit\.pwer"):
        reader.range("K-1", ["unit.pwer"], T0, T0 + 1)
    with pytest.raises(UnknownSeriesError, match="holds no unit K-9"):
        reader.range("K-9", ["unit.power"], T0, T0 + 1)
    with pytest.raises(UnknownSeriesError, match="was not registered"):
        writer.commit(both(T0, [1, 2, 3], [4, 5], unit="K-9"))


def test_a_row_of_another_length_is_refused_whole(writer: SeriesWriter, reader: SeriesReader) -> None:
    with pytest.raises(ValueError, match="3 series registered"):
        writer.commit(both(T0, [1, 2], [4, 5]))
    with pytest.raises(ValueError, match="2 series registered"):
        writer.commit(both(T0, [1, 2, 3], [4]))
    assert reader.last_tick("K-1") is None


def test_a_late_row_takes_the_place_of_the_stored_one(writer: SeriesWriter, reader: SeriesReader) -> None:
    for tick in (T0, T0 + 1, T0 + 2):
        writer.commit(both(tick, [1, 1, 1], [1, 1]))
    writer.commit(both(T0 + 1, [2, 2, 2], [2, 2]))
    ticks, values, _ = reader.range("K-1", ["unit.speed", "unit.power"], T0, T0 + 3)
    assert ticks.tolist() == [T0, T0 + 1, T0 + 2]
    assert values.tolist() == [[1, 1], [2, 2], [1, 1]]
    assert reader.last_tick("K-1") == T0 + 2


def test_a_series_added_later_reads_as_nan_in_older_rows(
    path: Path, writer: SeriesWriter, reader: SeriesReader
) -> None:
    writer.commit(both(T0, [1, 2, 3], [4, 5]))
    writer.close()
    writer.open()
    writer.register("K-1", [*INPUTS, ("unit.flow", "mol/s")], [*RESULTS, ("unit.capacity", "mol/s")])
    writer.commit(both(T0 + 1, [1, 2, 3, 9], [4, 5, 8]))
    old = reader.frame("K-1", T0)
    assert np.isnan(old.values[3])
    assert old.quality[3] == Quality.NEVER
    assert np.isnan(old.ages[3])
    assert reader.row("K-1", T0).values[:2].tolist() == [4, 5]
    ticks, values, quality = reader.range("K-1", ["unit.flow", "unit.capacity", "unit.power"], T0, T0 + 9)
    np.testing.assert_array_equal(values, [[math.nan, math.nan, 4], [9, 8, 4]])
    assert quality.tolist() == [[Quality.NEVER, Quality.NEVER, 0], [0, 0, 0]]
    assert ticks.tolist() == [T0, T0 + 1]
    # A row written while fewer series existed, read together with longer ones in one call.
    pairs = reader.rows("K-1", T0, T0 + 2, inputs=["unit.flow", "unit.speed"], results=["unit.capacity"])
    np.testing.assert_array_equal([f.values for f, _ in pairs], [[math.nan, 2], [9, 2]])
    np.testing.assert_array_equal([r.values for _, r in pairs], [[math.nan], [8]])


def test_another_order_in_the_site_file_keeps_the_stored_places(
    writer: SeriesWriter, reader: SeriesReader
) -> None:
    writer.commit(both(T0, [10, 20, 30], [1, 2]))
    turned = [INPUTS[2], ("unit.flow", "mol/s"), INPUTS[0]]  # reordered, one dropped, one new
    writer.register("K-1", turned, RESULTS[::-1])
    writer.commit(both(T0 + 1, [31, 41, 11], [3, 4]))
    names = ["stage1.suction_pressure", "unit.speed", "unit.load_step", "unit.flow", "unit.power"]
    _, values, _ = reader.range("K-1", names, T0, T0 + 2)
    np.testing.assert_array_equal(values, [[10, 20, 30, math.nan, 1], [11, math.nan, 31, 41, 4]])
    assert [c.name for c in reader.columns("K-1").inputs] == [*(n for n, _ in INPUTS), "unit.flow"]
    ((plan_order, row),) = reader.rows(
        "K-1", T0 + 1, T0 + 2, inputs=[n for n, _ in turned], results=["unit.power.u", "unit.power"]
    )
    assert plan_order.values.tolist() == [31, 41, 11]
    assert row.values.tolist() == [3, 4]


@settings(max_examples=25, deadline=None)
@given(orders=st.lists(st.lists(st.sampled_from("abcdefg"), unique=True, min_size=1), min_size=1, max_size=5))
def test_every_value_is_found_under_its_name_whatever_was_registered_when(
    tmp_path_factory: pytest.TempPathFactory, orders: list[list[str]]
) -> None:
    path = tmp_path_factory.mktemp("orders") / "series.db"
    writer, reader = SeriesWriter(path), SeriesReader(path)
    writer.open()
    for i, names in enumerate(orders):
        writer.register("U", [(n, "1") for n in names], [])
        values = [ord(n) + 1000 * i for n in names]
        writer.commit(Commit(frames=[frame(T0 + i, values, "U")], derived=[], sources=[]))
    every = sorted({n for names in orders for n in names})
    _, got, _ = reader.range("U", every, T0, T0 + len(orders))
    wanted = [
        [ord(n) + 1000 * i if n in names else math.nan for n in every] for i, names in enumerate(orders)
    ]
    np.testing.assert_array_equal(got, wanted)
    places = [c.index for c in reader.columns("U").inputs]
    assert places == list(range(len(every)))
    writer.close()
    reader.close()


def test_a_series_may_not_change_its_unit_or_stand_twice(writer: SeriesWriter) -> None:
    with pytest.raises(StoreError, match=r"holds K-1 unit\.speed in rad/s, now asked for in rpm"):
        writer.register("K-1", [("unit.speed", "rpm")], RESULTS)
    with pytest.raises(ValueError, match="stands twice"):
        writer.register("K-1", [INPUTS[0], INPUTS[0]], RESULTS)


def test_inputs_and_results_of_different_ticks_are_joined_with_nan(
    writer: SeriesWriter, reader: SeriesReader
) -> None:
    writer.commit(Commit(frames=[frame(T0, [1, 2, 3])], derived=[], sources=[]))
    writer.commit(both(T0 + 1, [1, 2, 3], [4, 5]))
    writer.commit(Commit(frames=[], derived=[derived(T0 + 2, [6, 7])], sources=[]))
    ticks, values, _ = reader.range("K-1", ["unit.power", "unit.speed"], T0, T0 + 3)
    assert ticks.tolist() == [T0, T0 + 1, T0 + 2]
    np.testing.assert_array_equal(values, [[math.nan, 2], [4, 2], [6, math.nan]])
    assert reader.last("K-1")[0].tick == T0 + 1  # the newest tick that has both
    assert reader.last_tick("K-1") == T0 + 2  # a live tick must be later than this
    assert reader.row("K-1", T0) is None
    assert reader.frame("K-1", T0).tick == T0
    ticks, values, quality = reader.range("K-1", ["unit.power"], T0 + 50, T0 + 60)
    assert (ticks.shape, values.shape, quality.shape) == ((0,), (0, 1), (0, 1))


def test_sources_and_configurations_are_kept(writer: SeriesWriter, reader: SeriesReader) -> None:
    status = SourceStatus(
        source="bus", state=LinkState.UP, since=1.5, detail="connected", received=9, rejected=1,
        last_rejection="a/b: not a number", dropped=0, connections=2, clock_offset_s=math.nan,
    )  # fmt: skip
    writer.commit(Commit(frames=[], derived=[], sources=[status]))
    (got,) = reader.sources()
    assert math.isnan(got.clock_offset_s)
    assert (got.source, got.state, got.last_rejection) == ("bus", LinkState.UP, "a/b: not a number")
    first = writer.configuration("d1", "text one", 5.0)
    assert writer.configuration("d2", "text two", 6.0) != first
    assert writer.configuration("d1", "text one", 7.0) == first
    stored = reader.configuration(first)
    assert (stored.digest, stored.text, stored.at) == ("d1", "text one", 5.0)
    assert reader.configuration(99) is None


def test_the_file_is_in_the_form_decided(writer: SeriesWriter, path: Path) -> None:
    connection = sqlite3.connect(path)
    pragma = {p: connection.execute(f"PRAGMA {p}").fetchone()[0] for p in ("page_size", "journal_mode")}
    connection.close()
    assert pragma == {"page_size": 8192, "journal_mode": "wal"}
    assert writer._connection.execute("PRAGMA synchronous").fetchone()[0] == 2  # FULL


def test_oldest_rows_go_inputs_later_than_results(writer: SeriesWriter, reader: SeriesReader) -> None:
    now = T0 + KEEP_INPUTS_S
    ages = {"very old": KEEP_INPUTS_S + 5, "old": KEEP_DERIVED_S + 5, "new": 5}
    for age in ages.values():
        writer.commit(both(now - age, [1, 2, 3], [4, 5]))
    assert writer.prune(float(now)) == 3
    held = {age: (reader.frame("K-1", now - s), reader.row("K-1", now - s)) for age, s in ages.items()}
    assert [held[a][0] is not None for a in ages] == [False, True, True]
    assert [held[a][1] is not None for a in ages] == [False, False, True]


def test_one_prune_takes_no_more_than_its_share(writer: SeriesWriter, reader: SeriesReader) -> None:
    extra = 50
    many = [frame(T0 + i, [1, 2, 3]) for i in range(PRUNE_ROWS + extra)]
    writer.commit(Commit(frames=many, derived=[], sources=[]))
    now = T0 + KEEP_INPUTS_S + 10_000
    assert writer.prune(now) == PRUNE_ROWS
    ticks, _, _ = reader.range("K-1", ["unit.speed"], T0, now)
    assert ticks[0] == T0 + PRUNE_ROWS  # the oldest went first
    assert writer.prune(now) == extra


def test_a_newer_store_is_refused_and_left_alone(path: Path, writer: SeriesWriter) -> None:
    writer.close()
    connection = sqlite3.connect(path)
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    with pytest.raises(StoreTooNewError, match="has schema 99, this program knows 1"):
        SeriesWriter(path).open()
    reader = SeriesReader(path)
    with pytest.raises(StoreTooNewError):
        reader.units()
    reader.close()


def test_another_database_is_refused_and_left_alone(tmp_path: Path) -> None:
    path = tmp_path / "other.db"
    connection = sqlite3.connect(path)
    connection.execute("CREATE TABLE theirs (a)")
    connection.commit()
    connection.close()
    before = path.read_bytes()
    with pytest.raises(StoreForeignError):
        SeriesWriter(path).open()
    assert path.read_bytes() == before
    path.write_text("no database at all " * 100)
    with pytest.raises(StoreError, match="is not a database"):
        SeriesWriter(path).open()


def test_a_reader_may_wait_for_a_store_that_is_not_there_yet(path: Path, reader: SeriesReader) -> None:
    with pytest.raises(StoreMissingError, match="the agent makes it"):
        reader.units()
    writer = SeriesWriter(path)
    writer.open()
    assert reader.units() == ()
    writer.close()


def test_a_full_disk_stops_one_commit_and_not_the_next(writer: SeriesWriter, reader: SeriesReader) -> None:
    connection = writer._connection
    pages = connection.execute("PRAGMA page_count").fetchone()[0]
    connection.execute(f"PRAGMA max_page_count = {pages}")
    many = [frame(T0 + i, [1, 2, 3]) for i in range(5000)]
    with pytest.raises(StoreFullError, match="no room left on the disk"):
        writer.commit(Commit(frames=many, derived=[], sources=[]))
    assert reader.last_tick("K-1") is None  # nothing of it
    connection.execute("PRAGMA max_page_count = 1000000")
    writer.commit(both(T0, [1, 2, 3], [4, 5]))
    assert reader.last_tick("K-1") == T0


def test_a_locked_store_stops_one_commit_and_not_the_next(
    path: Path, writer: SeriesWriter, reader: SeriesReader
) -> None:
    impatient = SeriesWriter(path, busy_timeout_s=0.01)
    impatient.open()
    impatient.register("K-1", INPUTS, RESULTS)
    other = sqlite3.connect(path, isolation_level=None)
    other.execute("BEGIN IMMEDIATE")
    with pytest.raises(StoreBusyError, match="another process holds it"):
        impatient.commit(both(T0, [1, 2, 3], [4, 5]))
    other.execute("ROLLBACK")
    other.close()
    impatient.commit(both(T0, [1, 2, 3], [4, 5]))
    impatient.close()
    assert reader.last_tick("K-1") == T0


def test_a_read_only_store_stops_one_commit_and_not_the_next(
    writer: SeriesWriter, reader: SeriesReader
) -> None:
    writer._connection.execute("PRAGMA query_only = ON")
    with pytest.raises(StoreReadOnlyError, match="may not be written"):
        writer.commit(both(T0, [1, 2, 3], [4, 5]))
    writer._connection.execute("PRAGMA query_only = OFF")
    writer.commit(both(T0, [1, 2, 3], [4, 5]))
    assert reader.last_tick("K-1") == T0


def test_a_reader_cannot_write(path: Path, writer: SeriesWriter, reader: SeriesReader) -> None:
    with pytest.raises(StoreReadOnlyError), reader._pool.snapshot() as connection:
        connection.execute("DELETE FROM unit")


def test_readers_in_threads_see_whole_commits_only(writer: SeriesWriter, reader: SeriesReader) -> None:
    """Each commit stores its tick number in both tables; a torn read would show two different numbers."""
    stop, torn, seen = threading.Event(), [], []

    def read() -> None:
        while not stop.is_set():
            pair = reader.last("K-1")
            if pair is not None:
                seen.append(pair[0].tick)
                if not pair[0].values[0] == pair[1].values[0] == pair[0].tick - T0:
                    torn.append(pair)

    threads = [threading.Thread(target=read) for _ in range(3)]
    for thread in threads:
        thread.start()
    for i in range(200):
        writer.commit(both(T0 + i, [i, 0, 0], [i, 0]))
    stop.set()
    for thread in threads:
        thread.join()
    assert not torn
    assert len(set(seen)) > 1


def test_closing_twice_and_using_after_close(path: Path, reader: SeriesReader) -> None:
    writer = SeriesWriter(path)
    writer.open()
    writer.close()
    writer.close()
    with pytest.raises(StoreError, match="is not open"):
        writer.configuration("d", "t", 0.0)
    reader.units()
    reader.close()
    reader.close()
    with pytest.raises(StoreError, match="closed"):
        reader.units()


def open_files(path: Path) -> int:
    found = 0
    for entry in Path("/proc/self/fd").iterdir():
        try:
            found += str(entry.readlink()).startswith(str(path))
        except FileNotFoundError:
            continue  # the descriptor of the listing itself
    return found


@pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="no /proc on this system")
def test_nothing_stays_open(tmp_path: Path) -> None:
    path = tmp_path / "series.db"
    for i in range(5):
        writer, reader = SeriesWriter(path), SeriesReader(path)
        writer.open()
        writer.register("K-1", INPUTS, RESULTS)
        writer.commit(both(T0 + i, [1, 2, 3], [4, 5]))
        threads = [threading.Thread(target=reader.last, args=("K-1",)) for _ in range(4)]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        assert open_files(path) > 0  # the count can see what it counts
        writer.close()
        reader.close()
    refused = SeriesWriter(tmp_path / "no" / "such" / "folder.db")
    with pytest.raises(StoreError):
        refused.open()
    gc.collect()
    assert open_files(tmp_path) == 0


def test_both_sides_keep_the_protocol(path: Path) -> None:
    sink: SeriesSink = SeriesWriter(path)
    source: SeriesSource = SeriesReader(path)
    sink.close()
    source.close()


CHILD = """
import sys
from pathlib import Path
import numpy as np
from agent.records import Commit, DerivedRow, Frame
from agent.storage.sqlite_series import SeriesReader, SeriesWriter
path = Path(sys.argv[1])
writer = SeriesWriter(path)
writer.open()
writer.register("K-1", [("a", "1"), ("b", "1")], [("c", "1")])
reader = SeriesReader(path)
last = reader.last_tick("K-1")
reader.close()
tick = 1 if last is None else last + 1
while True:
    v = np.full(2, tick, np.float32)
    f = Frame(unit="K-1", tick=tick, values=v, quality=np.zeros(2, np.uint8), ages=v)
    d = DerivedRow(unit="K-1", tick=tick, configuration=1, values=v[:1], quality=np.zeros(1, np.uint8))
    writer.commit(Commit(frames=[f], derived=[d], sources=[]))
    print(tick, flush=True)
    tick += 1
"""


def test_every_acknowledged_row_survives_ten_kills(path: Path, reader: SeriesReader) -> None:
    acknowledged: list[int] = []
    root = Path(sys.modules["agent"].__file__).parent.parent
    for attempt in range(10):
        child = subprocess.Popen(
            [sys.executable, "-P", "-c", CHILD, str(path)],
            stdout=subprocess.PIPE, text=True, env={**os.environ, "PYTHONPATH": str(root)},
        )  # fmt: skip
        try:
            for _ in range(5 + 13 * attempt % 37):  # kills fall at different points of its life
                acknowledged += [int(child.stdout.readline())]
        finally:
            child.kill()
        acknowledged += [int(line) for line in child.stdout.read().split("\n")[:-1]]
        child.stdout.close()
        child.wait()
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA integrity_check").fetchone()[0] == "ok"
    connection.close()
    ticks, values, _ = reader.range("K-1", ["a", "c"], 0, 10**9)
    assert set(acknowledged) <= set(ticks.tolist())
    assert len(acknowledged) >= 50
    np.testing.assert_array_equal(values[:, 0], ticks)
    np.testing.assert_array_equal(values[:, 1], ticks)
