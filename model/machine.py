"""The nameplate: what a unit is made of, as frozen values in SI.

Conventions: the head end is the one away from the crank, the crank end holds the rod. Crank angle zero is
a throw's own head-end dead centre (the piston farthest from the crank). Pressures are absolute.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum


class Side(StrEnum):
    HEAD = "head"
    CRANK = "crank"


class EndState(StrEnum):
    """What a load step makes of one end."""

    LOADED = "loaded"
    HELD_OPEN = "held open"  # suction valves held open: the end moves gas to and fro and compresses none


@dataclass(frozen=True, slots=True, kw_only=True)
class End:
    """One compression end of a cylinder."""

    side: Side
    clearance: float  # clearance volume / swept volume of this end
    suction_area_ratio: float  # effective flow area of its suction valves / piston area of this end
    discharge_area_ratio: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Cylinder:
    number: int
    bore_m: float
    rod_diameter_m: float
    reciprocating_mass_kg: float  # all that moves outboard of the crosshead pin, crosshead included
    ends: tuple[End, ...]
    tail_rod_diameter_m: float = 0.0
    valve_natural_frequency_hz: float = 100.0

    @property
    def subject(self) -> str:
        return f"cylinder{self.number}"

    @property
    def head_area_m2(self) -> float:
        return math.pi / 4 * (self.bore_m**2 - self.tail_rod_diameter_m**2)

    @property
    def crank_area_m2(self) -> float:
        return math.pi / 4 * (self.bore_m**2 - self.rod_diameter_m**2)

    def area_m2(self, side: Side) -> float:
        return self.head_area_m2 if side is Side.HEAD else self.crank_area_m2


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    number: int
    cylinders: tuple[Cylinder, ...]

    @property
    def subject(self) -> str:
        return f"stage{self.number}"


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadStep:
    """One row of the load-step truth table: a word of the plant and what each END then does."""

    word: str
    index: int  # its place in the table; frames carry this number
    held_open: frozenset[tuple[int, Side]]  # (cylinder number, side) of each end held open
    permitted: bool = True

    def state(self, cylinder: int, side: Side) -> EndState:
        return EndState.HELD_OPEN if (cylinder, side) in self.held_open else EndState.LOADED


@dataclass(frozen=True, slots=True, kw_only=True)
class Limit:
    """A limit as somebody entered it. No limit is ever assumed."""

    quantity: str  # key of model.quantities
    subject: str  # e.g. "cylinder1"
    value: float  # SI
    source: str
    entered_by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class GasDomain:
    """The range of states over which a unit's gas is tabulated."""

    low_temperature_k: float
    high_temperature_k: float
    low_pressure_pa: float
    high_pressure_pa: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Unit:
    """One compressor."""

    id: str
    name: str
    service: str
    stroke_m: float
    connecting_rod_m: float
    rated_speed_rad_s: float
    ambient_pressure_pa: float
    composition: Mapping[str, float]  # component -> mole fraction, sums to one
    domain: GasDomain
    stages: tuple[Stage, ...]
    load_steps: tuple[LoadStep, ...]
    limits: tuple[Limit, ...] = field(default=())

    @property
    def cylinders(self) -> tuple[Cylinder, ...]:
        return tuple(c for s in self.stages for c in s.cylinders)

    def cylinder(self, number: int) -> tuple[Stage, Cylinder]:
        """A cylinder and the stage it belongs to; KeyError if the unit has none of that number."""
        for stage in self.stages:
            for cylinder in stage.cylinders:
                if cylinder.number == number:
                    return stage, cylinder
        raise KeyError(number)

    def limit(self, subject: str, quantity: str) -> Limit | None:
        for entry in self.limits:
            if entry.subject == subject and entry.quantity == quantity:
                return entry
        return None
