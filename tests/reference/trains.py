"""Text-book machines of several stages: single-acting ends, a perfect gas, coolers that cool to the suction
temperature, run as whole trains: what holds them outside goes in, what is between the stages comes out."""

import math
from collections.abc import Mapping
from functools import lru_cache

import numpy as np

from model.corrections import Corrections
from model.gas import perfect_gas
from model.machine import Cylinder, End, GasDomain, LoadStep, Side, Stage, Unit
from model.surface import GAS_CONSTANT, GasSurface
from model.train import TrainBoundary, TrainSolution, solve_train
from tests.reference.textbook import swept_bore

Inputs = Mapping[str, float]
TURN = 2 * math.pi
DOMAIN = GasDomain(
    low_temperature_k=260.0, high_temperature_k=440.0, low_pressure_pa=4e4, high_pressure_pa=4e6
)


@lru_cache(maxsize=32)
def _gas(molar_mass_kg_mol: float, exponent: float) -> GasSurface:
    return perfect_gas(molar_mass_kg_mol, exponent, DOMAIN)


def run(
    swept: tuple[float, ...],
    clearances: tuple[float, ...],
    *,
    p1: float,
    p2: float,
    t1: float,
    n: float,
    gas_constant: float = 287.0,
    speed: float = TURN,
) -> TrainSolution:
    """Solve a machine for its headers; swept volumes in m3."""
    stroke = 0.3
    stages = []
    for k, (volume, clearance) in enumerate(zip(swept, clearances, strict=True), start=1):
        bore = swept_bore(volume, stroke)
        end = End(side=Side.HEAD, clearance=clearance, suction_area_ratio=0.1, discharge_area_ratio=0.1)
        cylinder = Cylinder(
            number=k, bore_m=bore, rod_diameter_m=bore / 5, reciprocating_mass_kg=10.0, ends=(end,)
        )
        stages.append(Stage(number=k, cylinders=(cylinder,)))
    unit = Unit(
        id="book", name="book", service="book", stroke_m=stroke, connecting_rod_m=4 * stroke,
        rated_speed_rad_s=speed, ambient_pressure_pa=101325.0, composition={}, domain=DOMAIN,
        stages=tuple(stages), load_steps=(LoadStep(word="100", index=0, held_open=frozenset()),),
    )  # fmt: skip
    boundary = TrainBoundary(
        suction_pressure_pa=np.array([p1]), suction_temperature_k=t1, discharge_pressure_pa=p2,
        speed_rad_s=speed, cooling_k=t1,
    )  # fmt: skip
    return solve_train(unit, _gas(GAS_CONSTANT / gas_constant, n), Corrections.ideal(), boundary).require()


def alike(x: Inputs, stages: int) -> TrainSolution:
    """Stages of equal clearance swept in the ratio of the pressures that share the work evenly."""
    usual = {"swept": 0.01, "clearance": 0.05, "t1": 300.0, "n": 1.3} | dict(x)
    ratio = (x["p2"] / x["p1"]) ** (1 / stages)
    first, clearance = usual.pop("swept"), usual.pop("clearance")
    usual.pop("heat_capacity", None)
    return run(tuple(first * ratio**-k for k in range(stages)), (clearance,) * stages, **usual)


def second_pressure_of_three(x: Inputs) -> float:
    """[bar]"""
    return float(alike(x, 3).discharge_pressure_pa[0, 0]) / 1e5


def third_pressure_of_three(x: Inputs) -> float:
    """[bar]"""
    return float(alike(x, 3).discharge_pressure_pa[0, 1]) / 1e5


def _mass_flow(x: Inputs, found: TrainSolution) -> float:
    """[kg/s]"""
    return float(found.inlet_dry_mol_s[0]) * GAS_CONSTANT / x.get("gas_constant", 287.0)


def drawn_litres_of_three(x: Inputs) -> float:
    """Volume drawn in by the first stage in a turn, at suction [l]."""
    found = alike(x, 3)
    return float(found.inlet_dry_mol_s[0]) * GAS_CONSTANT * 300.0 / x["p1"] * 1e3


def delivered_litres_of_three(x: Inputs) -> float:
    """Volume delivered by the last stage in a turn, hot [l]."""
    found = alike(x, 3)
    hot = float(found.discharge_temperature_k[0, 2])
    return float(found.inlet_dry_mol_s[0]) * GAS_CONSTANT * hot / x["p2"] * 1e3


def last_temperature_of_three(x: Inputs) -> float:
    """[K]"""
    return float(alike(x, 3).discharge_temperature_k[0, 2])


def work_of_three(x: Inputs) -> float:
    """[kJ/kg]"""
    found = alike(x, 3)
    return float(found.unit_power_w[0]) / _mass_flow(x, found) / 1e3


def work_of_two(x: Inputs) -> float:
    """[kJ/kg]"""
    found = alike(x, 2)
    return float(found.unit_power_w[0]) / _mass_flow(x, found) / 1e3


def cooling_of_two(x: Inputs) -> float:
    """Heat of the cooler between, with the heat capacity of the book [kJ/kg]."""
    found = alike(x, 2)
    return x["heat_capacity"] * float(found.discharge_temperature_k[0, 0] - found.cooled_temperature_k[0, 0])


def _two_sizes(x: Inputs) -> TrainSolution:
    """The book's volumes hold the clearance: swept volume is volume / (1 + clearance)."""
    rest = {k: v for k, v in x.items() if k in {"p1", "p2", "t1", "n", "gas_constant", "speed"}}
    usual = {"t1": 290.0, "n": 1.25} | rest
    clearances = (x["low_clearance"], x["high_clearance"])
    swept = (x["low_volume"] / (1 + clearances[0]), x["high_volume"] / (1 + clearances[1]))
    return run(swept, clearances, **usual)


def pressure_between(x: Inputs) -> float:
    """[bar]"""
    return float(_two_sizes(x).suction_pressure_pa[0, 1]) / 1e5


def mass_per_minute(x: Inputs) -> float:
    """[kg/min]"""
    return 60 * _mass_flow(x, _two_sizes(x))


def two_stage_power(x: Inputs) -> float:
    """[kW]"""
    return float(_two_sizes(x).unit_power_w[0]) / 1e3
