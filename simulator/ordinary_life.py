"""Ordinary life of the invented site over a year and more: what wanders, is ordered, breaks and is mended.

Without a scenario a history tells this: headers that wander over days, gas that grows heavier and lighter,
nights and weekends at the half step, a few stops, and faults that grow and are repaired, two of them at once.
"""

import zlib
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np

from model.machine import Side
from simulator.course import Course, FaultCourse, Growth, InstrumentCourse, Leg, UnitCourse
from simulator.faults import FaultKind
from simulator.gas_data import Floats
from simulator.instrument_faults import InstrumentFaultKind
from simulator.weather import DAY_S

HOUR_S: Final = 3600.0
_WAVES: Final = 8


@dataclass(frozen=True, slots=True, kw_only=True)
class Habits:
    """How far the boundary of a unit wanders; shares of the usual value unless a unit is named."""

    suction: float
    discharge: float
    suction_k: float  # K per kelvin of the soil
    speed: float = 0.0  # largest share by which a driver of variable speed is slowed
    heavier: Mapping[str, float] | None = None  # the heaviest gas; the lightest is the nameplate's


_NATURAL_GAS: Final = MappingProxyType(
    {
        "methane": 0.870, "ethane": 0.067, "propane": 0.023, "n-butane": 0.007, "nitrogen": 0.018,
        "carbon dioxide": 0.015,
    }
)  # fmt: skip
HABITS: Final[Mapping[str, Habits]] = MappingProxyType(
    {
        "K-110": Habits(suction=0.03, discharge=0.012, suction_k=0.5, speed=0.10, heavier=_NATURAL_GAS),
        "K-220": Habits(
            suction=0.015,
            discharge=0.008,
            suction_k=0.25,
            heavier=MappingProxyType(
                {"hydrogen": 0.880, "methane": 0.085, "ethane": 0.018, "propane": 0.006, "nitrogen": 0.011}
            ),
        ),
        "K-330": Habits(suction=0.03, discharge=0.012, suction_k=0.45, heavier=_NATURAL_GAS),
    }
)
QUIET: Final = Habits(suction=0.0, discharge=0.0, suction_k=0.0)


def slow_wave(words: str, time: Floats, shortest_days: float, longest_days: float) -> Floats:
    """A wander between about -1 and 1, a function of the instant and of the words alone."""
    chance = np.random.default_rng(zlib.crc32(words.encode()))
    steps = (np.arange(_WAVES) + chance.uniform(0.0, 1.0, _WAVES)) / _WAVES
    periods = shortest_days * DAY_S * (longest_days / shortest_days) ** steps
    phases = chance.uniform(0.0, 2.0 * np.pi, _WAVES)
    total = np.zeros_like(time)
    for period, phase in zip(periods, phases, strict=True):
        total += np.cos(2.0 * np.pi * time / period + phase)
    # a soft bound, so that no seed leaves the range a table is made for by chance
    return np.asarray(np.tanh(total / np.sqrt(_WAVES)))


def ordinary_course(unit: str, seed: int, half_step: str, length_s: float) -> UnitCourse:
    """Orders and faults of one unit; a shorter history sees the beginning of the same life."""
    chance = np.random.default_rng([seed, zlib.crc32(unit.encode())])
    stops = _stops(chance, length_s)
    legs: dict[str, tuple[FaultCourse, ...]] = {
        "K-110": (
            _grown(chance, 40, 45, 0.0011, FaultKind.DISCHARGE_VALVE_LEAK, cylinder=1, side=Side.HEAD),
            _grown(chance, 230, 80, 0.0005, FaultKind.PACKING_LEAK, cylinder=2),
        ),
        "K-220": (
            _grown(chance, 90, 130, 0.45, FaultKind.COOLER_FOULING, stage=1, growth=Growth.LINEAR),
            _grown(chance, 150, 40, 0.0011, FaultKind.SUCTION_VALVE_LEAK, cylinder=3, side=Side.HEAD),
        ),
        "K-330": (_grown(chance, 180, 70, 0.0011, FaultKind.RING_LEAK, cylinder=3),),
    }
    drifts = {
        "K-220": (_drift(chance, 260, 50, 0.6e5, "PT-2203"),),
        "K-330": (_drift(chance, 60, 40, 1.5, "TT-3303"),),
    }
    return UnitCourse(
        running=tuple(sorted(stops)),
        load_steps=_half_spells(chance, half_step, length_s),
        faults=legs.get(unit, ()),
        instruments=drifts.get(unit, ()),
    )


def _stops(chance: np.random.Generator, length_s: float) -> list[tuple[float, bool]]:
    """A stop every two months or so, of some hours to some days."""
    found: list[tuple[float, bool]] = []
    at = float(chance.uniform(10.0, 50.0)) * DAY_S
    while at < length_s:
        lasts = float(np.exp(chance.uniform(np.log(3.0), np.log(60.0)))) * HOUR_S
        found += [(at, False), (at + lasts, True)]
        at += lasts + float(chance.uniform(30.0, 90.0)) * DAY_S
    return found


def _half_spells(chance: np.random.Generator, half: str, length_s: float) -> tuple[tuple[float, str], ...]:
    found: list[tuple[float, str]] = []
    at = float(chance.uniform(3.0, 9.0)) * DAY_S
    while at < length_s:
        lasts = float(chance.uniform(5.0, 40.0)) * HOUR_S
        found += [(at, half), (at + lasts, "100")]
        at += lasts + float(chance.uniform(4.0, 16.0)) * DAY_S
    return tuple(found)


def _legs(chance: np.random.Generator, day: float, grows: float, size: float, growth: Growth) -> Course:
    """Grows from about a day of the story on, stays for a while, then is mended."""
    start = (day + float(chance.uniform(-8.0, 8.0))) * DAY_S
    over = grows * float(chance.uniform(0.85, 1.15)) * DAY_S
    mended = start + over + float(chance.uniform(3.0, 12.0)) * DAY_S
    to = size * float(chance.uniform(0.8, 1.1))
    return Course(
        legs=(Leg(start_s=start, to=to, over_s=over, growth=growth), Leg(start_s=mended, to=0.0, over_s=0.0))
    )


def _grown(
    chance: np.random.Generator,
    day: float,
    grows: float,
    size: float,
    kind: FaultKind,
    *,
    stage: int | None = None,
    cylinder: int | None = None,
    side: Side | None = None,
    growth: Growth = Growth.EXPONENTIAL,
) -> FaultCourse:
    course = _legs(chance, day, grows, size, growth)
    return FaultCourse(kind=kind, course=course, stage=stage, cylinder=cylinder, side=side)


def _drift(chance: np.random.Generator, day: float, grows: float, size: float, tag: str) -> InstrumentCourse:
    course = _legs(chance, day, grows, size, Growth.LINEAR)
    return InstrumentCourse(tag=tag, kind=InstrumentFaultKind.BIAS, course=course)
