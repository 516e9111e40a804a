"""What the nameplate does not say: the plant around a unit, the site's conditions, and the sealed draw."""

import zlib
from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from types import MappingProxyType

import numpy as np

from model.machine import Side


class ConditionError(ValueError):
    def __init__(self, name: str, value: object, expectation: str) -> None:
        super().__init__(f"{name}: {value!r} is not {expectation}")
        self.name, self.value = name, value


class DriverKind(StrEnum):
    SYNCHRONOUS = "synchronous"  # turns at the rated speed
    INDUCTION = "induction"  # slips in proportion to load
    VARIABLE = "variable speed"  # turns as it is told


@dataclass(frozen=True, slots=True, kw_only=True)
class Driver:
    kind: DriverKind
    rated_power_w: float  # at the shaft
    full_load_slip: float = 0.0
    mechanical_efficiency: float = 0.95  # indicated / shaft, without the fixed friction
    friction_w: float = 0.0  # fixed
    fixed_loss: float = 0.015  # electrical losses / rated power
    load_loss: float = 0.025  # the same at rated load, growing with its square

    def shaft_power(self, indicated_w: float) -> float:
        return indicated_w / self.mechanical_efficiency + self.friction_w

    def electrical_power(self, indicated_w: float) -> float:
        shaft = self.shaft_power(indicated_w)
        load = shaft / self.rated_power_w
        return shaft + self.rated_power_w * (self.fixed_loss + self.load_loss * load**2)


@dataclass(frozen=True, slots=True, kw_only=True)
class StageEquipment:
    """Vessels, line and cooler of one stage; the cooler is the one BEHIND the stage."""

    design_suction_pa: float
    design_discharge_pa: float
    suction_bottle: float = 4.0  # volume / swept volume of the stage
    discharge_bottle: float = 4.0
    line_drop: float = 0.004  # share of the pressure lost at design flow, line behind the discharge bottle
    cooler_drop: float = 0.0015
    cooler_effectiveness: float = 0.93  # at design flow
    valve_preload: float = 0.004  # share of the design line pressure that just lifts a plate
    valve_full_lift: float = 0.012  # share that holds it at full lift
    passage_volume: float = 0.35  # suction passage / swept volume, an end
    nozzle_area: float = 4.0  # nozzle of the passage / effective suction valve area
    jacket_w_m2k: float = 600.0  # jacket side heat transfer, on end face and half the liner


@dataclass(frozen=True, slots=True, kw_only=True)
class Equipment:
    stages: tuple[StageEquipment, ...]
    phases_deg: tuple[float, ...]  # of each throw, in the order of the unit's cylinders
    design_flow_mol_s: float
    design_suction_temperature_k: float
    driver: Driver
    inlet_drop: float = 0.004  # share of the header pressure lost at design flow
    vent_pressure_pa: float = 1.2e5  # behind the packings
    relief_pressure_pa: float = 1.5e5  # behind the relief valves
    pinned: bool = False  # bottles are boundless: one cylinder studied between two pressures


@dataclass(frozen=True, slots=True, kw_only=True)
class Surroundings:
    """What the site imposes on a unit; it may change from one turn of the crank to the next."""

    suction_pressure_pa: float  # header
    suction_temperature_k: float
    discharge_pressure_pa: float  # header
    speed_rad_s: float  # told to a variable-speed driver, no-load speed of the others
    held_open: frozenset[tuple[int, Side]] = field(default=frozenset())
    added_clearance: Mapping[tuple[int, Side], float] = field(default_factory=lambda: MappingProxyType({}))
    first_recycle: float = 0.0  # effective area / inlet line area
    final_recycle: float = 0.0
    cooling_water_k: float = 303.0
    jacket_water_k: float = 318.0
    ambient_pressure_pa: float = 1.013e5
    composition: Mapping[str, float] | None = None  # dry; the nameplate's if None
    saturation: float = 0.0  # water at the header / water it could hold

    def __post_init__(self) -> None:
        for name in ("suction_pressure_pa", "suction_temperature_k", "speed_rad_s", "cooling_water_k"):
            if not getattr(self, name) > 0.0:
                raise ConditionError(name, getattr(self, name), "above zero")
        if not self.discharge_pressure_pa > self.suction_pressure_pa:
            raise ConditionError("discharge_pressure_pa", self.discharge_pressure_pa, "above that of suction")
        if not 0.0 <= self.saturation <= 1.0:
            raise ConditionError("saturation", self.saturation, "within 0..1")


@dataclass(frozen=True, slots=True, kw_only=True)
class SealedDraw:
    """How far the machine that was built is from its data sheet: real value / nameplate value.

    The agent gets the nameplate; nobody tells it these numbers.
    """

    valve_preload: float = 1.0
    valve_full_lift: float = 1.0
    valve_frequency: float = 1.0
    valve_area: float = 1.0  # discharge coefficient
    wall_heat: float = 1.0
    passage_volume: float = 1.0
    clearance_shift: float = 0.0  # added to the nameplate's clearance

    @classmethod
    def from_seed(cls, seed: int, unit_id: str) -> "SealedDraw":
        """Draw each factor from 0.7 to 1.3, evenly; another unit of the same seed gets others."""
        draw = np.random.default_rng([seed, zlib.crc32(unit_id.encode())]).uniform(0.7, 1.3, 6)
        preload, full_lift, frequency, area, wall, passage = (float(x) for x in draw)
        return cls(
            valve_preload=preload,
            valve_full_lift=full_lift,
            valve_frequency=frequency,
            valve_area=area,
            wall_heat=wall,
            passage_volume=passage,
        )


NOMINAL = SealedDraw()
