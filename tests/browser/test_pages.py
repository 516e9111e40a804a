"""The pages in a real browser, over a store written in real time."""

import json
import re
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from agent.records import Quality
from agent.storage.sqlite_series import SeriesReader
from model.quantities import QUANTITIES
from model.units import format_value
from tests.browser.conftest import Opener, Plant, Screen, Served
from tests.dashboard.written_store import WrittenStore, site

expect = pytest.importorskip("playwright.sync_api", reason="playwright is not installed").expect

pytestmark = pytest.mark.browser

PATHS = ("/", "/unit/K-110", "/unit/K-220", "/alarms", "/guide", "/guide/alarm-list")
FRESH = re.compile(r"data \d+\.\d s old")

# One script reads blob tick and cells together: between two ticks of the page nothing changes.
READ_CELLS = """() => [
    window.throwline.current() && window.throwline.current().units[UNIT].tick,
    Object.fromEntries(
        Array.from(document.querySelectorAll('[data-live]'), (c) => [c.dataset.live, c.textContent])
    ),
]"""


def wait_fresh(screen: Screen) -> None:
    expect(screen.page.locator("#data-age")).to_have_text(FRESH, timeout=20_000)


def stored(served: Served, unit: str, tick: int) -> dict[str, float]:
    reader = SeriesReader(served.data / "series.db")
    columns = reader.columns(unit)
    frame, row = reader.frame(unit, tick), reader.row(unit, tick)
    reader.close()
    assert frame is not None
    assert row is not None
    names = [c.name for c in (*columns.inputs, *columns.results)]
    return dict(zip(names, (*frame.values.tolist(), *row.values.tolist()), strict=True))


def test_without_a_store_the_pages_say_no_data(open_page: Opener) -> None:
    screen = open_page("/")
    expect(screen.page.locator("#data-age")).to_have_text("no data yet")
    expect(screen.page.locator("#site-rows tr")).to_have_count(3)
    expect(screen.page.locator("#site-rows tr").first).to_contain_text("no data yet")
    screen.page.goto(screen.watch.address + "/unit/K-110")
    expect(screen.page.locator("#curves-blind")).to_have_text("not evaluated: no data yet")
    screen.watch.assert_clean()


@pytest.mark.parametrize("path", PATHS)
def test_a_page_is_quiet_and_asks_nobody_else(open_page: Opener, plant: Plant, path: str) -> None:
    screen = open_page(path)
    wait_fresh(screen)
    ticks = {screen.page.evaluate("window.throwline.current().tick") for _ in range(1)}
    screen.page.wait_for_function(
        "(t) => window.throwline.current().tick > t + 1", arg=max(ticks), timeout=10_000
    )
    if path.startswith("/unit"):
        expect(screen.page.locator("#pin-load .scatterlayer path.js-line")).to_have_count(3, timeout=20_000)
    expect(screen.page.locator("footer.foot")).to_contain_text("Advisory only")
    expect(screen.page.locator(".invented-mark")).to_be_visible()
    screen.watch.assert_clean()


def test_numbers_on_the_page_are_the_stored_ones(open_page: Opener, plant: Plant, served: Served) -> None:
    screen = open_page("/unit/K-220")
    wait_fresh(screen)
    ticks: set[int] = set()
    checked: set[str] = set()
    while len(ticks) < 5:
        last = max(ticks, default=0)
        screen.page.wait_for_function("(t) => window.throwline.current()?.units['K-220'].tick > t", arg=last)
        tick, cells = screen.page.evaluate(READ_CELLS.replace("UNIT", "'K-220'"))
        ticks.add(tick)
        values = stored(served, "K-220", tick)
        for key, text in cells.items():
            name = key.partition("/")[2]
            if name.endswith(".u") or name not in values:
                continue
            q = QUANTITIES[name.partition(".")[2]]
            shown = format_value(
                values[name], q.display_unit, q.dimension, q.decimals, barometer_pa=site().barometer_pa
            )
            assert text == shown, (name, tick)
            checked.add(name)
    assert len(checked) >= 40
    screen.watch.assert_clean()


def test_the_curves_are_drawn_and_reach_the_stored_peaks(
    open_page: Opener, plant: Plant, served: Served
) -> None:
    screen = open_page("/unit/K-220#cylinder=4")
    wait_fresh(screen)
    lines = screen.page.locator("#pin-load .scatterlayer path.js-line")
    expect(lines).to_have_count(3, timeout=20_000)
    for box in ("#pv-head", "#pv-crank"):
        expect(screen.page.locator(f"{box} .scatterlayer path.js-line")).to_have_count(1)
    # what is drawn, not what was meant: the vertices of the path itself
    drawn = lines.first.get_attribute("d") or ""
    assert len(re.findall(r"-?\d+(?:\.\d+)?,-?\d", drawn)) >= 300
    expect(screen.page.locator("#pin-load .shapelayer path")).not_to_have_count(0)
    trace = json.loads(
        screen.page.evaluate(
            "JSON.stringify(document.querySelector('#pin-load .js-plotly-plot').data"
            ".find((t) => t.name === 'load at the pin').y)"
        )
    )
    answer: dict[str, Any] = screen.page.evaluate("fetch('/api/curves/K-220/4').then((r) => r.json())")
    values = stored(served, "K-220", answer["tick"])
    assert len(trace) >= 300
    # the trace on screen may be two ticks older than the row: the noise of the inputs lies far below 1 %
    assert max(trace) * 1000 == pytest.approx(values["cylinder4.pin_load_tension"], rel=0.01)
    assert -min(trace) * 1000 == pytest.approx(values["cylinder4.pin_load_compression"], rel=0.01)
    expect(screen.page.locator("#pin-load")).to_have_attribute("aria-label", re.compile("kN tension at"))
    screen.watch.assert_clean()


def test_choosing_a_cylinder_draws_that_one_by_keyboard(open_page: Opener, plant: Plant) -> None:
    screen = open_page("/unit/K-220#cylinder=1")
    wait_fresh(screen)
    words = screen.page.locator("#pin-load-words")
    expect(words).to_contain_text("tension", timeout=20_000)
    first = words.text_content()
    screen.page.locator("#cylinder").focus()
    screen.page.keyboard.press("ArrowDown")
    screen.page.keyboard.press("ArrowDown")
    expect(screen.page.locator("#cylinder")).to_have_value("3")
    expect(words).not_to_have_text(first or "", timeout=10_000)
    assert screen.page.evaluate("location.hash") == "#cylinder=3"
    screen.watch.assert_clean()


def test_stale_appears_when_the_store_is_no_longer_written(open_page: Opener, plant: Plant) -> None:
    screen = open_page("/")
    wait_fresh(screen)
    expect(screen.page.locator("#stale-banner")).to_be_hidden()
    plant.stop()
    expect(screen.page.locator("#data-age")).to_have_text(re.compile("STALE"), timeout=10_000)
    expect(screen.page.locator("#stale-banner")).to_contain_text("the agent has stored nothing newer")
    expect(screen.page.locator("#site-rows tr").first).to_contain_text("STALE")
    screen.watch.assert_clean()


def test_stale_appears_when_the_server_is_gone_and_goes_by_itself(
    open_page: Opener, plant: Plant, served: Served
) -> None:
    screen = open_page("/alarms")
    wait_fresh(screen)
    screen.page.context.set_offline(True)
    expect(screen.page.locator("#stale-banner")).to_contain_text(
        "no answer from the pages' server", timeout=15_000
    )
    screen.page.context.set_offline(False)
    wait_fresh(screen)
    expect(screen.page.locator("#stale-banner")).to_be_hidden()


def test_a_lost_input_blinds_its_numbers_and_says_why(open_page: Opener, plant: Plant) -> None:
    plant.lost = {("K-220", "stage2.discharge_pressure"): Quality.STALE}
    screen = open_page("/unit/K-220")
    wait_fresh(screen)
    ratio = screen.page.locator('[data-live="K-220/stage2.stage_ratio"]')
    expect(ratio).to_contain_text("not evaluated", timeout=10_000)
    expect(ratio).to_have_attribute("title", re.compile(r"an input is missing since \d\d:\d\d:\d\d"))
    expect(screen.page.locator("[data-footnotes]").first).to_contain_text("an input is missing since")
    expect(screen.page.locator("#blind-inputs")).to_contain_text(
        "PT-2204 discharge pressure, stage 2: stale since"
    )
    # the neighbours go on
    expect(screen.page.locator('[data-live="K-220/stage1.stage_ratio"]')).to_have_text(
        re.compile(r"\d\.\d{3}")
    )
    plant.lost = {}
    expect(ratio).to_have_text(re.compile(r"\d\.\d{3}"), timeout=10_000)
    expect(screen.page.locator("[data-footnotes]").first).to_be_empty()


def test_an_alarm_is_acknowledged_by_keyboard_and_stays_so(open_page: Opener, plant: Plant) -> None:
    plant.store.alarm(plant.store.journal.last_tick("K-220") or 1_790_000_000)
    screen = open_page("/alarms")
    page = screen.page
    alarm = page.locator("#alarm-list li")
    expect(alarm).to_have_count(1, timeout=20_000)
    expect(alarm).to_contain_text("active, not acknowledged")
    expect(alarm).to_contain_text("Return to the last permitted load step")
    expect(page.locator("#alarm-counts")).to_contain_text("1 to acknowledge")
    opener = page.get_by_role("button", name=re.compile("^Acknowledge Load reversal"))
    opener.focus()
    page.keyboard.press("Enter")
    expect(page.get_by_label("Your name")).to_be_focused()
    page.keyboard.type("R. Fennimore")
    typed_at = page.evaluate("window.throwline.current().tick")
    page.wait_for_function("(t) => window.throwline.current().tick > t + 1", arg=typed_at)
    expect(page.get_by_label("Your name")).to_have_value("R. Fennimore")  # a tick does not take it away
    page.keyboard.press("Tab")
    page.keyboard.press("ArrowDown")
    page.keyboard.press("Tab")
    page.keyboard.type("bushing checked last week")
    page.keyboard.press("Enter")
    expect(alarm).to_contain_text("active, acknowledged", timeout=10_000)
    expect(opener).to_be_hidden()
    journal = page.locator("#journal-rows tr").first
    expect(journal).to_contain_text("R. Fennimore", timeout=10_000)
    expect(journal).to_contain_text("Seen, acting on it now: bushing checked last week")
    page.reload()
    expect(page.locator("#alarm-list li")).to_contain_text("active, acknowledged", timeout=20_000)
    screen.watch.assert_clean()


def test_a_request_without_a_reason_is_not_sent(open_page: Opener, plant: Plant) -> None:
    plant.store.alarm(1_790_000_000)
    screen = open_page("/alarms")
    page = screen.page
    page.get_by_role("button", name=re.compile("^Acknowledge Load")).click(timeout=20_000)
    page.get_by_label("Your name").fill("A")
    page.get_by_role("button", name="Acknowledge", exact=True).click()
    expect(page.get_by_label("Reason")).to_have_js_property("validity.valid", value=False)
    page.keyboard.press("Escape")
    expect(page.locator("form.acknowledge")).to_be_hidden()
    screen.watch.assert_clean()


def test_the_site_page_fits_and_the_whole_way_goes_by_keyboard(open_page: Opener, plant: Plant) -> None:
    screen = open_page("/")
    page = screen.page
    wait_fresh(screen)
    expect(page.locator("#site-rows tr")).to_have_count(3)
    assert page.evaluate("document.documentElement.scrollHeight") <= 768
    assert page.evaluate("document.documentElement.scrollWidth") <= 1366
    # the thin unit first; the box puts the plant's order back
    expect(page.locator("#site-rows tr").first).to_contain_text("K-110")
    expect(page.locator("#site-rows tr").first).to_contain_text("gas load, compression")
    expect(page.locator("#site-rows svg[role=img]").first).to_have_attribute(
        "aria-label", re.compile("lowest")
    )
    page.keyboard.press("Tab")
    expect(page.locator(".skip")).to_be_focused()
    reached = []
    for _ in range(14):
        page.keyboard.press("Tab")
        reached.append(page.evaluate("document.activeElement.textContent.trim().slice(0, 12)"))
    assert [w for w in ("Site", "K-110", "K-220", "K-330", "Alarms", "Guide") if w in reached] == [
        "Site", "K-110", "K-220", "K-330", "Alarms", "Guide",
    ]  # fmt: skip
    page.get_by_label("Plant order").check()
    expect(page.locator("#site-rows tr").first).to_contain_text("K-110")
    page.locator("#site-rows tr").first.get_by_role("link").focus()
    page.keyboard.press("Enter")
    expect(page.get_by_role("heading", level=1)).to_contain_text("K-110", timeout=20_000)
    screen.watch.assert_clean()


@pytest.mark.parametrize("path", ["/", "/unit/K-220", "/alarms", "/guide/words"])
def test_a_phone_does_not_scroll_sideways(open_page: Opener, plant: Plant, path: str) -> None:
    screen = open_page(path, width=390, height=844)
    wait_fresh(screen)
    assert screen.page.evaluate("document.documentElement.scrollWidth") <= 390
    screen.watch.assert_clean()


def test_pages_that_hold_another_site_file_say_so(open_page: Opener, tmp_path: Path, gas_cache: Path) -> None:
    """The agent was started with an edited file, the pages were not."""
    edited = replace(site(), digest="edited", text=site().text + "\n# edited\n")
    with WrittenStore(data=tmp_path / "data", gas_cache=gas_cache, plan=edited) as store:
        store.ticks(1_790_000_000, 2)
        screen = open_page("/")
        expect(screen.page.locator("#agent-note")).to_contain_text(
            "another version of the site file", timeout=20_000
        )
        screen.watch.assert_clean()


def test_dark_is_dark_in_the_charts_too(open_page: Opener, plant: Plant) -> None:
    screen = open_page("/unit/K-110", dark=True)
    line = screen.page.locator("#pin-load .scatterlayer path.js-line").first
    expect(line).to_have_css("stroke", "rgb(227, 230, 232)", timeout=20_000)  # the sheet's --ink in dark
    expect(screen.page.locator("body")).to_have_css("background-color", "rgb(21, 23, 26)")
    screen.watch.assert_clean()


def test_the_first_load_of_the_site_page_is_small(open_page: Opener, plant: Plant, tmp_path: Path) -> None:
    screen = open_page("/guide")
    page = screen.page
    session = page.context.new_cdp_session(page)
    session.send("Network.enable")
    session.send("Network.clearBrowserCache")
    sizes: list[float] = []
    session.on("Network.loadingFinished", lambda e: sizes.append(e["encodedDataLength"]))
    page.goto(screen.watch.address + "/")
    wait_fresh(screen)
    assert sum(sizes) <= 400_000
    assert sum(sizes) > 100_000  # it was counted at all
