"""Numbers, times and places in words: the only place of this room that makes text of them."""

import math
from datetime import datetime
from zoneinfo import ZoneInfo

from agent.alarms.catalogue import COVERAGE_FACTOR
from agent.records import Quality
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, Kind, Quantity, Scope
from model.units import conversion, format_value, unit_label

NOT_EVALUATED = "not evaluated"
BAND = COVERAGE_FACTOR  # half width of a band in standard uncertainties, as the alarms use it


def number(quantity: Quantity, value_si: float, *, barometer_pa: float) -> str:
    """The value at the quantity's own decimals, without its unit."""
    return format_value(
        value_si, quantity.display_unit, quantity.dimension, quantity.decimals, barometer_pa=barometer_pa
    )


def unit_of(quantity: Quantity) -> str:
    return unit_label(quantity.display_unit)


def with_unit(text: str, quantity: Quantity) -> str:
    """A number and its unit; a degree sign stands close."""
    unit = unit_of(quantity)
    return f"{text}{unit}" if unit == "°" else f"{text} {unit}".rstrip()


def band(quantity: Quantity, standard_uncertainty_si: float, *, barometer_pa: float) -> str:
    """Half width of the band, e.g. "± 1.4"; empty where it is not known.

    A difference of two values has no offset, so only the scale of the display unit counts.
    """
    if not math.isfinite(standard_uncertainty_si):
        return ""
    to = conversion(quantity.display_unit, quantity.dimension, barometer_pa=barometer_pa)
    half = BAND * standard_uncertainty_si
    shown = abs(to.from_si(half) - to.from_si(0.0))
    # A band of nought would claim what nobody measured: show it with the digit that carries it.
    decimals = max(quantity.decimals, 1) if 0 < shown < 1 else quantity.decimals
    return f"± {shown:.{decimals}f}"


def subject_words(subject: str) -> str:
    """Words of a subject: "stage 1" of "stage1"."""
    head = subject.rstrip("0123456789")
    tail = subject[len(head) :]
    return f"{head} {tail}" if tail else head


def series_words(name: str) -> str:
    """Words of a series: "suction pressure, stage 1" of "stage1.suction_pressure"."""
    subject, _, key = name.removesuffix(UNCERTAINTY_SUFFIX).partition(".")
    quantity = QUANTITIES[key]
    return quantity.words if quantity.scope is Scope.UNIT else f"{quantity.words}, {subject_words(subject)}"


def margin_of(quantity: Quantity) -> Quantity:
    """The quantity whose margin this is."""
    if quantity.kind is not Kind.MARGIN:
        raise KeyError(quantity.key)
    return QUANTITIES[quantity.key.removesuffix("_margin")]


def clock(at: float, zone: ZoneInfo, *, now: float) -> str:
    """Site time; the day is named unless it is today."""
    there, today = datetime.fromtimestamp(at, zone), datetime.fromtimestamp(now, zone)
    if there.date() == today.date():
        return f"{there:%H:%M:%S}"
    return f"{there.day} {there:%b %H:%M:%S}"


def quality_words(code: int) -> str:
    """A code of a newer store is said, not hidden."""
    try:
        return Quality(code).words
    except ValueError:
        return f"reason {code}, not known to these pages"


def usable(code: int) -> bool:
    return code <= Quality.UNCERTAIN
