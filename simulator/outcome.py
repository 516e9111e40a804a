"""What a run of the invented machine gives, frozen, in SI and absolute."""

from dataclasses import dataclass

from model.machine import Side
from simulator.gas_data import Floats
from simulator.kinematics import Reversal


@dataclass(frozen=True, slots=True, kw_only=True)
class EndOutcome:
    side: Side
    volumetric_efficiency: float  # delivered / swept, at the state of the suction bottle
    indicated_power_w: float
    wall_heat_w: float  # into the gas
    wall_temperature_k: float
    suction_passage_temperature_k: float  # what the suction valve covers feel
    delivered_temperature_k: float  # of the gas through the discharge valves; NaN without through-flow


@dataclass(frozen=True, slots=True, kw_only=True)
class CylinderOutcome:
    number: int
    suction_flow_mol_s: float  # at the suction flange
    discharge_flow_mol_s: float  # at the discharge flange
    packing_flow_mol_s: float
    indicated_power_w: float
    delivered_temperature_k: float  # mixed by enthalpy; NaN without through-flow
    # for verification only: no instrument of the plant shows what follows
    gas_load_tension_n: float
    gas_load_compression_n: float
    pin_load_tension_n: float
    pin_load_compression_n: float
    reversal: Reversal
    ends: tuple[EndOutcome, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class StageOutcome:
    number: int
    suction_pressure_pa: float  # suction bottle
    suction_temperature_k: float
    discharge_pressure_pa: float  # discharge bottle
    discharge_temperature_k: float
    suction_flow_mol_s: float  # moist, all suction flanges
    discharge_flow_mol_s: float
    water_fraction: float  # of the gas drawn in
    condensate_mol_s: float  # drained behind this stage
    cooler_outlet_temperature_k: float
    relief_flow_mol_s: float
    indicated_power_w: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Closure:
    """How well the balances close, and how often the integration had to be helped."""

    amount: float  # (in - out - stored) of the whole machine / in
    energy: float  # (heat and work in - out - stored) of all ends / indicated power
    held_back: float  # openings whose flow a step could not bear / openings x steps
    clipped: float  # states that had to be bounded / states x steps


@dataclass(frozen=True, slots=True, kw_only=True)
class MachineOutcome:
    duration_s: float
    speed_rad_s: float
    inlet_flow_mol_s: float  # moist, from the suction header
    inlet_dry_mol_s: float
    export_flow_mol_s: float  # moist, into the discharge header less what the final recycle takes back
    export_dry_mol_s: float
    first_recycle_mol_s: float
    final_recycle_mol_s: float
    indicated_power_w: float
    electrical_power_w: float
    stages: tuple[StageOutcome, ...]
    cylinders: tuple[CylinderOutcome, ...]
    closure: Closure

    def cylinder(self, number: int) -> CylinderOutcome:
        return next(c for c in self.cylinders if c.number == number)


@dataclass(frozen=True, slots=True, kw_only=True)
class Card:
    """Pressures and loads of one cylinder over its own angle, means of the last run; verification only."""

    number: int
    angle_rad: Floats
    volumes_m3: dict[Side, Floats]
    pressures_pa: dict[Side, Floats]
    gas_load_n: Floats  # tension positive
    pin_load_n: Floats
