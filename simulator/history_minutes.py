"""What surrounds one unit, what it is told and what ails it, minute by minute over a whole history."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
import numpy.typing as npt

from agent.siteplan.plan import UnitPlan
from simulator.course import UnitCourse
from simulator.equipment import Surroundings
from simulator.gas_data import Floats
from simulator.instrument_faults import FaultTrack
from simulator.instruments import HeaderSwing
from simulator.ordinary_life import Habits, slow_wave
from simulator.tabulate_domain import VARIABLES, Spot
from simulator.weather import Weather

SWING: Final = MappingProxyType({"suction": 0.003, "discharge": 0.0015})  # share, as the live plant's
_GROUND_K: Final = 283.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Minutes:
    """One unit over a row of minutes."""

    time: Floats  # UTC [s]
    values: Mapping[str, Floats]  # fields of Surroundings that a table may vary
    names: tuple[str, ...]  # of the components
    composition: Floats | None  # dry, (n, names); None: the nameplate's all the time
    ambient_k: Floats
    step: npt.NDArray[np.int64]  # place among the unit's load steps
    running: npt.NDArray[np.bool_]
    spots: tuple[Spot, ...]
    sizes: Floats  # (n, spots)
    tracks: Mapping[str, tuple[FaultTrack, ...]]  # of instruments, by tag

    def part(self, chosen: slice) -> "Minutes":
        return Minutes(
            time=self.time[chosen],
            values={name: v[chosen] for name, v in self.values.items()},
            names=self.names,
            composition=None if self.composition is None else self.composition[chosen],
            ambient_k=self.ambient_k[chosen],
            step=self.step[chosen],
            running=self.running[chosen],
            spots=self.spots,
            sizes=self.sizes[chosen],
            tracks={
                tag: tuple(FaultTrack(kind=t.kind, sizes=t.sizes[chosen]) for t in tracks)
                for tag, tracks in self.tracks.items()
            },
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """What the minutes of one unit are made from."""

    plan: UnitPlan
    usual: Surroundings
    course: UnitCourse
    habits: Habits
    seed: int  # of weather, wander and swings


def minutes_of(setting: Setting, time: Floats, elapsed: Floats) -> Minutes:
    """All minutes of one unit.

    Parameters
    ----------
    setting : Setting
        The unit and its story.
    time : Floats
        Instants, UTC [s].
    elapsed : Floats
        The same as the story counts them [s].
    """
    plan, usual, course, seed = setting.plan, setting.usual, setting.course, setting.seed
    weather = Weather(seed)
    calm = _calm(setting, weather, time)
    values = {}
    for name in VARIABLES:
        base = calm.get(name, np.full(len(time), float(getattr(usual, name))))
        told = course.numbers.get(name)
        values[name] = base if told is None else told.at(elapsed, base)
    for header in SWING:
        name = f"{header}_pressure_pa"
        swing = HeaderSwing(SWING[header], f"{seed}/{plan.unit.id}/{header}")
        values[name] = values[name] * swing.factors(time - time[0])
    told = course.numbers.get("ambient_k")
    ambient = weather.ambient_k(time)
    names, composition = _composition(setting, time, elapsed)
    spots = tuple(Spot(kind=f.kind, stage=f.stage, cylinder=f.cylinder, side=f.side) for f in course.faults)
    sizes = [f.course.at(elapsed, 0.0) for f in course.faults]
    words = [s.word for s in plan.unit.load_steps]
    places = [words.index(word) for _, word in course.load_steps]
    return Minutes(
        time=time,
        values=values,
        names=names,
        composition=composition,
        ambient_k=ambient if told is None else told.at(elapsed, ambient),
        step=_switched([at for at, _ in course.load_steps], places, elapsed, 0).astype(np.int64),
        running=_switched(
            [at for at, _ in course.running], [int(r) for _, r in course.running], elapsed, 1
        ).astype(np.bool_),
        spots=spots,
        sizes=np.column_stack(sizes) if sizes else np.zeros((len(time), 0)),
        tracks=_tracks(course, elapsed),
    )


def _calm(setting: Setting, weather: Weather, time: Floats) -> dict[str, Floats]:
    usual, habits = setting.usual, setting.habits

    def wave(what: str, shortest: float, longest: float) -> Floats:
        return slow_wave(f"{setting.seed}/{setting.plan.unit.id}/{what}", time, shortest, longest)

    def wandering(header_pa: float, share: float, what: str) -> Floats:
        return np.asarray(header_pa * (1.0 + share * wave(what, 0.5, 40.0)))

    slower = 0.5 * (1.0 + wave("speed", 0.8, 20.0)) * habits.speed
    soil = weather.ground_k(time) - _GROUND_K
    return {
        "suction_pressure_pa": wandering(usual.suction_pressure_pa, habits.suction, "suction"),
        "discharge_pressure_pa": wandering(usual.discharge_pressure_pa, habits.discharge, "discharge"),
        "suction_temperature_k": usual.suction_temperature_k + habits.suction_k * soil,
        "cooling_water_k": weather.cooling_water_k(time),
        "speed_rad_s": usual.speed_rad_s * (1.0 - slower),
    }


def _composition(setting: Setting, time: Floats, elapsed: Floats) -> tuple[tuple[str, ...], Floats | None]:
    unit, course = setting.plan.unit, setting.course
    first = dict(setting.usual.composition or unit.composition)
    heavier = setting.habits.heavier
    if heavier is None and not course.gas:
        return tuple(first), None
    mixed = [first, heavier or {}, *(move.to for move in course.gas)]
    names = tuple(dict.fromkeys(name for gas in mixed for name in gas))

    def row(gas: Mapping[str, float]) -> Floats:
        return np.array([gas.get(name, 0.0) for name in names])

    share = np.zeros(len(time))
    if heavier is not None:
        share = 0.5 * (1.0 + slow_wave(f"{setting.seed}/{unit.id}/gas", time, 3.0, 60.0))
    now = (1.0 - share[:, None]) * row(first) + share[:, None] * row(heavier or first)
    for move in course.gas:
        share = np.where(elapsed >= move.leg.start_s, move.leg.share(elapsed), 0.0)
        now = (1.0 - share[:, None]) * now + share[:, None] * row(move.to)
    return names, now


def _switched(
    starts: Sequence[float], to: Sequence[int], elapsed: Floats, initial: int
) -> npt.NDArray[np.int64]:
    order = np.searchsorted(np.asarray(starts, dtype=float), elapsed, side="right")
    return np.array([initial, *to], dtype=np.int64)[order]


def _tracks(course: UnitCourse, elapsed: Floats) -> Mapping[str, tuple[FaultTrack, ...]]:
    found: dict[str, tuple[FaultTrack, ...]] = {}
    for fault in course.instruments:
        track = FaultTrack(kind=fault.kind, sizes=fault.course.at(elapsed, fault.absent))
        found[fault.tag] = (*found.get(fault.tag, ()), track)
    return found
