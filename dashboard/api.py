"""The questions the pages ask over HTTP. Everything is read-only but one: asking the agent to acknowledge."""

import uuid
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from flask import Blueprint, Response, jsonify, request

from agent.alarms.catalogue import CATALOGUE
from agent.clock import Clock
from agent.database import JOURNAL_FILE, StoreError
from agent.journal.sqlite import RequestWriter
from agent.records import EventKind, Request
from agent.siteplan.plan import SitePlan
from dashboard.access import denied
from dashboard.curves import Asked, CurveBook
from dashboard.live import STALE_AFTER_S, Blob, LiveFeed

LONGEST_NAME: Final = 60
LONGEST_REASON: Final = 200


class AskError(ValueError):
    """What was asked cannot be passed on; the words are for the person who asked."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Doors:
    """What the answers are made from."""

    site: SitePlan
    data: Path
    clock: Clock
    feed: LiveFeed
    curves: CurveBook


def blueprint(doors: Doors) -> Blueprint:
    api = Blueprint("api", __name__)
    requests = RequestWriter(doors.data / JOURNAL_FILE)

    @api.get("/api/live")
    def live() -> Response:
        response = _answer(doors.feed.live())
        # The body is shared and may be a moment old: what belongs to this very answer stands in its head.
        response.headers["Throwline-Now"] = f"{doors.feed.now():.3f}"
        response.headers["Throwline-Next-Ms"] = str(doors.feed.milliseconds_to_next())
        return response

    @api.get("/api/journal")
    def journal() -> Response:
        return _answer(doors.feed.journal())

    @api.get("/api/curves/<unit_id>/<int:number>")
    def curves(unit_id: str, number: int) -> Response:
        return _curves(doors, unit_id, number)

    @api.get("/healthz")
    def health() -> Response:
        ages = doors.feed.ages()
        fresh = bool(ages) and all(age is not None and age < STALE_AFTER_S for age in ages.values())
        shown = {unit: None if age is None else round(age, 1) for unit, age in ages.items()}
        response = jsonify(fresh=fresh, data_age_s=shown, stale_after_s=STALE_AFTER_S)
        response.status_code = 200 if fresh else 503
        return response

    @api.post("/api/acknowledge")
    def acknowledge() -> Response:
        try:
            asked = _request(doors, request.get_json(silent=True))
            requests.ask(asked)
        except AskError as error:
            return denied(400, str(error))
        except StoreError as error:
            return denied(503, f"The request could not be stored: the journal {error.words}.")
        response = jsonify(request=asked.id)
        response.status_code = 202
        return response

    return api


def _answer(blob: Blob) -> Response:
    if request.if_none_match.contains(blob.etag):
        response = Response(status=304)
    else:
        zipped = "gzip" in request.headers.get("Accept-Encoding", "").lower()
        response = Response(blob.packed if zipped else blob.body, mimetype="application/json")
        if zipped:
            response.headers["Content-Encoding"] = "gzip"
    response.set_etag(blob.etag)
    response.headers["Vary"] = "Accept-Encoding"
    response.headers["Cache-Control"] = "no-cache"
    return response


def _curves(doors: Doors, unit_id: str, number: int) -> Response:
    if unit_id not in {p.id for p in doors.site.units}:
        return denied(404, "There is no such unit.")
    row = doors.feed.row(unit_id)
    if row is None:
        return denied(404, "There is no data of this unit yet.")
    stored = doors.feed.sites.site(row.configuration)
    if stored is None or unit_id not in {p.id for p in stored.units}:
        return denied(409, "The site file that computed this row cannot be read any more.")
    plan = stored.unit(unit_id)
    try:
        found = plan.unit.cylinder(number)
    except KeyError:
        return denied(404, "There is no such cylinder.")
    stage, cylinder = found
    asked = Asked(plan=plan, stage=stage, cylinder=cylinder, row=row, barometer_pa=stored.barometer_pa)
    return _answer(doors.curves.answer(asked, now=doors.clock.now()))


def _request(doors: Doors, body: Any) -> Request:
    if not isinstance(body, dict):
        raise AskError("The body is not a JSON object.")
    unit, alarm = _text(body, "unit", 60), _text(body, "alarm", 100)
    if unit not in {p.id for p in doors.site.units}:
        raise AskError("There is no such unit.")
    if alarm not in CATALOGUE:
        raise AskError("There is no such alarm.")
    return Request(
        id=uuid.uuid4().hex,
        at=doors.clock.now(),
        unit=unit,
        alarm=alarm,
        kind=EventKind.ACKNOWLEDGED,
        actor=_text(body, "name", LONGEST_NAME),
        reason=_text(body, "reason", LONGEST_REASON),
    )


def _text(body: dict[str, Any], key: str, longest: int) -> str:
    """One line of printable text; what a person typed is stored as typed, or refused."""
    value = body.get(key)
    if not isinstance(value, str) or not value.strip():
        raise AskError(f"The {key} is missing.")
    text = value.strip()
    if len(text) > longest:
        raise AskError(f"The {key} is longer than {longest} characters.")
    if not text.isprintable():
        raise AskError(f"The {key} holds characters that cannot be printed.")
    return text
