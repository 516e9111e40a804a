"""What a reader of a site file should know although nothing is wrong with it."""

import math
from collections.abc import Iterator, Mapping, Sequence

from agent.siteplan.plan import Source, UnitPlan
from agent.siteplan.subjects import spoken
from model import units
from model.machine import GasDomain
from model.quantities import LOWER_LIMITS, QUANTITIES, UPPER_LIMITS, Scope, series_name

_MISSED_SHARE = 0.3  # of an input's span outside the gas table before it is worth a word


def unit_notices(plan: UnitPlan) -> Iterator[str]:
    """Everything about one unit that is allowed and costs something."""
    for notice in (*_inputs_left_out(plan), *_steps(plan), *_table_ranges(plan)):
        yield f"{plan.id}: {notice}"


def unused_sources(sources: Mapping[str, Source], plans: Sequence[UnitPlan]) -> Iterator[str]:
    used = {i.source for plan in plans for i in plan.inputs}
    for name in sources:
        if name not in used:
            yield f"source {name}: no input reads it"


def limits_not_entered(plan: UnitPlan) -> tuple[tuple[str, str], ...]:
    """(subject, quantity) of every limit that could be entered and is not."""
    stages = tuple(s.subject for s in plan.unit.stages)
    cylinders = tuple(c.subject for c in plan.unit.cylinders)
    missing: list[tuple[str, str]] = []
    for key in (k for k in QUANTITIES if k in UPPER_LIMITS | LOWER_LIMITS):
        subjects = stages if QUANTITIES[key].scope is Scope.STAGE else cylinders
        missing.extend((s, key) for s in subjects if plan.unit.limit(s, key) is None)
    return tuple(missing)


def _inputs_left_out(plan: UnitPlan) -> Iterator[str]:
    names = plan.input_names()
    for stage in plan.unit.stages:
        if series_name(stage.subject, "discharge_temperature") not in names:
            what = f"no discharge temperature of {spoken(stage.subject)}"
            yield f"{what}: no residual and no margin of it, expected values only"
    rated_rpm = plan.unit.rated_speed_rad_s * 60 / math.tau
    if "unit.speed" not in names:
        yield f"no speed input: the rated speed of {rated_rpm:.4g} rpm is taken"
    if "unit.run_signal" not in names:
        yield "no run signal: running is judged by other inputs"
    if "unit.flow" not in names:
        yield "no measured flow: expected capacity has nothing to be compared with"


def _steps(plan: UnitPlan) -> Iterator[str]:
    if all(step.held_open or step.valve_closings for step in plan.unit.load_steps):
        yield "no load step has every end loaded"
    seen: dict[tuple[object, ...], str] = {}
    for step in plan.unit.load_steps:
        does = (step.held_open, step.pockets_open, step.pocket_positions, step.valve_closings)
        twin = seen.setdefault(does, step.word)
        if twin != step.word:
            yield f"load steps {twin} and {step.word} do the same to every end"


def _table_ranges(plan: UnitPlan) -> Iterator[str]:
    domain = plan.unit.domain
    for entry in plan.inputs:
        quantity = QUANTITIES[entry.quantity]
        bounds = _bounds(domain, quantity.dimension)
        if bounds is None:
            continue
        inside = min(bounds[1], entry.span_high) - max(bounds[0], entry.span_low)
        missed = 1 - max(inside, 0.0) / (entry.span_high - entry.span_low)
        if missed > _MISSED_SHARE:
            yield f"the gas ranges leave out {100 * missed:.0f} % of the span of {entry.tag} ({entry.name})"
    for limit in plan.unit.limits:
        if limit.quantity == "discharge_temperature" and limit.value > domain.high_temperature_k:
            shown = units.format_with_unit(limit.value, "degC", "temperature", 0)
            yield f"the gas temperature range ends below the limit of {shown} on {spoken(limit.subject)}"


def _bounds(domain: GasDomain, dimension: str) -> tuple[float, float] | None:
    if dimension == "pressure":
        return domain.low_pressure_pa, domain.high_pressure_pa
    if dimension == "temperature":
        return domain.low_temperature_k, domain.high_temperature_k
    return None
