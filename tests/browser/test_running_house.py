"""From the wire to the page: plant, broker, OPC UA server, agent, store and browser, all real."""

import json
import re
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from agent.journal.sqlite import JournalReader
from agent.records import AlarmState, EventKind
from agent.siteplan.load import load_site
from agent.storage.sqlite_series import SeriesReader
from model.quantities import QUANTITIES
from model.units import format_value
from tests.browser.conftest import Opener, Served
from tests.system.house import House, house, quick_alarms, wait_for

expect = pytest.importorskip("playwright.sync_api", reason="playwright is not installed").expect

pytestmark = [pytest.mark.browser, pytest.mark.timeout(400)]

TICKS = 10
QUANTITIES_EACH = 20

# Everything between two ticks of the page, read in one go.
READ = """(unit) => [
    window.throwline.current().units[unit].tick,
    Object.fromEntries(
        Array.from(document.querySelectorAll('[data-live]'), (c) => [c.dataset.live, c.textContent])
    ),
]"""


@pytest.fixture(scope="module")
def running(tmp_path_factory: pytest.TempPathFactory) -> Iterator[House]:
    folder = tmp_path_factory.mktemp("house")
    with house(folder, site=quick_alarms(folder)) as built:
        built.broker()
        built.plant("--pace", "3", "--seed", "1002")
        built.agent()
        built.pages()
        reader = SeriesReader(built.data / "series.db")
        wait_for("store", (built.data / "series.db").exists)
        wait_for("both units", lambda: all(reader.last_tick(u) for u in ("K-110", "K-220")), 60)
        reader.close()
        yield built


@pytest.fixture
def served(running: House) -> Served:
    pages = next(p for p in running.processes if p.name == "pages")
    return Served(address=running.url, data=running.data, process=pages.child)


def test_numbers_on_the_page_are_those_of_the_store(open_page: Opener, running: House) -> None:
    """20 quantities over 10 ticks, at the quantity's decimals."""
    site = load_site(running.site)
    reader = SeriesReader(running.data / "series.db")
    screen = open_page("/unit/K-110")
    ready = "(t) => window.throwline?.current()?.units['K-110']?.tick > t"
    cell = screen.page.locator('[data-live="K-110/stage1.stage_ratio"]')
    expect(cell).to_have_text(re.compile(r"\d"), timeout=20_000)
    seen: dict[int, int] = {}
    while len(seen) < TICKS:
        screen.page.wait_for_function(ready, arg=max(seen, default=0), timeout=20_000)
        tick, cells = screen.page.evaluate(READ, "K-110")
        plan = site.unit("K-110")
        ((frame, row),) = reader.rows(
            "K-110", tick, tick + 1, inputs=plan.input_names(), results=plan.result_names()
        )
        values = dict(zip(plan.input_names(), frame.values.tolist(), strict=True))
        values |= dict(zip(plan.result_names(), row.values.tolist(), strict=True))
        checked = 0
        for key, text in cells.items():
            name = key.removeprefix("K-110/")
            if name not in values or name.endswith(".u") or name.partition(".")[2] not in QUANTITIES:
                continue
            q = QUANTITIES[name.partition(".")[2]]
            shown = format_value(
                values[name], q.display_unit, q.dimension, q.decimals, barometer_pa=site.barometer_pa
            )
            assert text == shown, (name, tick)
            checked += 1
        seen[tick] = checked
    reader.close()
    assert min(seen.values()) >= QUANTITIES_EACH, seen
    screen.watch.assert_clean()


def test_drawn_pin_load_reaches_the_stored_peaks(open_page: Opener, running: House) -> None:
    screen = open_page("/unit/K-110#cylinder=2")
    lines = screen.page.locator("#pin-load .scatterlayer path.js-line")
    expect(lines).to_have_count(3, timeout=30_000)
    drawn = lines.first.get_attribute("d") or ""
    assert len(re.findall(r"-?\d+(?:\.\d+)?,-?\d", drawn)) >= 300
    answer, trace = screen.page.evaluate(
        """async () => {
            const answer = await (await fetch('/api/curves/K-110/2')).json();
            const plot = document.querySelector('#pin-load .js-plotly-plot');
            return [answer, Array.from(plot.data.find((t) => t.name === 'load at the pin').y)];
        }"""
    )
    reader = SeriesReader(running.data / "series.db")
    names = ["cylinder2.pin_load_tension", "cylinder2.pin_load_compression"]
    _, values, _ = reader.range("K-110", names, answer["tick"] - 3, answer["tick"] + 1)
    reader.close()
    assert len(trace) >= 300
    # The trace is of one of the last ticks: its extremes lie within 1 % of what the store holds for them.
    tension, compression = values.min(axis=0), values.max(axis=0)
    assert 0.99 * tension[0] <= max(trace) * 1e3 <= 1.01 * compression[0]
    assert 0.99 * tension[1] <= -min(trace) * 1e3 <= 1.01 * compression[1]
    screen.watch.assert_clean()


def test_alarm_of_the_story_is_acknowledged_and_stays_so(open_page: Opener, running: House) -> None:
    screen = open_page("/alarms")
    page = screen.page
    alarm = page.locator("#alarm-list li").filter(has_text="Gas load in compression high")
    expect(alarm).to_have_count(1, timeout=120_000)
    expect(alarm).to_contain_text("active, not acknowledged")
    expect(alarm).to_contain_text("Raise the suction pressure or lower the discharge pressure")
    page.get_by_role("button", name=re.compile("^Acknowledge Gas load in compression")).click()
    page.get_by_label("Your name").fill("M. Aldersey")
    alarm.locator("select[name=reason]").select_option(index=1)
    alarm.locator("input[name=note]").fill("suction control called")
    page.keyboard.press("Enter")
    expect(alarm).to_contain_text("active, acknowledged", timeout=15_000)
    page.reload()
    expect(alarm).to_contain_text("active, acknowledged", timeout=20_000)
    journal = JournalReader(running.data / "journal.db")
    answered = [e for e in journal.events() if e.kind is EventKind.ACKNOWLEDGED]
    journal.close()
    assert [(e.unit, e.alarm, e.actor, e.state) for e in answered] == [
        ("K-110", "gas_load_compression", "M. Aldersey", AlarmState.ACKNOWLEDGED)
    ]
    assert "suction control called" in answered[0].reason
    screen.watch.assert_clean()


def test_reversal_is_lost_while_every_raw_tag_is_in_its_usual_range(running: House) -> None:
    """The story of K-220: the wrong ends are unloaded, and only the estimate shows it."""
    reader = SeriesReader(running.data / "series.db")
    journal = JournalReader(running.data / "journal.db")
    raised = wait_for(
        "the reversal alarm",
        lambda: [
            e for e in journal.events(unit="K-220") if e.alarm == "reversal" and e.kind is EventKind.RAISED
        ],
        120,
    )
    assert raised[0].subject == "cylinder4"
    plan = load_site(running.site).unit("K-220")
    _, values, quality = reader.range(
        "K-220", [i.name for i in plan.inputs if i.unit not in {"word", "switch"}], 0, int(time.time()) + 1
    )
    live = (quality <= 1).all(axis=1)
    spans = [(i.span_low, i.span_high) for i in plan.inputs if i.unit not in {"word", "switch"}]
    for column, (low, high) in zip(values[live].T, spans, strict=True):
        assert low < column.min()
        assert column.max() < high
    others = [e for e in journal.events(unit="K-220") if e.kind is EventKind.RAISED and e.alarm != "reversal"]
    assert others == []
    reader.close()
    journal.close()


def test_health_is_told_to_machines_too(running: House) -> None:
    health = running.get("/healthz")
    assert json.dumps(health)
    assert Path(running.data / "series.db").is_file()
