"""Nameplates for the tests: the two invented units of the demo site, and frames of theirs."""

import math

import numpy as np

from model.machine import Cylinder, End, GasDomain, Limit, LoadStep, Side, Stage, Unit

NATURAL_GAS = {
    "methane": 0.900, "ethane": 0.050, "propane": 0.015, "n-butane": 0.005, "nitrogen": 0.015,
    "carbon dioxide": 0.015,
}  # fmt: skip
HYDROGEN_RICH = {"hydrogen": 0.900, "methane": 0.070, "ethane": 0.015, "propane": 0.005, "nitrogen": 0.010}

NATURAL_GAS_DOMAIN = GasDomain(
    low_temperature_k=273.15, high_temperature_k=448.15, low_pressure_pa=1e5, high_pressure_pa=95e5
)
HYDROGEN_DOMAIN = GasDomain(
    low_temperature_k=273.15, high_temperature_k=433.15, low_pressure_pa=1e5, high_pressure_pa=190e5
)
RPM = math.pi / 30
BAR = 1e5


def ends(head: float, crank: float, area_ratio: float) -> tuple[End, End]:
    return (
        End(side=Side.HEAD, clearance=head, suction_area_ratio=area_ratio, discharge_area_ratio=area_ratio),
        End(side=Side.CRANK, clearance=crank, suction_area_ratio=area_ratio, discharge_area_ratio=area_ratio),
    )


def limits(subject: str, values: dict[str, float]) -> tuple[Limit, ...]:
    return tuple(
        Limit(quantity=key, subject=subject, value=value, source="invented", entered_by="a test")
        for key, value in values.items()
    )


def booster(*, rod_diameter_m: float = 0.063, reciprocating_mass_kg: float = 165.0) -> Unit:
    """K-110: natural gas, one stage, two like cylinders."""
    cylinders = tuple(
        Cylinder(
            number=number, bore_m=0.195, rod_diameter_m=rod_diameter_m, valve_natural_frequency_hz=150.0,
            reciprocating_mass_kg=reciprocating_mass_kg, ends=ends(0.16, 0.18, 0.06),
        )
        for number in (1, 2)
    )  # fmt: skip
    loads = {
        "gas_load_tension": 170e3, "gas_load_compression": 170e3, "pin_load_tension": 160e3,
        "pin_load_compression": 160e3, "reversal_degrees": math.radians(20), "reversal_percent": 0.05,
    }  # fmt: skip
    every = tuple(limit for c in cylinders for limit in limits(c.subject, loads))
    return Unit(
        id="K-110", name="booster", service="natural gas", stroke_m=0.14, connecting_rod_m=0.36,
        rated_speed_rad_s=900 * RPM, ambient_pressure_pa=101300.0, composition=NATURAL_GAS,
        domain=NATURAL_GAS_DOMAIN, stages=(Stage(number=1, cylinders=cylinders),),
        load_steps=(
            LoadStep(word="100", index=0, held_open=frozenset()),
            LoadStep(word="50", index=1, held_open=frozenset({(1, Side.HEAD), (2, Side.HEAD)})),
            LoadStep(word="50 crank", index=2, held_open=frozenset({(1, Side.CRANK), (2, Side.CRANK)})),
            LoadStep(word="0", index=3, held_open=frozenset((n, side) for n in (1, 2) for side in Side)),
        ),
        limits=every + limits("stage1", {"discharge_temperature": 403.15}),
    )  # fmt: skip


def make_up() -> Unit:
    """K-220: hydrogen-rich gas, three stages, four throws; no limits entered."""

    def cylinder(number: int, bore: float, head: float, crank: float, mass: float) -> Cylinder:
        return Cylinder(
            number=number, bore_m=bore, rod_diameter_m=0.090, reciprocating_mass_kg=mass,
            valve_natural_frequency_hz=70.0, ends=ends(head, crank, 0.06),
        )  # fmt: skip

    first = (cylinder(1, 0.320, 0.14, 0.16, 470.0), cylinder(2, 0.320, 0.14, 0.16, 470.0))
    return Unit(
        id="K-220", name="make-up", service="hydrogen-rich gas", stroke_m=0.32, connecting_rod_m=0.80,
        rated_speed_rad_s=375 * RPM, ambient_pressure_pa=101300.0, composition=HYDROGEN_RICH,
        domain=HYDROGEN_DOMAIN,
        stages=(
            Stage(number=1, cylinders=first),
            Stage(number=2, cylinders=(cylinder(3, 0.315, 0.14, 0.16, 470.0),)),
            Stage(number=3, cylinders=(cylinder(4, 0.225, 0.15, 0.18, 420.0),)),
        ),
        load_steps=(
            LoadStep(word="100", index=0, held_open=frozenset()),
            *(
                LoadStep(word=word, index=index, held_open=frozenset((n, side) for n in (1, 2, 3, 4)))
                for index, (word, side) in enumerate(
                    (("50-head-open", Side.HEAD), ("50-crank-open", Side.CRANK)), start=1
                )
            ),
        ),
    )  # fmt: skip


BOOSTER_INPUTS = (
    "stage1.suction_pressure", "stage1.discharge_pressure", "stage1.suction_temperature",
    "stage1.discharge_temperature", "unit.speed", "unit.flow", "unit.electrical_power", "unit.load_step",
    "unit.run_signal",
)  # fmt: skip
BOOSTER_FRAME = np.array([29.81e5, 70.46e5, 303.0, 374.3, 900 * RPM, 252.0, 690e3, 0.0, 1.0])
BOOSTER_LIMITS = (15e3, 25e3, 1.0, 1.0, 1 * RPM, 7.4, 12e3, 0.0, 0.0)

MAKE_UP_INPUTS = (
    "stage1.suction_pressure", "stage1.discharge_pressure", "stage2.suction_pressure",
    "stage2.discharge_pressure", "stage3.suction_pressure", "stage3.discharge_pressure",
    "stage1.suction_temperature", "stage1.discharge_temperature", "stage2.suction_temperature",
    "stage2.discharge_temperature", "stage3.suction_temperature", "stage3.discharge_temperature",
    "unit.flow", "unit.electrical_power", "unit.load_step", "unit.run_signal",
)  # fmt: skip
MAKE_UP_FRAME = np.array(
    [17.88e5, 37.78e5, 37.57e5, 75.99e5, 75.41e5, 141.18e5, 308.0, 381.4, 309.0, 377.4, 308.0, 370.5,
     373.0, 2650e3, 0.0, 1.0]
)  # fmt: skip
MAKE_UP_LIMITS = (
    10e3, 15e3, 15e3, 30e3, 30e3, 62.5e3, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 10.0, 40e3, 0.0, 0.0,
)  # fmt: skip
