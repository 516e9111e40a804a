"""From a reading to a number in SI with a quality: the one place where a plant value is believed or not."""

import math

import numpy as np

from agent.records import Quality, Reading
from agent.siteplan.plan import SWITCH, WORD, Input, UnitPlan

SPAN_TOLERANCE = 0.02  # share of the span; beyond it a transmitter is broken, not precise

_NO_NUMBER = float("nan")


def verdict(plan: UnitPlan, entry: Input, reading: Reading) -> tuple[float, Quality]:
    """Value in SI, rounded to what the store keeps, and quality; NaN wherever it is not usable."""
    if not reading.quality.usable:
        return _NO_NUMBER, reading.quality
    if entry.unit == WORD:
        return _word(plan, reading)
    if reading.value is None:
        return _NO_NUMBER, Quality.BAD
    if entry.unit == SWITCH:
        return _switch(reading)
    with np.errstate(over="ignore"):  # what float32 cannot hold becomes infinite and is refused below
        value = float(np.float32(reading.value * entry.scale + entry.offset))
    if not math.isfinite(value):
        return _NO_NUMBER, Quality.BAD
    return _in_span(entry, value, reading.quality)


def _word(plan: UnitPlan, reading: Reading) -> tuple[float, Quality]:
    if reading.word is None:
        return _NO_NUMBER, Quality.BAD
    for step in plan.unit.load_steps:
        if step.word == reading.word:
            return float(step.index), reading.quality
    return _NO_NUMBER, Quality.UNKNOWN_WORD


def _switch(reading: Reading) -> tuple[float, Quality]:
    if reading.value not in (0.0, 1.0):
        return _NO_NUMBER, Quality.BAD
    return float(reading.value), reading.quality


def _in_span(entry: Input, value: float, quality: Quality) -> tuple[float, Quality]:
    """Never clamps: a value outside the span is no value."""
    slack = SPAN_TOLERANCE * (entry.span_high - entry.span_low)
    if entry.span_low - slack <= value <= entry.span_high + slack:
        return value, quality
    return _NO_NUMBER, Quality.OUT_OF_SPAN
