"""What is left before each entered limit, ready to be said."""

import math
from collections.abc import Iterable
from dataclasses import dataclass

from agent.records import Quality
from agent.siteplan.plan import UnitPlan
from dashboard.readings import Row
from dashboard.wording import BAND, margin_of
from model.machine import Limit
from model.margins import FULL_REVERSAL, share_left
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, Kind, Quantity, Scope, series_name


@dataclass(frozen=True, slots=True, kw_only=True)
class MarginView:
    """One margin at one tick, in SI."""

    margin: Quantity  # e.g. pin_load_tension_margin
    of: Quantity  # e.g. pin_load_tension
    subject: str
    left: float
    now: float
    limit: Limit | None
    standard_uncertainty: float  # nan if not known
    share: float  # of the span from rest to the limit, nan if not evaluated
    band_share: float
    code: int

    @property
    def series(self) -> str:
        return series_name(self.subject, self.margin.key)

    @property
    def evaluated(self) -> bool:
        return math.isfinite(self.share)


def margins(plan: UnitPlan, row: Row) -> tuple[MarginView, ...]:
    """Every margin of the unit, in the order of the glossary."""
    subjects = {
        Scope.STAGE: [s.subject for s in plan.unit.stages],
        Scope.CYLINDER: [c.subject for c in plan.unit.cylinders],
        Scope.UNIT: ["unit"],
    }
    return tuple(
        _view(plan, row, quantity, subject)
        for quantity in QUANTITIES.values()
        if quantity.kind is Kind.MARGIN
        for subject in subjects[quantity.scope]
    )


def smallest(views: Iterable[MarginView]) -> MarginView | None:
    """The one with the least share left; None if none can be judged."""
    judged = [v for v in views if v.evaluated]
    return min(judged, key=lambda v: v.share) if judged else None


def worst_of_kind(views: Iterable[MarginView], of_key: str) -> MarginView:
    """The worst of one kind. One that cannot be judged comes first only if none can."""
    same = [v for v in views if v.of.key == of_key]
    return smallest(same) or next((v for v in same if v.code != Quality.NO_LIMIT), same[0])


def _view(plan: UnitPlan, row: Row, margin: Quantity, subject: str) -> MarginView:
    of = margin_of(margin)
    now_name, margin_name = series_name(subject, of.key), series_name(subject, margin.key)
    limit = plan.unit.limit(subject, of.key)
    now, left, u = row.value(now_name), row.value(margin_name), _uncertainty(plan, row, of, now_name)
    code = row.code(margin_name)
    if limit is None:
        code = int(Quality.NO_LIMIT)
    elif math.isnan(left) and code <= Quality.UNCERTAIN:
        code = int(Quality.INPUT_MISSING)
    rest = _rest(row, of, subject)
    judged = limit is not None and row.usable(margin_name)
    share = share_left(of.key, now, limit.value, rest) if judged and limit is not None else math.nan
    span = abs(limit.value - rest) if limit is not None else math.nan
    return MarginView(
        margin=margin, of=of, subject=subject, left=left, now=now, limit=limit, standard_uncertainty=u,
        share=float(share), band_share=BAND * u / span if span > 0 else math.nan, code=code,
    )  # fmt: skip


def _rest(row: Row, of: Quantity, subject: str) -> float:
    """Where the quantity stands far from trouble: the other end of the bar."""
    if of.dimension == "temperature":
        return row.value(series_name(subject, "suction_temperature"))
    return FULL_REVERSAL.get(of.key, 0.0)


def _uncertainty(plan: UnitPlan, row: Row, of: Quantity, name: str) -> float:
    """Standard uncertainty of the quantity; of a measured one by its transmitter's limit of error."""
    if of.kind is not Kind.MEASURED:
        return row.value(name + UNCERTAINTY_SUFFIX)
    entry = plan.input(name)
    return math.nan if entry is None or entry.accuracy <= 0 else entry.accuracy / math.sqrt(3)
