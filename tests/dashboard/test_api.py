"""The answers behind the pages, over a store written by the real writers."""

import gzip
import json
import math
from dataclasses import replace
from typing import Any

import pytest
from dash import Dash
from flask.testing import FlaskClient

from agent.clock import HandClock
from agent.journal.sqlite import JournalReader
from agent.records import Quality
from dashboard.app import create_app, feed_of
from model.quantities import QUANTITIES
from model.units import format_value
from tests.dashboard.conftest import NOON
from tests.dashboard.written_store import BAR, WrittenStore, site

OWN = {"Origin": "http://localhost", "Sec-Fetch-Site": "same-origin"}


def blob(client: FlaskClient) -> dict[str, Any]:
    answer = client.get("/api/live")
    assert answer.status_code == 200
    found = answer.get_json()
    assert isinstance(found, dict)
    return found


def test_without_stores_the_blob_says_no_data(
    tmp_path_factory: pytest.TempPathFactory, clock: HandClock
) -> None:
    app = create_app(site=site(), data=tmp_path_factory.mktemp("empty") / "none", clock=clock)
    client = app.server.test_client()
    found = blob(client)
    assert {u["tick"] for u in found["units"].values()} == {None}
    assert found["tick"] is None
    assert found["alarms"] == []
    assert client.get("/healthz").status_code == 503
    assert client.get("/api/curves/K-110/1").status_code == 404
    asked = {"unit": "K-110", "alarm": "reversal", "name": "A", "reason": "B"}
    answer = client.post("/api/acknowledge", json=asked, headers=OWN)
    assert answer.status_code == 503
    assert "not there" in answer.get_json()["error"]
    feed_of(app).close()


def test_numbers_are_the_stored_ones_at_their_decimals(client: FlaskClient, store: WrittenStore) -> None:
    rows = store.ticks(NOON, 3)
    found = blob(client)
    checked = 0
    for plan in store.plan.units:
        values = dict(zip(plan.result_names(), rows[plan.id].values.tolist(), strict=True))
        shown = found["units"][plan.id]["values"]
        for name, value in values.items():
            if name.endswith((".u", ".p")) or name == "unit.run_state" or math.isnan(value):
                continue
            q = QUANTITIES[name.partition(".")[2]]
            expected = format_value(
                value, q.display_unit, q.dimension, q.decimals, barometer_pa=store.plan.barometer_pa
            )
            assert shown[name] == expected, name
            checked += 1
    assert checked > 100


def test_the_blob_is_small_and_shared(client: FlaskClient, store: WrittenStore) -> None:
    store.ticks(NOON - 600, 600)
    store.ticks(NOON)
    answer = client.get("/api/live", headers={"Accept-Encoding": "gzip"})
    assert answer.headers["Content-Encoding"] == "gzip"
    # two units, alarms, sources and the lines included
    assert len(answer.data) <= 2 * 2000
    assert json.loads(gzip.decompress(answer.data)) == blob(client)


def test_an_unchanged_blob_is_not_sent_again(
    client: FlaskClient, store: WrittenStore, clock: HandClock
) -> None:
    store.ticks(NOON)
    first = client.get("/api/live")
    clock.advance(0.3)
    second = client.get("/api/live", headers={"If-None-Match": first.headers["ETag"]})
    assert second.status_code == 304
    assert second.data == b""
    # what belongs to the answer itself still comes
    assert float(second.headers["Throwline-Now"]) == pytest.approx(NOON + 0.8)
    store.ticks(NOON + 1)
    third = client.get("/api/live", headers={"If-None-Match": first.headers["ETag"]})
    assert third.status_code == 200
    assert third.get_json()["tick"] == NOON + 1


def test_a_browser_is_told_when_to_ask_again(
    client: FlaskClient, store: WrittenStore, clock: HandClock
) -> None:
    store.ticks(NOON)
    client.get("/api/live")
    clock.advance(0.4)
    assert 600 < int(client.get("/api/live").headers["Throwline-Next-Ms"]) < 800
    clock.advance(30)
    assert int(client.get("/api/live").headers["Throwline-Next-Ms"]) == 500


def test_a_lost_input_is_told_with_why_and_since_when(client: FlaskClient, store: WrittenStore) -> None:
    store.ticks(NOON - 100, 60)
    lost = {("K-220", "stage2.discharge_pressure"): Quality.STALE}
    store.ticks(NOON - 40, 41, lost=lost)
    found = blob(client)
    unit = found["units"]["K-220"]
    word, why = found["reasons"][unit["faults"]["stage2.stage_ratio"]]
    assert word == "not evaluated"
    assert why.startswith("an input is missing since ")
    assert len(unit["blind"]) == 1
    assert unit["blind"][0].startswith("PT-2204 discharge pressure, stage 2: stale since ")
    assert not [n for n in unit["faults"] if n.startswith(("stage1", "stage3.stage_ratio"))]
    # the onset is the first blind tick: 40 s before noon's tick
    assert why.rpartition(" ")[2][-2:] == f"{(NOON - 40) % 60:02d}"


def test_a_stopped_machine_has_no_old_numbers(client: FlaskClient, store: WrittenStore) -> None:
    stopped = {"unit.run_signal": 0.0, "unit.speed": 0.0}
    store.ticks(NOON - 300, 301, changes={"K-110": stopped})
    found = blob(client)
    unit = found["units"]["K-110"]
    assert unit["state"] == "stopped"
    assert unit["smallest"]["fault"] == "not evaluated"
    assert "machine not running" in unit["smallest"]["why"]
    assert not [n for n in unit["values"] if n.startswith("cylinder")]
    assert found["worst_first"] == ["K-220", "K-330", "K-110"]


def test_health_follows_the_age_of_the_data(
    client: FlaskClient, store: WrittenStore, clock: HandClock
) -> None:
    store.ticks(NOON, units=("K-110",))
    assert client.get("/healthz").status_code == 503  # the others have no row
    store.ticks(NOON, units=("K-220", "K-330"))
    assert client.get("/healthz").status_code == 200
    clock.advance(4.4)
    assert client.get("/healthz").status_code == 200
    clock.advance(0.2)
    answer = client.get("/healthz")
    assert answer.status_code == 503
    assert answer.get_json()["data_age_s"]["K-220"] == pytest.approx(5.1)


def test_a_clock_that_was_set_back_does_not_make_old_data_fresh(
    client: FlaskClient, store: WrittenStore, clock: HandClock
) -> None:
    store.ticks(NOON)
    clock.step(-3600)
    answer = client.get("/healthz")
    assert answer.status_code == 503
    assert answer.get_json()["data_age_s"]["K-110"] == pytest.approx(3599.4, abs=1)


@pytest.mark.parametrize(("unit", "cylinder"), [("K-110", 2), ("K-220", 1), ("K-220", 4)])
@pytest.mark.parametrize("step", [0.0, 1.0])
def test_drawn_extremes_are_the_stored_peaks(
    client: FlaskClient, store: WrittenStore, unit: str, cylinder: int, step: float
) -> None:
    rows = store.ticks(NOON, changes={unit: {"unit.load_step": step}})
    answer = client.get(f"/api/curves/{unit}/{cylinder}").get_json()
    assert answer["fault"] is None
    assert answer["tick"] == NOON
    figure = answer["figures"]["pin-load"]
    drawn = next(t for t in figure["data"] if t["name"] == "load at the pin")["y"]
    names = store.plan.unit(unit).result_names()
    stored = dict(zip(names, rows[unit].values.tolist(), strict=True))
    assert len(drawn) >= 300
    assert max(drawn) * 1000 == pytest.approx(stored[f"cylinder{cylinder}.pin_load_tension"], rel=0.01)
    assert -min(drawn) * 1000 == pytest.approx(stored[f"cylinder{cylinder}.pin_load_compression"], rel=0.01)


def test_curves_of_a_blind_frame_are_not_drawn(client: FlaskClient, store: WrittenStore) -> None:
    store.ticks(NOON, lost={("K-110", "stage1.suction_pressure"): Quality.BAD})
    answer = client.get("/api/curves/K-110/1").get_json()
    assert answer["fault"] == ["not evaluated", "an input is missing"]
    assert answer["figures"] == {}


def test_curves_of_what_is_not_there_are_refused(client: FlaskClient, store: WrittenStore) -> None:
    store.ticks(NOON)
    assert client.get("/api/curves/K-110/9").status_code == 404
    assert client.get("/api/curves/K-999/1").status_code == 404


def test_acknowledging_appends_a_request_and_only_the_agent_makes_it_an_event(
    client: FlaskClient, store: WrittenStore
) -> None:
    store.ticks(NOON)
    store.alarm(NOON)
    body = {"unit": "K-220", "alarm": "reversal", "name": " M. Aldersey ", "reason": "Seen, acting on it now"}
    answer = client.post("/api/acknowledge", json=body, headers=OWN)
    assert answer.status_code == 202
    (request,) = JournalReader(store.data / "journal.db").requests()
    assert request.id == answer.get_json()["request"]
    assert (request.unit, request.alarm, request.actor) == ("K-220", "reversal", "M. Aldersey")
    assert request.at == NOON + 0.5
    (alarm,) = blob(client)["alarms"]
    assert alarm["unacknowledged"]
    assert store.answer(NOON + 1) == 1
    (alarm,) = blob(client)["alarms"]
    assert not alarm["unacknowledged"]
    assert alarm["state"] == "active, acknowledged"
    newest = client.get("/api/journal").get_json()["events"][0]
    assert (newest["what"], newest["who"], newest["request"]) == ("acknowledged", "M. Aldersey", request.id)


@pytest.mark.parametrize(
    "change",
    [
        {"unit": "K-999"},
        {"alarm": "no such alarm"},
        {"name": ""},
        {"name": "   "},
        {"name": "x" * 61},
        {"name": "two\nlines"},
        {"name": 7},
        {"reason": ""},
        {"reason": "x" * 201},
        {"reason": None},
        {"unit": ["K-110"]},
    ],
)
def test_a_request_that_makes_no_sense_is_refused(
    client: FlaskClient, store: WrittenStore, change: dict[str, Any]
) -> None:
    store.ticks(NOON)
    body = {"unit": "K-220", "alarm": "reversal", "name": "A", "reason": "B"} | change
    answer = client.post("/api/acknowledge", json=body, headers=OWN)
    assert answer.status_code == 400
    assert answer.get_json()["error"]
    assert JournalReader(store.data / "journal.db").requests() == ()


@pytest.mark.parametrize("body", ["[]", "7", "null", "{", ""])
def test_a_body_that_is_no_object_is_refused(client: FlaskClient, body: str) -> None:
    answer = client.post("/api/acknowledge", data=body, content_type="application/json", headers=OWN)
    assert answer.status_code == 400


def test_the_most_urgent_unit_comes_first_then_the_smallest_share(
    client: FlaskClient, store: WrittenStore
) -> None:
    store.ticks(NOON, changes={"K-110": {"stage1.suction_pressure": 24 * BAR}})
    found = blob(client)
    assert found["worst_first"] == ["K-110", "K-220", "K-330"]
    assert found["plant_order"] == ["K-110", "K-220", "K-330"]
    store.alarm(NOON)
    assert blob(client)["worst_first"] == ["K-220", "K-110", "K-330"]


def test_pages_of_another_site_file_say_so(store: WrittenStore, clock: HandClock) -> None:
    store.ticks(NOON)
    other = replace(store.plan, digest="another")
    app = create_app(site=other, data=store.data, clock=clock)
    client = app.server.test_client()
    assert "another version of the site file" in blob(client)["note"]
    # the curves are computed with the stored text all the same
    assert client.get("/api/curves/K-110/1").get_json()["fault"] is None
    feed_of(app).close()


def test_the_feed_polls_by_itself_once_started(app: Dash, store: WrittenStore) -> None:
    feed = feed_of(app)
    store.ticks(NOON)
    feed.start()
    first = feed.live().etag
    store.ticks(NOON + 1)
    deadline = 50
    while feed.live().etag == first and deadline:
        feed._stop.wait(0.1)
        deadline -= 1
    assert json.loads(feed.live().body)["tick"] == NOON + 1
