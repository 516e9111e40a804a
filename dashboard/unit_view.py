"""One unit's part of the live blob: every number as the text to be shown, every blank with its reason.

Keys: ``values`` text by series name (a band under ``<series>.u``), ``faults`` place in the blob's table of
reasons by series name, ``notes`` a word beside a shown number, ``margins`` the worst of each kind.
"""

import math
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any
from zoneinfo import ZoneInfo

from agent.records import Quality, RunState
from agent.siteplan.plan import UnitPlan
from dashboard.margin_view import MarginView, margins, smallest, worst_of_kind
from dashboard.readings import Blindness, Onset, Row
from dashboard.trend import Line
from dashboard.wording import (
    NOT_EVALUATED,
    band,
    clock,
    number,
    quality_words,
    series_words,
    subject_words,
    unit_of,
    usable,
    with_unit,
)
from model.quantities import Quantity, split_series

NO_LIMIT = "no limit entered"
# Said by the state and by the unit's own words; as a number they would only be a code.
_SAID_IN_WORDS = frozenset({"run_state", "load_step", "run_signal"})


class Reasons:
    """The blob's table of reasons: each (word, why) once, numbers of one unit point at it."""

    def __init__(self) -> None:
        self.table: list[tuple[str, str]] = []
        self._places: dict[tuple[str, str], int] = {}

    def place(self, word: str, why: str) -> int:
        key = (word, why)
        if key not in self._places:
            self._places[key] = len(self.table)
            self.table.append(key)
        return self._places[key]


@dataclass(frozen=True, slots=True, kw_only=True)
class Scene:
    """What the words of one build have in common."""

    zone: ZoneInfo
    barometer_pa: float
    now: float


def empty_unit(plan: UnitPlan) -> dict[str, Any]:
    """A unit of which nothing is stored yet."""
    return {"id": plan.id, "name": plan.unit.name, "tick": None}


def unit_view(
    plan: UnitPlan, row: Row, blindness: Blindness, line: Line | None, *, scene: Scene, reasons: Reasons
) -> dict[str, Any]:
    teller = _Teller(blindness, scene)
    values, faults, notes = _numbers(row, teller, reasons)
    views = margins(plan, row)
    _margin_numbers(views, teller, reasons, values, faults)
    state, state_note = _state(row, teller)
    step, step_fault, step_why = _step(plan, row, teller)
    kinds = dict.fromkeys(v.of.key for v in views)
    worst = smallest(views)
    return {
        "id": plan.id,
        "name": plan.unit.name,
        "tick": row.tick,
        "state": state,
        "state_note": state_note,
        "step": step,
        "step_fault": step_fault,
        "step_why": step_why,
        "values": values,
        "faults": faults,
        "notes": notes,
        "margins": {kind: _margin(worst_of_kind(views, kind), teller) for kind in kinds},
        "smallest": _smallest(worst, views, teller),
        "line": _line(line, worst),
        "blind": blind_inputs(plan, row, teller),
    }


class _Teller:
    """Says when and why."""

    def __init__(self, blindness: Blindness, scene: Scene) -> None:
        self._blindness = blindness
        self.scene = scene

    def why(self, name: str, code: int) -> str:
        return _since(quality_words(code), self._blindness.since(name), self.scene)

    def number(self, quantity: Quantity, value: float) -> str:
        return number(quantity, value, barometer_pa=self.scene.barometer_pa)

    def band(self, quantity: Quantity, u: float) -> str:
        return band(quantity, u, barometer_pa=self.scene.barometer_pa)


def _since(words: str, onset: Onset | None, scene: Scene) -> str:
    if onset is None:
        return words
    at = clock(onset.tick, scene.zone, now=scene.now)
    return f"{words} since {at}" if onset.exact else f"{words} since before {at}"


def _numbers(
    row: Row, teller: _Teller, reasons: Reasons
) -> tuple[dict[str, str], dict[str, int], dict[str, str]]:
    values: dict[str, str] = {}
    faults: dict[str, int] = {}
    notes: dict[str, str] = {}
    for name, code in row.quality.items():
        try:
            _, quantity, is_uncertainty = split_series(name)
        except KeyError:
            continue  # a series of a newer store: these pages have no words for it
        if quantity.key in _SAID_IN_WORDS or quantity.key.endswith("_margin"):
            continue
        if is_uncertainty:
            text = teller.band(quantity, row.value(name)) if row.usable(name.removesuffix(".u")) else ""
            if text:
                values[name] = text
        elif row.usable(name):
            values[name] = teller.number(quantity, row.value(name))
            if code == Quality.UNCERTAIN:
                notes[name] = quality_words(code)
        else:
            faults[name] = reasons.place(NOT_EVALUATED, teller.why(name, _spoken(code)))
    return values, faults, notes


def _spoken(code: int) -> int:
    """A blank that claims to be good has no number behind it: say that, not "good"."""
    return int(Quality.INPUT_MISSING) if usable(code) else code


def _margin_numbers(
    views: Sequence[MarginView],
    teller: _Teller,
    reasons: Reasons,
    values: dict[str, str],
    faults: dict[str, int],
) -> None:
    for view in views:
        if view.evaluated:
            values[view.series] = teller.number(view.margin, view.left)
        elif view.code == Quality.NO_LIMIT:
            faults[view.series] = reasons.place(NO_LIMIT, "")
        else:
            faults[view.series] = reasons.place(NOT_EVALUATED, teller.why(view.series, view.code))


def _state(row: Row, teller: _Teller) -> tuple[str, str]:
    name = "unit.run_state"
    if not row.usable(name):
        code = _spoken(row.code(name))
        return RunState.NOT_KNOWN.words, teller.why(name, code)
    try:
        return RunState(round(row.value(name))).words, ""
    except ValueError:
        return RunState.NOT_KNOWN.words, "a state these pages do not know"


def _step(plan: UnitPlan, row: Row, teller: _Teller) -> tuple[str, str | None, str]:
    name = "unit.load_step"
    if row.usable(name):
        index = round(row.value(name))
        for step in plan.unit.load_steps:
            if step.index == index:
                return step.word, None, ""
    code = _spoken(row.code(name))
    return "", "not known", teller.why(name, code)


def _percent(share: float) -> float | None:
    return round(100 * share, 1) if math.isfinite(share) else None


def _margin(view: MarginView, teller: _Teller) -> dict[str, Any]:
    limit = view.limit
    shown: dict[str, Any] = {
        "where": subject_words(view.subject),
        "unit": unit_of(view.margin),
        "limit": f"limit {with_unit(teller.number(view.of, limit.value), view.of)}" if limit else NO_LIMIT,
        "source": f"{limit.source}, entered by {limit.entered_by}" if limit else "",
        "fault": None,
    }
    if not view.evaluated:
        no_limit = view.code == Quality.NO_LIMIT
        shown["fault"] = NO_LIMIT if no_limit else NOT_EVALUATED
        shown["why"] = "" if no_limit else teller.why(view.series, view.code)
        return shown
    return shown | {
        "left": teller.number(view.margin, view.left),
        "left_with_unit": with_unit(teller.number(view.margin, view.left), view.margin),
        "band": teller.band(view.margin, view.standard_uncertainty),
        "now": with_unit(teller.number(view.of, view.now), view.of),
        "share": _percent(view.share),
        "band_share": _percent(view.band_share),
    }


def _smallest(worst: MarginView | None, views: Sequence[MarginView], teller: _Teller) -> dict[str, Any]:
    if worst is not None:
        return _margin(worst, teller) | {
            "words": f"{worst.of.words}, {subject_words(worst.subject)}",
            "subject": worst.subject,
            "series": worst.series,
        }
    limited = [v for v in views if v.code != Quality.NO_LIMIT]
    blank = {"share": None, "band_share": None, "subject": "", "words": "", "series": ""}
    if not limited:
        return blank | {"fault": NO_LIMIT, "why": "not for one of its quantities"}
    reason = Counter(v.code for v in limited).most_common(1)[0][0]
    first = next(v for v in limited if v.code == reason)
    return blank | {"fault": NOT_EVALUATED, "why": teller.why(first.series, reason)}


def _line(line: Line | None, worst: MarginView | None) -> dict[str, Any] | None:
    """The line in percent of the span from rest to the limit, as that span is now."""
    if line is None or worst is None or not worst.left:
        return None
    scale = worst.share / worst.left * 100
    points = [None if math.isnan(v) else round(v * scale) for v in line.values.tolist()]
    seen = [p for p in points if p is not None]
    if not seen:
        return None
    words = (
        f"{worst.of.words}, {subject_words(worst.subject)}, share left over the last {line.span}: "
        f"lowest {min(seen)} percent, highest {max(seen)}, now {seen[-1]}"
    )
    return {"span": line.span, "points": points, "words": words}


def blind_inputs(plan: UnitPlan, row: Row, teller: _Teller) -> list[str]:
    """Inputs without a usable reading: tag, what it is, why and since when."""
    lines = []
    for entry in plan.inputs:
        if row.usable(entry.name):
            continue
        why = teller.why(entry.name, _spoken(row.code(entry.name)))
        lines.append(f"{entry.tag} {series_words(entry.name)}: {why}")
    return lines


def rank(view: dict[str, Any], alarms: Sequence[dict[str, Any]]) -> tuple[float, ...]:
    """Sort key, worst first: open alarms, then what cannot be judged, then the smallest share left."""
    own = [a for a in alarms if a["unit"] == view["id"]]
    highest = max((a["priority"] for a in own), default=-1)
    if view["tick"] is None:
        return (-highest, 0.0, 0.0)
    stands = view["state"] == RunState.STOPPED.words
    share = view["smallest"]["share"]
    blind = bool(view["blind"]) or (share is None and not stands)
    # A machine at rest has nothing to lose: it comes last among the quiet ones.
    return (-highest, 1.0 if not blind else 0.5, 101.0 if share is None else share)
