"""Whether a scenario file fits its site and lies within what the invented plant is built for."""

import math
from collections.abc import Mapping, Sequence
from types import MappingProxyType
from typing import Final

import numpy as np

from agent.siteplan.plan import Input, SitePlan
from model.machine import Unit
from model.quantities import QUANTITIES
from model.units import conversion, parse, split
from simulator.course import Course, UnitCourse
from simulator.faults import FaultError, FaultKind, Faults
from simulator.instrument_faults import InstrumentFaultKind
from simulator.ostmere import USUAL
from simulator.scenario_text import NUMBERS, Change, FaultText, InstrumentText, ScenarioText

_DIFFERENCES: Final = frozenset({InstrumentFaultKind.BIAS, InstrumentFaultKind.SPIKES})
_OF_NUMBERS: Final = _DIFFERENCES | {InstrumentFaultKind.WRONG_SPAN}

# What the vessels, the gas law and the coolers of this plant bear (invented).
_RANGES: Final[Mapping[str, tuple[str, str]]] = MappingProxyType(
    {
        "suction_header_pressure": ("0.5 bara", "400 bara"),
        "discharge_header_pressure": ("0.5 bara", "400 bara"),
        "suction_temperature": ("-40 degC", "120 degC"),
        "cooling_water": ("-20 degC", "80 degC"),
        "jacket_water": ("0 degC", "120 degC"),
        "ambient": ("-60 degC", "60 degC"),
        "first_recycle": ("0 %", "100 %"),
        "final_recycle": ("0 %", "100 %"),
        "saturation": ("0 %", "100 %"),
    }
)
_SPEEDS: Final = (0.3, 1.2)  # of the rated speed
_LEAST_RATIO: Final = 1.05  # of the headers; they breathe by half a percent
_BAR: Final = 1e5


def misfits(text: ScenarioText, site: SitePlan) -> list[str]:
    """What the file says of units, steps, places, tags and sources that the site does not have."""
    units = {u.id: u.unit for u in site.units}
    said: list[str] = []
    everything: tuple[tuple[str, Sequence[Change | FaultText | InstrumentText]], ...] = (
        ("changes", text.changes),
        ("faults", text.faults),
        ("instruments", text.instruments),
    )
    for kind, entries in everything:
        said += [
            f"{kind}[{i}]: unit: {e.unit!r} is no unit of this site; known: {', '.join(units)}"
            for i, e in enumerate(entries)
            if e.unit not in units
        ]
    if said:
        return said
    for i, change in enumerate(text.changes):
        said += [f"changes[{i}]: {fault}" for fault in _misfits_of(change, units[change.unit])]
    for i, fault in enumerate(text.faults):
        try:
            Faults(present=(fault.value(),)).check(units[fault.unit])
            _check_recycle(fault, units[fault.unit])
        except (FaultError, ValueError) as error:
            said.append(f"faults[{i}]: {error}")
    for i, entry in enumerate(text.instruments):
        try:
            instrument_size(entry, site)
        except (ValueError, KeyError) as error:
            said.append(f"instruments[{i}]: {error}")
    said += [
        f"links[{i}]: source: {link.source!r} is no source of this site; known: {', '.join(site.sources)}"
        for i, link in enumerate(text.links)
        if link.source not in site.sources
    ]
    return said


def header_faults(courses: Mapping[str, UnitCourse]) -> list[str]:
    """Where a story puts the discharge header at or below the suction header, by unit."""
    said = []
    for unit, course in courses.items():
        if unit not in USUAL:
            continue
        suction, discharge = (
            course.numbers.get(name, Course()) for name in ("suction_pressure_pa", "discharge_pressure_pa")
        )
        at = _bends(suction, discharge)
        low = suction.at(at, USUAL[unit].suction_pressure_pa)
        high = discharge.at(at, USUAL[unit].discharge_pressure_pa)
        crossed = np.flatnonzero(high < _LEAST_RATIO * low)
        if len(crossed):
            i = crossed[0]
            said.append(
                f"changes: {unit}: after {at[i]:.0f} s the discharge header is at {high[i] / _BAR:.1f} bara, "
                f"less than 5 % above the suction header at {low[i] / _BAR:.1f} bara"
            )
    return said


def _bends(*courses: Course) -> np.ndarray[tuple[int], np.dtype[np.float64]]:
    """Every instant at which one of the courses begins or ends a leg, and just before."""
    legs = [leg for course in courses for leg in course.legs]
    at = np.array([0.0, *(x for leg in legs for x in (leg.start_s, leg.start_s + leg.over_s))])
    return np.sort(np.concatenate((at, np.nextafter(at, -math.inf))))


def _misfits_of(change: Change, unit: Unit) -> list[str]:
    words = [s.word for s in unit.load_steps]
    if change.variable == "load_step" and change.to not in words:
        return [f"to: {change.to!r} is no load step of {unit.id}; known: {', '.join(words)}"]
    if change.variable == "first_recycle" and len(unit.stages) == 1:
        return [f"variable: {unit.id} has one stage and no first recycle; its final_recycle is the only one"]
    if change.variable == "speed":
        low, high = (share * unit.rated_speed_rad_s for share in _SPEEDS)
        words = [f"{100 * share:.0f} %" for share in _SPEEDS]
        if not low <= float(str(change.to)) <= high:
            return [f"to: speed is not within {' to '.join(words)} of the rated speed of {unit.id}"]
    if change.variable in _RANGES:
        texts = _RANGES[change.variable]
        low, high = (parse(text, NUMBERS[change.variable][1]) for text in texts)
        if not low <= float(str(change.to)) <= high:
            return [f"to: {change.variable} is not within {' to '.join(texts)}, what this plant bears"]
    return []


def _check_recycle(fault: FaultText, unit: Unit) -> None:
    if fault.fault is FaultKind.FIRST_RECYCLE_PASSING and len(unit.stages) == 1:
        raise ValueError(f"fault: {unit.id} has one stage and no first recycle that could pass")


def instrument_size(entry: InstrumentText, site: SitePlan) -> float:
    """Size of an instrument's fault: a difference in SI, a factor, or 1 and 0 for yes and no.

    Raises
    ------
    ValueError
        The text does not fit the fault or the tag.
    """
    tag = _tag(entry, site)
    if entry.fault in _OF_NUMBERS and tag.unit == "switch":
        raise ValueError(f"fault: {tag.tag} is a switch and has no {entry.fault}")
    if entry.fault in _DIFFERENCES:
        if not isinstance(entry.to, str):
            raise ValueError(f"to: expected a difference with a unit, such as '1 bar', got {entry.to!r}")
        return _difference(entry.to, tag)
    if entry.fault is InstrumentFaultKind.WRONG_SPAN:
        factor = entry.to
        if isinstance(factor, bool) or not isinstance(factor, float) or not 0.0 < factor < math.inf:
            raise ValueError(f"to: expected a factor such as 1.05, got {factor!r}")
        return factor
    if not isinstance(entry.to, bool):
        raise ValueError(f"to: expected true or false, got {entry.to!r}")  # noqa: TRY004 - one kind of error
    if entry.over:
        raise ValueError(f"over: {entry.fault} comes at once, it has no ramp")
    return float(entry.to)


def _difference(text: str, tag: Input) -> float:
    """A difference such as ``-1 bar``: offsets of the unit do not count."""
    dimension = QUANTITIES[tag.quantity].dimension
    try:
        number, unit = split(text.strip().removeprefix("-"))
        unit = {"bar": "bara", "C": "degC"}.get(unit, unit)
        scale = conversion(unit, dimension, barometer_pa=0.0)
    except ValueError as error:
        raise ValueError(f"to: {text!r} is no difference of {tag.tag}, in {tag.unit}: {error}") from None
    size = scale.to_si(number) - scale.to_si(0.0)
    return -size if text.strip().startswith("-") else size


def _tag(entry: InstrumentText, site: SitePlan) -> Input:
    unit = site.unit(entry.unit)
    measured = [i for i in unit.inputs if i.unit != "word"]
    found = next((i for i in measured if i.tag == entry.tag), None)
    if found is None:
        known = ", ".join(i.tag for i in measured)
        raise ValueError(f"tag: {entry.unit} has no instrument {entry.tag!r}; it has: {known}")
    return found
