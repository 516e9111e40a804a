"""The pipeline over real stores: order of writing, a store that refuses, a clock set back, a crash."""

import logging
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from agent.database import JOURNAL_FILE, SERIES_FILE, StoreFullError
from agent.journal.sqlite import JournalReader, JournalWriter
from agent.pipeline import BACKLOG_TICKS, Pipeline, input_columns, result_columns
from agent.records import Commit, EventKind, LinkState, Quality, Reading, Receipt, SourceStatus
from agent.siteplan.load import load_site
from agent.siteplan.plan import SWITCH, WORD, SitePlan
from agent.storage.sqlite_series import SeriesReader, SeriesWriter
from agent.unit_line import UnitLine
from model.gas import load_or_build

ROOT = Path(__file__).resolve().parents[2]
START = 1_790_000_000
UP = SourceStatus(
    source="field-bus", state=LinkState.UP, since=0.0, detail="", received=0, rejected=0, last_rejection="",
    dropped=0, connections=1, clock_offset_s=0.0,
)  # fmt: skip
STEADY = {
    "PT-1101": 29.0, "PT-1102": 69.4, "TT-1101": 30.0, "TT-1102": 101.0,
    "ST-1101": 900.0, "FT-1101": 20300.0, "JT-1101": 690.0,
}  # fmt: skip


class Writer(SeriesWriter):
    """A store that can be told to be full."""

    full = False

    def commit(self, commit: Commit) -> None:
        if self.full:
            raise StoreFullError(Path("series.db"), "no room on the disk")
        super().commit(commit)


class Rig:
    def __init__(self, site: SitePlan, folder: Path, cache: Path) -> None:
        self.plan = site.unit("K-110")
        self.store = Writer(folder / SERIES_FILE)
        self.journal = JournalWriter(folder / JOURNAL_FILE)
        self.store.open()
        self.journal.open()
        self.reader = SeriesReader(folder / SERIES_FILE)
        self.journal_reader = JournalReader(folder / JOURNAL_FILE)
        number = self.store.configuration(site.digest, site.text, START)
        self.store.register("K-110", input_columns(self.plan), result_columns(self.plan))
        gas = load_or_build(self.plan.unit.composition, self.plan.unit.domain, cache)
        self.pipeline = Pipeline(
            replace(site, units=(self.plan,)),
            store=self.store, reader=self.reader, journal=self.journal, journal_reader=self.journal_reader,
            lines={"K-110": UnitLine(self.plan, gas, configuration=number)},
        )  # fmt: skip

    def readings(self, at: float) -> list[Reading]:
        made = []
        for number, entry in enumerate(self.plan.inputs):
            word = "100" if entry.unit == WORD else None
            value = None if word else 1.0 if entry.unit == SWITCH else STEADY[entry.tag]
            made.append(
                Reading(
                    source=entry.source, address=entry.address, source_time=at, received_time=at, value=value,
                    word=word, quality=Quality.GOOD,
                    receipt=Receipt(source=entry.source, connection=1, message=round(at) * 100 + number),
                )
            )  # fmt: skip
        return made

    def second(self, tick: int) -> int:
        """One second of life; how many receipts it released."""
        self.pipeline.accept(self.readings(tick - 0.4), tick - 0.3)
        return len(self.pipeline.tick(tick + 0.6, (UP,)))

    def stored(self) -> list[int]:
        ticks, values, _ = self.reader.range("K-110", ["stage1.stage_ratio"], START, START + 10_000)
        return ticks[np.isfinite(values[:, 0])].tolist()

    def close(self) -> None:
        for part in (self.reader, self.journal_reader, self.store, self.journal):
            part.close()


@pytest.fixture(scope="module")
def site() -> SitePlan:
    return load_site(ROOT / "simulator" / "sites" / "ostmere.yaml")


@pytest.fixture(scope="module")
def cache(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("gas")


@pytest.fixture
def rig(site: SitePlan, tmp_path: Path, cache: Path) -> Iterator[Rig]:
    made = Rig(site, tmp_path, cache)
    made.pipeline.start(START + 0.6)
    yield made
    made.close()


def test_receipts_are_released_after_the_tick_that_holds_them(rig: Rig) -> None:
    assert rig.second(START + 1) == len(rig.plan.inputs)
    assert rig.stored() == [START + 1]


def test_a_store_that_refuses_loses_nothing_and_acknowledges_nothing(
    rig: Rig, caplog: pytest.LogCaptureFixture
) -> None:
    rig.second(START + 1)
    rig.store.full = True
    with caplog.at_level(logging.WARNING):
        assert [rig.second(START + t) for t in range(2, 12)] == [0] * 10
        rig.store.full = False
        assert rig.second(START + 12) == 11 * len(rig.plan.inputs)
    assert rig.stored() == [START + t for t in range(1, 13)]
    told = [r.getMessage() for r in caplog.records]
    assert len(told) == 2, told  # one line for each change of state
    assert "no room on the disk" in told[0]
    assert BACKLOG_TICKS >= 600


def test_a_clock_set_back_waits_is_counted_and_told_once(rig: Rig, caplog: pytest.LogCaptureFixture) -> None:
    rig.second(START + 100)
    before = rig.stored()
    with caplog.at_level(logging.WARNING):
        for t in (40.6, 41.6, 99.6):
            rig.pipeline.watch_clock(START + t)
            assert rig.pipeline.tick(START + t, (UP,)) == ()
        rig.pipeline.watch_clock(START + 100.6)
    assert rig.stored() == before
    assert rig.pipeline.clock_steps_back == 1
    assert [r.getMessage().split(":")[0] for r in caplog.records] == [
        "the clock was set back by 60 s",
        "the clock has caught up; live again",
    ]
    assert rig.second(START + 101) > 0


def test_seconds_slept_through_go_the_late_way(rig: Rig) -> None:
    rig.second(START + 1)
    rig.pipeline.accept([r for t in range(2, 301) for r in rig.readings(START + t - 0.4)], START + 300.6)
    receipts = rig.pipeline.commit_late()
    assert len(receipts) == 299 * len(rig.plan.inputs)
    assert set(range(START + 1, START + 301)) <= set(rig.stored())


def test_what_a_lost_link_kept_is_stored_and_never_alarms(rig: Rig) -> None:
    """Eighty hot seconds that come late are in the rows and raise nothing; live they do, after sixty."""

    def hot(at: float) -> list[Reading]:
        return [replace(r, value=160.0) if r.address.endswith("TT-1102") else r for r in rig.readings(at)]

    def temperatures(first: int, end: int) -> list[float]:
        _, values, _ = rig.reader.range("K-110", [name], START + first, START + end)
        return [float(v) for v in values[:, 0]]

    name = rig.plan.input_names()[[i.tag for i in rig.plan.inputs].index("TT-1102")]
    for t in range(1, 20):
        rig.second(START + t)
    for t in range(20, 100):
        rig.pipeline.tick(START + t + 0.6, (UP,))
    rig.pipeline.accept([r for t in range(20, 100) for r in hot(START + t - 0.4)], START + 99.7)
    rig.pipeline.commit_late()
    for t in range(100, 105):
        rig.second(START + t)
    assert temperatures(20, 100) == pytest.approx([160.0 + 273.15] * 80)
    assert EventKind.RAISED not in {e.kind for e in rig.journal_reader.events()}
    for t in range(105, 185):
        rig.pipeline.accept(hot(START + t - 0.4), START + t - 0.3)
        rig.pipeline.tick(START + t + 0.6, (UP,))
    raised = {e.alarm for e in rig.journal_reader.events() if e.kind is EventKind.RAISED}
    assert raised == {"discharge_temperature"}


def test_rows_stored_but_not_judged_are_judged_at_the_next_start(
    site: SitePlan, tmp_path: Path, cache: Path
) -> None:
    first = Rig(site, tmp_path, cache)
    first.pipeline.start(START + 0.6)
    first.second(START + 1)
    first.journal.close()  # the crash: the series is written, the journal is not
    first.pipeline.accept(first.readings(START + 1.6), START + 1.7)
    assert first.pipeline.tick(START + 2.6, (UP,)) == ()
    assert first.reader.last_tick("K-110") == START + 2
    assert first.journal_reader.last_tick("K-110") == START + 1
    first.close()
    second = Rig(site, tmp_path, cache)
    second.pipeline.start(START + 3.6)
    assert second.journal_reader.last_tick("K-110") == START + 2
    second.close()
