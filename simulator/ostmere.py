"""The plant of Ostmere Works around each compressor: invented vessels, coolers, drivers and header states.

None of this is in the agent's site file: an agent knows what is on the nameplate and what its tags say. The
nameplates themselves are those of the site file.
"""

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

from simulator.equipment import Driver, DriverKind, Equipment, StageEquipment, Surroundings

_RPM: Final = 2.0 * math.pi / 60.0
_BAR: Final = 1e5
SEED: Final = 20_417  # of the sealed draw of this site


EQUIPMENT: Final[Mapping[str, Equipment]] = MappingProxyType(
    {
        "K-110": Equipment(
            stages=(
                StageEquipment(
                    design_suction_pa=30.0 * _BAR, design_discharge_pa=70.0 * _BAR, cooler_effectiveness=0.90
                ),
            ),
            phases_deg=(0.0, 180.0),
            design_flow_mol_s=254.0,
            design_suction_temperature_k=303.0,
            driver=Driver(
                kind=DriverKind.VARIABLE,
                rated_power_w=800e3,
                friction_w=12e3,
                fixed_loss=0.025,
                load_loss=0.03,
            ),
        ),
        "K-220": Equipment(
            stages=(
                StageEquipment(
                    design_suction_pa=18.0 * _BAR, design_discharge_pa=37.8 * _BAR, cooler_effectiveness=0.925
                ),
                StageEquipment(
                    design_suction_pa=37.6 * _BAR, design_discharge_pa=76.0 * _BAR, cooler_effectiveness=0.93
                ),
                StageEquipment(
                    design_suction_pa=75.5 * _BAR, design_discharge_pa=140.6 * _BAR, cooler_effectiveness=0.90
                ),
            ),
            phases_deg=(0.0, 180.0, 90.0, 270.0),
            design_flow_mol_s=395.0,
            design_suction_temperature_k=308.0,
            driver=Driver(kind=DriverKind.SYNCHRONOUS, rated_power_w=2900e3, friction_w=45e3),
        ),
        "K-330": Equipment(
            stages=(
                StageEquipment(
                    design_suction_pa=5.0 * _BAR, design_discharge_pa=12.5 * _BAR, cooler_effectiveness=0.92
                ),
                StageEquipment(
                    design_suction_pa=12.4 * _BAR, design_discharge_pa=34.2 * _BAR, cooler_effectiveness=0.90
                ),
            ),
            phases_deg=(0.0, 180.0, 90.0, 270.0),
            design_flow_mol_s=173.0,
            design_suction_temperature_k=300.0,
            driver=Driver(
                kind=DriverKind.INDUCTION, rated_power_w=1250e3, full_load_slip=0.013, friction_w=20e3
            ),
        ),
    }
)

USUAL: Final[Mapping[str, Surroundings]] = MappingProxyType(
    {
        "K-110": Surroundings(
            suction_pressure_pa=30.0 * _BAR,
            suction_temperature_k=303.0,
            discharge_pressure_pa=70.0 * _BAR,
            speed_rad_s=900.0 * _RPM,
            saturation=0.02,  # pipeline gas, dried
        ),
        "K-220": Surroundings(
            suction_pressure_pa=18.0 * _BAR,
            suction_temperature_k=308.0,
            discharge_pressure_pa=140.0 * _BAR,
            speed_rad_s=375.0 * _RPM,
            saturation=1.0,  # from a wet scrubber
        ),
        "K-330": Surroundings(
            suction_pressure_pa=5.0 * _BAR,
            suction_temperature_k=300.0,
            discharge_pressure_pa=34.0 * _BAR,
            speed_rad_s=750.0 * _RPM,
            saturation=1.0,  # from a separator
        ),
    }
)
