"""Text-book machines: one single-acting end, a perfect gas, no valve loss, run through the one door."""

import math
from collections.abc import Mapping

from model.evaluate import Corrections, Evaluation, Measured, evaluate
from model.gas import perfect_gas
from model.machine import Cylinder, End, GasDomain, LoadStep, Side, Stage, Unit
from model.surface import GAS_CONSTANT

AIR = 0.0289647  # kg/mol, from memory; no outcome hangs on it unless it is an input
NAMES = ("stage1.suction_pressure", "stage1.discharge_pressure", "stage1.suction_temperature", "unit.speed")


def run(
    *,
    p1: float,
    p2: float,
    t1: float,
    n: float,
    clearance: float,
    bore: float = 0.2,
    stroke: float = 0.3,
    speed: float = 50.0,
    gas_constant: float = GAS_CONSTANT / AIR,
) -> Evaluation:
    """Evaluate one head end compressing a perfect gas whose isentropic exponent is n."""
    t2 = t1 * (p2 / p1) ** ((n - 1) / n)
    domain = GasDomain(
        low_temperature_k=0.9 * t1,
        high_temperature_k=1.1 * t2,
        low_pressure_pa=p1 / 2,
        high_pressure_pa=2 * p2,
    )
    gas = perfect_gas(GAS_CONSTANT / gas_constant, n, domain)
    end = End(side=Side.HEAD, clearance=clearance, suction_area_ratio=0.1, discharge_area_ratio=0.1)
    cylinder = Cylinder(
        number=1, bore_m=bore, rod_diameter_m=bore / 5, reciprocating_mass_kg=10.0, ends=(end,)
    )
    unit = Unit(
        id="book", name="book", service="book", stroke_m=stroke, connecting_rod_m=4 * stroke,
        rated_speed_rad_s=speed, ambient_pressure_pa=101325.0, composition={}, domain=domain,
        stages=(Stage(number=1, cylinders=(cylinder,)),),
        load_steps=(LoadStep(word="100", index=0, held_open=frozenset()),),
    )  # fmt: skip
    measured = Measured.from_inputs(unit, NAMES, [p1, p2, t1, speed])
    return evaluate(unit, gas, Corrections.ideal(), measured)


def value(evaluation: Evaluation, name: str) -> float:
    return float(evaluation.column(name).values[0])


def efficiency(inputs: Mapping[str, float]) -> float:
    """Geometric volumetric efficiency."""
    machine = {"t1": 300.0} | {k: v for k, v in inputs.items() if not k.endswith("_free")}
    return value(run(**machine), "stage1.volumetric_efficiency")


def free_efficiency(inputs: Mapping[str, float]) -> float:
    """Volumetric efficiency referred to free air, which the books also call by that name."""
    referred = inputs["p1"] / inputs["p_free"] * inputs["t_free"] / inputs["t1"]
    return efficiency(inputs) * referred


def free_air(inputs: Mapping[str, float]) -> float:
    """Free air delivered [m3/min]."""
    machine = {k: v for k, v in inputs.items() if not k.endswith("_free")}
    moles = value(run(**machine), "stage1.stage_capacity")
    return moles * GAS_CONSTANT * inputs["t_free"] / inputs["p_free"] * 60


def mass_flow(inputs: Mapping[str, float]) -> float:
    """Mass flow [kg/min]."""
    return value(run(**inputs), "unit.mass_flow") * 60


def power(inputs: Mapping[str, float]) -> float:
    """Indicated power [kW]."""
    return value(run(**{"t1": 300.0} | dict(inputs)), "stage1.stage_power") / 1e3


def discharge_celsius(inputs: Mapping[str, float]) -> float:
    """Expected discharge temperature [degC]."""
    return discharge_kelvin(inputs) - 273.15


def discharge_fahrenheit(inputs: Mapping[str, float]) -> float:
    """Expected discharge temperature [degF]."""
    return discharge_celsius(inputs) * 9 / 5 + 32


def discharge_kelvin(inputs: Mapping[str, float]) -> float:
    """Expected discharge temperature [K]."""
    return value(run(**{"clearance": 0.05} | dict(inputs)), "stage1.expected_discharge_temperature")


def swept_bore(volume_m3: float, stroke_m: float) -> float:
    """Bore that sweeps a volume over a stroke."""
    return math.sqrt(4 * volume_m3 / (math.pi * stroke_m))
