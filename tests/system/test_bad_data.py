"""Garbage on the wire, and a wire that goes dead: seen on the store of a running agent."""

import json
import time
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta

import numpy as np
import pytest

from agent.records import LinkState, Quality, SourceStatus
from agent.siteplan.load import load_site
from agent.siteplan.plan import UnitPlan
from agent.storage.sqlite_series import SeriesReader
from tests.system.house import DEMO_SITE, House, Process, house, wait_for
from tests.system.publisher import STEADY, Publisher

RATIO = "stage1.stage_ratio"


def _now(shift_s: float = 0.0) -> str:
    return (datetime.now(UTC) + timedelta(seconds=shift_s)).isoformat()


def _garbage() -> list[bytes]:
    stamp = _now()
    return [
        b"",
        b"not json",
        b"\xff\xfe\x00garbage",
        b"null",
        b"17.5",
        b"[1, 2, 3]",
        b"{" * 5000,
        b'{"value": NaN, "time": "%s"}' % stamp.encode(),
        b'{"value": Infinity, "time": "%s"}' % stamp.encode(),
        json.dumps({"value": "29.0 barg", "time": stamp}).encode(),
        json.dumps({"value": True, "time": stamp}).encode(),
        json.dumps({"value": [29.0], "time": stamp}).encode(),
        json.dumps({"value": {"x": 1}, "time": stamp}).encode(),
        json.dumps({"value": 10**400, "time": stamp}).encode(),
        json.dumps({"value": 29.0}).encode(),
        json.dumps({"value": 29.0, "time": "yesterday"}).encode(),
        json.dumps({"value": 29.0, "time": None}).encode(),
        json.dumps({"value": 29.0, "time": _now(3600)}).encode(),
        json.dumps({"time": stamp}).encode(),
        json.dumps({"value": 29.0, "time": stamp, "quality": "marvellous"}).encode(),
        json.dumps({"value": 29.0, "time": stamp, "pad": "x" * 70_000}).encode(),
    ]


class Bench:
    """A house with a broker, an agent and a publisher; the OPC UA server does not exist."""

    def __init__(self, built: House) -> None:
        self.built = built
        self.plan: UnitPlan = load_site(DEMO_SITE).unit("K-110")
        self.broker: Process = built.broker()
        self.agent = built.agent()
        wait_for("store", (built.data / "series.db").exists)
        self.reader = SeriesReader(built.data / "series.db")
        self.publisher = Publisher(self.plan, built.wires.mqtt_port)

    def row(self, unit: str = "K-110") -> tuple[float, int]:
        """Newest stage ratio and its quality."""
        tick = self.reader.last_tick(unit)
        if tick is None:
            return float("nan"), int(Quality.NEVER)
        _, values, quality = self.reader.range(unit, [RATIO], tick, tick + 1)
        return (float(values[-1, 0]), int(quality[-1, 0])) if len(values) else (float("nan"), 255)

    def source(self, name: str) -> SourceStatus:
        return next(s for s in self.reader.sources() if s.source == name)

    def wait_evaluated(self, seconds: float = 40.0) -> None:
        wait_for("K-110 evaluated", lambda: self.row()[1] == Quality.GOOD, seconds)


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Bench]:
    with house(tmp_path_factory.mktemp("bad-data")) as built:
        made = Bench(built)
        yield made
        made.publisher.stop()
        made.reader.close()


def test_garbage_is_counted_and_never_becomes_a_number(bench: Bench) -> None:
    bench.wait_evaluated()
    first = bench.reader.last_tick("K-110")
    assert first is not None
    before = bench.source("field-bus").rejected
    sent = 0
    for tag in STEADY:
        for payload in _garbage():
            # A word tag takes any word, a switch takes true: what is good for one is garbage for another.
            if tag in {"UY-1101", "XS-1101"} and b'"value": ' in payload:
                continue
            bench.publisher.send(tag, payload)
            sent += 1
    wait_for("all counted", lambda: bench.source("field-bus").rejected - before >= sent)
    status = bench.source("field-bus")
    assert status.rejected - before == sent
    assert status.last_rejection
    assert bench.agent.running
    bench.wait_evaluated()
    last = bench.reader.last_tick("K-110")
    assert last is not None
    assert last > first
    for entry in bench.plan.inputs:
        _, values, _ = bench.reader.range("K-110", [entry.name], first, last + 1)
        seen = set(np.unique(values[np.isfinite(values)]).tolist())
        assert len(seen) == 1, f"{entry.tag} took {seen}"


def test_unit_without_its_source_is_not_evaluated(bench: Bench) -> None:
    """K-220's server never existed: its rows say so, and hold no number."""
    wait_for("K-220 rows", lambda: bench.reader.last_tick("K-220"))
    ratio, quality = bench.row("K-220")
    assert not Quality(quality).usable
    assert np.isnan(ratio)
    assert bench.source("control-system").state is not LinkState.UP


def test_lost_source_blinds_its_unit_within_15_seconds_and_it_comes_back_by_itself(bench: Bench) -> None:
    bench.wait_evaluated()
    port = bench.built.wires.mqtt_port
    bench.broker.kill()
    lost = time.monotonic()
    wait_for("not evaluated", lambda: not Quality(bench.row()[1]).usable, 15.0)
    blind_after = time.monotonic() - lost
    assert np.isnan(bench.row()[0])
    assert bench.agent.running
    bench.publisher.stop()
    bench.broker.start()
    wait_for("broker again", lambda: bench.source("field-bus").state is LinkState.UP, 60)
    bench.publisher = Publisher(bench.plan, port)
    bench.wait_evaluated(60)
    print(f"blind {blind_after:.1f} s after the broker was killed")
