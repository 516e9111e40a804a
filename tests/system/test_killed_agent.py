"""The agent is killed without warning and started again, ten times over: nothing confirmed is lost."""

import json
import math
import random
import sqlite3
import time
from collections import defaultdict
from pathlib import Path

import numpy as np
import pytest

from agent.journal.fold import states
from agent.journal.sqlite import JournalReader
from agent.records import AlarmState, EventKind, Quality
from agent.siteplan.load import load_site
from agent.siteplan.plan import Input, SitePlan
from agent.storage.sqlite_series import SeriesReader
from tests.system.house import House, house, quick_alarms, wait_for

KILLS = 10


@pytest.fixture(scope="module")
def quick_site(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return quick_alarms(tmp_path_factory.mktemp("site"))


def _ledger(path: Path) -> dict[str, list[tuple[float, float | str]]]:
    """What the broker confirmed to the publisher: by topic, (source time, value) in order of time."""
    confirmed: dict[str, list[tuple[float, float | str]]] = defaultdict(list)
    for line in path.read_text(encoding="utf-8").splitlines():
        entry = json.loads(line)
        confirmed[entry["topic"]].append((entry["time"], entry["value"]))
    return {topic: sorted(entries, key=lambda e: e[0]) for topic, entries in confirmed.items()}


def _as_stored(plan_input: Input, value: float | str | bool, words: dict[str, int]) -> float:
    if plan_input.unit == "word":
        return float(words[str(value)])
    return float(np.float32(float(value) * plan_input.scale + plan_input.offset))


def _lost(
    site: SitePlan, reader: SeriesReader, ledger: dict[str, list[tuple[float, float | str]]]
) -> tuple[int, list[str]]:
    """Count what should be stored, and name what is not: each confirmed value, or the one that came after it
    in the same second, stands in the row of its tick."""
    plan = site.unit("K-110")
    words = {s.word: s.index for s in plan.unit.load_steps}
    checked, lost = 0, []
    for entry in plan.inputs:
        due = {math.ceil(at): value for at, value in ledger[entry.address]}  # later ones of a tick win
        ticks, values, _ = reader.range("K-110", [entry.name], min(due), max(due) + 1)
        stored = dict(zip(ticks.tolist(), values[:, 0].tolist(), strict=True))
        for tick, value in due.items():
            checked += 1
            if stored.get(tick) != _as_stored(entry, value, words):
                lost.append(f"{entry.tag} at {tick}: confirmed {value}, stored {stored.get(tick)}")
    return checked, lost


def _run(built: House, kills: int, seed: int) -> Path:
    ledger = built.folder / "ledger.jsonl"
    built.mosquitto()
    agent = built.agent()
    # The first start makes the broker keep a session; from then on it queues while the agent is down.
    wait_for("first rows", (built.data / "series.db").exists)
    reader = SeriesReader(built.data / "series.db")
    built.plant("--pace", "4", "--seed", str(seed), "--ledger", str(ledger))
    wait_for("live rows", lambda: _live(reader), 60)
    dice = random.Random(seed)
    for _ in range(kills):
        time.sleep(dice.uniform(0.3, 4.0))
        agent.kill()
        agent.start()
    wait_for("live again", lambda: _live(reader), 60)
    time.sleep(3.0)
    built.processes[-1].stop()  # the plant
    time.sleep(3.0)
    agent.stop()
    reader.close()
    return ledger


def _live(reader: SeriesReader) -> bool:
    last = reader.last("K-110")
    if last is None:
        return False
    frame, row = last
    return bool(np.all(frame.quality == Quality.GOOD)) and abs(time.time() - row.tick) < 3


@pytest.mark.mosquitto
def test_nothing_confirmed_is_lost_and_no_event_comes_twice(tmp_path: Path, quick_site: Path) -> None:
    seed = 1001
    with house(tmp_path, site=quick_site) as built:
        ledger = _ledger(_run(built, KILLS, seed))
        site = load_site(quick_site)
        with sqlite3.connect(built.data / "series.db") as check:
            assert check.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        reader = SeriesReader(built.data / "series.db")
        checked, lost = _lost(site, reader, ledger)
        assert checked > 200
        assert lost == []
        journal = JournalReader(built.data / "journal.db")
        events = journal.events()
        assert len({(e.unit, e.alarm, e.tick, e.kind) for e in events}) == len(events)
        _alternates(events)
        assert any(e.kind is EventKind.RAISED for e in events), (
            "the story raised nothing: the test would prove little"
        )
        # One more start: the agent takes its states from the journal and says nothing it has said before.
        before = states(events)
        agent = built.agent()
        wait_for("one more tick", lambda: (reader.last_tick("K-110") or 0) > max(e.tick for e in events))
        agent.stop()
        again = journal.events()
        raised_twice = [e for e in again[len(events) :] if e.kind is EventKind.RAISED]
        assert raised_twice == []
        after = states(again)
        assert {k: s.state for k, s in after.items()} == {k: s.state for k, s in before.items()}
        reader.close()
        journal.close()


def _alternates(events: tuple) -> None:
    """An alarm that is up cannot be raised, one that is down cannot clear."""
    up: dict[tuple[str, str], bool] = defaultdict(bool)
    for event in events:
        key = (event.unit, event.alarm)
        if event.kind is EventKind.RAISED:
            assert not up[key], f"{key} raised twice"
            assert event.state is AlarmState.UNACKNOWLEDGED
            up[key] = True
        elif event.kind is EventKind.CLEARED:
            assert up[key], f"{key} cleared without being raised"
            up[key] = False
