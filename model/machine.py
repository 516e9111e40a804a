"""The nameplate: what a unit is made of, as frozen values in SI.

Conventions: the head end is the one away from the crank, the crank end holds the rod. Crank angle zero is
a throw's own head-end dead centre (the piston farthest from the crank). Pressures are absolute.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from enum import StrEnum


class Side(StrEnum):
    HEAD = "head"
    CRANK = "crank"


class EndState(StrEnum):
    """What a load step makes of one end."""

    LOADED = "loaded"
    HELD_OPEN = "held open"  # suction valves held open: the end moves gas to and fro and compresses none


class OtherSide(StrEnum):
    """What a single-acting piston has on its side without valves."""

    SUCTION = "suction"  # open to the suction line
    AMBIENT = "ambient"  # open to the air or the crankcase


class DriverKind(StrEnum):
    SYNCHRONOUS = "synchronous"  # turns at the rated speed
    INDUCTION = "induction"  # slips in proportion to load
    VARIABLE = "variable speed"  # turns as it is told


@dataclass(frozen=True, slots=True, kw_only=True)
class End:
    """One compression end of a cylinder."""

    side: Side
    clearance: float  # clearance volume / swept volume of this end, pockets shut
    suction_area_ratio: float  # effective flow area of its suction valves / piston area of this end
    discharge_area_ratio: float
    pocket_clearance: float = 0.0  # what a fixed pocket adds when it is open, / swept volume of this end
    variable_pocket_clearance: float = 0.0  # what a variable pocket adds when it is all the way out
    valve_closing_rad: float = 0.0  # of a load step: crank angle past dead centre until which suction valves
    # are held open as the volume shrinks


@dataclass(frozen=True, slots=True, kw_only=True)
class Cylinder:
    number: int
    bore_m: float
    rod_diameter_m: float
    reciprocating_mass_kg: float  # all that moves outboard of the crosshead pin, crosshead included
    ends: tuple[End, ...]  # one alone: single-acting
    tail_rod_diameter_m: float = 0.0
    valve_natural_frequency_hz: float = 100.0
    crosshead_mass_kg: float = 0.0  # that part of the reciprocating mass which the piston rod does not carry
    other_side: OtherSide = OtherSide.SUCTION  # of a single-acting cylinder
    distance_piece_pressure_pa: float | None = None  # where the rod ends up; None: the air

    @property
    def subject(self) -> str:
        return f"cylinder{self.number}"

    @property
    def head_area_m2(self) -> float:
        return math.pi / 4 * (self.bore_m**2 - self.tail_rod_diameter_m**2)

    @property
    def crank_area_m2(self) -> float:
        return math.pi / 4 * (self.bore_m**2 - self.rod_diameter_m**2)

    @property
    def rod_area_m2(self) -> float:
        return math.pi / 4 * self.rod_diameter_m**2

    @property
    def rod_mass_share(self) -> float:
        """Share of the moving mass that the piston rod carries."""
        return 1 - self.crosshead_mass_kg / self.reciprocating_mass_kg

    def area_m2(self, side: Side) -> float:
        return self.head_area_m2 if side is Side.HEAD else self.crank_area_m2


@dataclass(frozen=True, slots=True, kw_only=True)
class Cooler:
    """The cooler behind a stage, with its line, as on its data sheet."""

    effectiveness: float  # at design flow
    design_flow_mol_s: float
    pressure_drop: float = 0.0  # share of the pressure before it lost at design flow, line included
    knock_out: bool = True  # what condenses is drained behind it


@dataclass(frozen=True, slots=True, kw_only=True)
class Approach:
    """The way between a pressure transmitter and the cylinder flange: strainer, line, nozzle.

    It costs ``loss_per_m4`` times density times the square of the volume flow of the whole stage.
    """

    tap: str  # where the transmitter sits, in words
    loss_per_m4: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Stage:
    number: int
    cylinders: tuple[Cylinder, ...]
    service: str = ""  # of several on one frame; stages of other services are fed by nobody here
    relief_pressure_pa: float | None = None  # set pressure of the relief valve behind the stage
    lowest_suction_pa: float | None = None  # lowest permitted; of the first stage a load step may say more
    cooler: Cooler | None = None  # behind it; None: unknown
    suction_approach: Approach | None = None  # None: the tap is at the flange
    discharge_approach: Approach | None = None
    suction_taps: int = 1  # flanges that the suction line feeds side by side

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
    pockets_open: frozenset[tuple[int, Side]] = frozenset()  # ends whose fixed pocket is open
    pocket_positions: tuple[tuple[int, Side, float], ...] = ()  # variable pockets: 0 in, 1 all the way out
    valve_closings: tuple[tuple[int, Side, float], ...] = ()  # late closing of suction valves, rad
    lowest_suction_pa: float | None = None  # lowest permitted pressure before stage 1

    def state(self, cylinder: int, side: Side) -> EndState:
        return EndState.HELD_OPEN if (cylinder, side) in self.held_open else EndState.LOADED

    def added_clearance(self, cylinder: int, end: End) -> float:
        """What the pockets of an end add in this step, per swept volume."""
        added = end.pocket_clearance if (cylinder, end.side) in self.pockets_open else 0.0
        for number, side, share in self.pocket_positions:
            if (number, side) == (cylinder, end.side):
                added += share * end.variable_pocket_clearance
        return added

    def closing_rad(self, cylinder: int, side: Side) -> float:
        """How long past dead centre the suction valves of an end are held open."""
        return next((a for n, s, a in self.valve_closings if (n, s) == (cylinder, side)), 0.0)

    def made_of(self, cylinder: Cylinder) -> Cylinder:
        """The cylinder as it works in this step: its pockets in its clearance, its valves closing late."""
        if not (self.pockets_open or self.pocket_positions or self.valve_closings):
            return cylinder
        ends = tuple(
            replace(
                end,
                clearance=end.clearance + self.added_clearance(cylinder.number, end),
                valve_closing_rad=self.closing_rad(cylinder.number, end.side),
            )
            for end in cylinder.ends
        )
        return cylinder if ends == cylinder.ends else replace(cylinder, ends=ends)


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
class Driver:
    """What turns the shaft, as on its data sheet; None where the sheet is silent."""

    kind: DriverKind
    rated_power_w: float  # at the shaft
    mechanical_efficiency: float | None = None  # indicated / shaft power, beside the fixed friction
    friction_w: float = 0.0  # fixed
    motor_efficiencies: tuple[tuple[float, float], ...] = ()  # (load of rated shaft power, efficiency)
    full_load_slip: float = 0.0  # of an induction motor


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
    driver: Driver | None = None
    packing_vent_pa: float | None = None  # behind the packings; None: the air
    first_recycle: bool = False  # there is one from behind the first stage to its suction
    final_recycle: bool = False
    stepless: bool = False  # suction valves closed at any angle by a controller: what no load step can say

    @property
    def services(self) -> tuple[str, ...]:
        """Services on this frame, in the order of their stages; one without a name if none is told apart."""
        return tuple(dict.fromkeys(stage.service for stage in self.stages))

    def added_clearances(self, step: LoadStep) -> dict[tuple[int, Side], float]:
        """What a load step adds to the clearance of ends, by (cylinder number, side); only what is added."""
        found = {
            (c.number, e.side): step.added_clearance(c.number, e) for c in self.cylinders for e in c.ends
        }
        return {at: added for at, added in found.items() if added}

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
