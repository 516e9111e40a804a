"""How the things of a story go over time: ramps, words that switch, gases that mix, faults that grow.

Times are real seconds since the story began. A course answers for one instant or for an array of them.
"""

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum
from types import MappingProxyType
from typing import Final, TypeVar

import numpy as np
from numpy.typing import ArrayLike

from model.machine import Side
from simulator.equipment import Surroundings
from simulator.faults import Fault, FaultKind, Faults
from simulator.gas_data import Floats
from simulator.instrument_faults import InstrumentFault, InstrumentFaultKind, LinkFaultKind, LinkState

_STEEPNESS: Final = 3.0  # an exponential growth passes 18 % of its way in the first half


class Growth(StrEnum):
    LINEAR = "linear"
    EXPONENTIAL = "exponential"


@dataclass(frozen=True, slots=True, kw_only=True)
class Leg:
    """One move of a number: from where it is, to a value, in some time."""

    start_s: float
    to: float
    over_s: float = 0.0
    growth: Growth = Growth.LINEAR

    def share(self, at: Floats) -> Floats:
        """How far along the leg is."""
        if self.over_s == 0.0:
            return np.where(at >= self.start_s, 1.0, 0.0)
        x = np.clip((at - self.start_s) / self.over_s, 0.0, 1.0)
        if self.growth is Growth.EXPONENTIAL:
            return np.asarray(np.expm1(_STEEPNESS * x) / math.expm1(_STEEPNESS))
        return x


@dataclass(frozen=True, slots=True, kw_only=True)
class Course:
    """A number over time; a leg that is cut short by the next goes on from where it was."""

    legs: tuple[Leg, ...] = ()

    def at(self, elapsed_s: ArrayLike, initial: ArrayLike) -> Floats:
        """The number at some instants.

        Parameters
        ----------
        elapsed_s : ArrayLike
            Real time since the story began [s].
        initial : ArrayLike
            What it is while the story says nothing of it; one number or one an instant.

        Returns
        -------
        Floats
            Of the shape of the instants.
        """
        at = np.asarray(elapsed_s, dtype=np.float64)
        value = np.broadcast_to(np.asarray(initial, dtype=np.float64), at.shape)
        first = float(np.ravel(value)[0]) if value.size else 0.0
        for number, leg in enumerate(self.legs):
            before = value if number == 0 else self._scalar(number, leg.start_s, first)
            moved = before + (leg.to - before) * leg.share(at)
            value = np.where(at >= leg.start_s, moved, value)
        return np.asarray(value)

    def _scalar(self, legs: int, at: float, initial: float) -> float:
        """The number at one instant by its first legs alone."""
        value = initial
        for number, leg in enumerate(self.legs[:legs]):
            before = initial if number == 0 else self._scalar(number, leg.start_s, initial)
            if at >= leg.start_s:
                value = before + (leg.to - before) * float(leg.share(np.asarray(at)))
        return value


_Word = TypeVar("_Word", str, bool)


def switched(moves: Sequence[tuple[float, _Word]], elapsed_s: float, initial: _Word) -> _Word:
    """The word that holds at an instant; moves are in the order of time."""
    word = initial
    for start_s, to in moves:
        if elapsed_s >= start_s:
            word = to
    return word


@dataclass(frozen=True, slots=True, kw_only=True)
class GasMove:
    """The composition goes over to another one, mixing in a straight line."""

    leg: Leg  # from 0 to 1
    to: Mapping[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class FaultCourse:
    kind: FaultKind
    course: Course
    stage: int | None = None
    cylinder: int | None = None
    side: Side | None = None

    def fault(self, elapsed_s: float) -> Fault | None:
        size = float(self.course.at(elapsed_s, 0.0))
        if size == 0.0:
            return None
        return Fault(kind=self.kind, size=size, stage=self.stage, cylinder=self.cylinder, side=self.side)


@dataclass(frozen=True, slots=True, kw_only=True)
class InstrumentCourse:
    tag: str
    kind: InstrumentFaultKind
    course: Course

    @property
    def absent(self) -> float:
        return 1.0 if self.kind is InstrumentFaultKind.WRONG_SPAN else 0.0

    def fault(self, elapsed_s: float) -> InstrumentFault:
        return InstrumentFault(kind=self.kind, size=float(self.course.at(elapsed_s, self.absent)))


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkSpell:
    """A link misbehaves for a while."""

    source: str
    kind: LinkFaultKind
    start_s: float
    end_s: float
    buffered: bool = False
    by_s: float = 0.0  # how late, or how far the clock is off


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitOrders:
    """What holds for one unit at one instant."""

    around: Surroundings
    faults: Faults
    load_step: str
    running: bool
    ambient_k: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Calm:
    """What holds for a unit while the story says nothing of it."""

    around: Surroundings
    load_step: str
    ambient_k: float = 288.0
    running: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitCourse:
    """One unit's part of a story."""

    numbers: Mapping[str, Course] = field(default_factory=lambda: MappingProxyType({}))  # by field
    load_steps: tuple[tuple[float, str], ...] = ()
    running: tuple[tuple[float, bool], ...] = ()
    gas: tuple[GasMove, ...] = ()
    faults: tuple[FaultCourse, ...] = ()
    instruments: tuple[InstrumentCourse, ...] = ()

    def orders(self, elapsed_s: float, calm: Calm) -> UnitOrders:
        """What holds at an instant; negative before the story, when nothing of it holds."""
        values = {
            name: float(course.at(elapsed_s, getattr(calm.around, name)))
            for name, course in self.numbers.items()
            if name != "ambient_k"
        }
        around = replace(calm.around, **values) if values else calm.around  # type: ignore[arg-type]
        if self.gas:
            around = replace(around, composition=self.composition(elapsed_s, calm.around.composition or {}))
        ambient = self.numbers.get("ambient_k", Course()).at(elapsed_s, calm.ambient_k)
        found = (f.fault(elapsed_s) for f in self.faults)
        return UnitOrders(
            around=around, faults=Faults(present=tuple(f for f in found if f is not None)),
            load_step=switched(self.load_steps, elapsed_s, calm.load_step),
            running=switched(self.running, elapsed_s, calm.running), ambient_k=float(ambient),
        )  # fmt: skip

    def composition(self, elapsed_s: float, initial: Mapping[str, float]) -> Mapping[str, float]:
        """The dry gas at an instant."""
        mixed = dict(initial)
        for move in self.gas:
            if elapsed_s < move.leg.start_s:
                continue
            share = float(move.leg.share(np.asarray(elapsed_s)))
            names = mixed.keys() | move.to.keys()
            mixed = {n: (1 - share) * mixed.get(n, 0.0) + share * move.to.get(n, 0.0) for n in sorted(names)}
        return {name: share for name, share in mixed.items() if share > 0.0}

    def instrument_faults(self, tag: str, elapsed_s: float) -> tuple[InstrumentFault, ...]:
        """What the instrument of a tag does wrong at an instant."""
        found = (i.fault(elapsed_s) for i in self.instruments if i.tag == tag)
        return tuple(f for f in found if f.present)


def link_state(spells: Iterable[LinkSpell], source: str, elapsed_s: float) -> LinkState:
    """The link of a source at an instant."""
    state = LinkState()
    for spell in spells:
        if spell.source != source or not spell.start_s <= elapsed_s < spell.end_s:
            continue
        match spell.kind:
            case LinkFaultKind.LOST:
                state = replace(state, lost=True, buffered=spell.buffered)
            case LinkFaultKind.LATE:
                state = replace(state, delay_s=spell.by_s)
            case LinkFaultKind.OUT_OF_ORDER:
                state = replace(state, shuffled=True)
            case LinkFaultKind.SKEWED:
                state = replace(state, skew_s=spell.by_s)
    return state
