"""What can go wrong with the invented machine, as values with a size. The truth; the agent never sees it."""

from collections.abc import Iterable
from dataclasses import dataclass, field
from enum import StrEnum
from types import MappingProxyType
from typing import Final

from model.machine import Side, Unit


class FaultKind(StrEnum):
    SUCTION_VALVE_LEAK = "suction valve leak"
    DISCHARGE_VALVE_LEAK = "discharge valve leak"
    RING_LEAK = "piston ring leak"
    PACKING_LEAK = "packing leak"
    UNLOADER_STUCK_OPEN = "unloader stuck open"
    UNLOADER_STUCK_CLOSED = "unloader stuck closed"
    POCKET_OPEN = "clearance pocket open"
    STRAINER_PLUGGING = "suction strainer plugging"
    COOLER_FOULING = "cooler fouling"
    COOLER_WATER_LOSS = "cooler water loss"
    LIQUID_CARRY_OVER = "liquid carry-over"
    FIRST_RECYCLE_PASSING = "first-stage recycle passing"
    FINAL_RECYCLE_PASSING = "final recycle passing"
    RELIEF_PASSING = "relief valve passing"
    JACKET_WATER_LOSS = "jacket water loss"


class Place(StrEnum):
    UNIT = "unit"
    STAGE = "stage"
    CYLINDER = "cylinder"
    END = "end"


@dataclass(frozen=True, slots=True)
class FaultRule:
    place: Place
    largest: float
    size: str  # what the number means


_K: Final = FaultKind
RULES: Final = MappingProxyType(
    {
        _K.SUCTION_VALVE_LEAK: FaultRule(Place.END, 0.05, "effective area / piston area of the end"),
        _K.DISCHARGE_VALVE_LEAK: FaultRule(Place.END, 0.05, "effective area / piston area of the end"),
        _K.RING_LEAK: FaultRule(Place.CYLINDER, 0.05, "effective area / head-end piston area"),
        _K.PACKING_LEAK: FaultRule(Place.CYLINDER, 0.01, "effective area / head-end piston area"),
        _K.UNLOADER_STUCK_OPEN: FaultRule(Place.END, 1.0, "least lift of the suction valves"),
        _K.UNLOADER_STUCK_CLOSED: FaultRule(Place.END, 1.0, "1: does not hold open when told to"),
        _K.POCKET_OPEN: FaultRule(Place.END, 1.0, "added clearance / swept volume of the end"),
        _K.STRAINER_PLUGGING: FaultRule(Place.UNIT, 0.95, "share of the inlet line's area lost"),
        _K.COOLER_FOULING: FaultRule(Place.STAGE, 0.95, "share of heat-transfer units lost"),
        _K.COOLER_WATER_LOSS: FaultRule(Place.STAGE, 1.0, "share of the effectiveness lost"),
        _K.LIQUID_CARRY_OVER: FaultRule(Place.STAGE, 0.05, "moles of water / mole of gas drawn in"),
        _K.FIRST_RECYCLE_PASSING: FaultRule(Place.UNIT, 1.0, "effective area / inlet line area"),
        _K.FINAL_RECYCLE_PASSING: FaultRule(Place.UNIT, 1.0, "effective area / inlet line area"),
        _K.RELIEF_PASSING: FaultRule(Place.STAGE, 1.0, "effective area / inlet line area"),
        _K.JACKET_WATER_LOSS: FaultRule(Place.UNIT, 1.0, "share of the jacket's heat transfer lost"),
    }
)  # fmt: skip


class FaultError(ValueError):
    def __init__(self, fault: "Fault", expectation: str) -> None:
        super().__init__(f"{fault.kind}: {expectation}")
        self.fault = fault


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One fault: what, where and how big (`RULES` says what the size means)."""

    kind: FaultKind
    size: float
    stage: int | None = None
    cylinder: int | None = None
    side: Side | None = None

    def __post_init__(self) -> None:
        rule = RULES[self.kind]
        if not 0.0 <= self.size <= rule.largest:
            raise FaultError(self, f"size {self.size} is not within 0..{rule.largest} ({rule.size})")
        given = (self.stage is not None, self.cylinder is not None, self.side is not None)
        wanted = {
            Place.UNIT: (False, False, False),
            Place.STAGE: (True, False, False),
            Place.CYLINDER: (False, True, False),
            Place.END: (False, True, True),
        }[rule.place]
        if given != wanted:
            raise FaultError(self, f"must name its {rule.place} and nothing else")


@dataclass(frozen=True, slots=True, kw_only=True)
class Faults:
    """All faults of a machine at one time; sizes of equal faults at one place add up."""

    present: tuple[Fault, ...] = field(default=())

    def at_end(self, kind: FaultKind, cylinder: int, side: Side) -> float:
        return sum(f.size for f in self._of(kind) if f.cylinder == cylinder and f.side is side)

    def at_cylinder(self, kind: FaultKind, cylinder: int) -> float:
        return sum(f.size for f in self._of(kind) if f.cylinder == cylinder)

    def at_stage(self, kind: FaultKind, stage: int) -> float:
        return sum(f.size for f in self._of(kind) if f.stage == stage)

    def at_unit(self, kind: FaultKind) -> float:
        return sum(f.size for f in self._of(kind))

    def _of(self, kind: FaultKind) -> Iterable[Fault]:
        return (f for f in self.present if f.kind is kind)

    def check(self, unit: Unit) -> None:
        """Refuse a fault at a place that the unit does not have."""
        ends = {(c.number, e.side) for c in unit.cylinders for e in c.ends}
        stages = {s.number for s in unit.stages}
        cylinders = {c.number for c in unit.cylinders}
        for fault in self.present:
            place = RULES[fault.kind].place
            if place is Place.STAGE and fault.stage not in stages:
                raise FaultError(fault, f"{unit.id} has no stage {fault.stage}")
            if place in (Place.CYLINDER, Place.END) and fault.cylinder not in cylinders:
                raise FaultError(fault, f"{unit.id} has no cylinder {fault.cylinder}")
            if place is Place.END and (fault.cylinder, fault.side) not in ends:
                raise FaultError(fault, f"cylinder {fault.cylinder} of {unit.id} has no {fault.side} end")


HEALTHY: Final = Faults()
