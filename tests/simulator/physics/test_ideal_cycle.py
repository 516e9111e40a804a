# ruff: noqa: PLR0917 - one argument a column of the table
"""The limit of perfect valves, no heat and a perfect gas: the cycle has a closed form in every textbook."""

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from model.machine import Cylinder, End, GasDomain, Side, Stage, Unit
from simulator.eos import COLUMNS, COVOLUME, CP0, MOLAR_MASS, OFFSET, critical_flow
from simulator.equipment import SealedDraw, StageEquipment
from simulator.gas_data import GAS_CONSTANT, REFERENCE_TEMPERATURE_K, Floats
from simulator.machine import Machine
from simulator.outcome import MachineOutcome


def single_acting(bore: float, stroke: float, rpm: float, clearance: float) -> Unit:
    end = End(side=Side.HEAD, clearance=clearance, suction_area_ratio=2.0, discharge_area_ratio=2.0)
    only = Cylinder(
        number=1, bore_m=bore, rod_diameter_m=0.02, reciprocating_mass_kg=10.0, ends=(end,),
        valve_natural_frequency_hz=1500.0,
    )  # fmt: skip
    return Unit(
        id="ideal", name="ideal", service="test", stroke_m=stroke, connecting_rod_m=4.0 * stroke,
        rated_speed_rad_s=rpm * 2.0 * math.pi / 60.0, ambient_pressure_pa=101_325.0,
        composition={"nitrogen": 1.0},
        domain=GasDomain(
            low_temperature_k=250, high_temperature_k=600, low_pressure_pa=1e4, high_pressure_pa=1e7
        ),
        stages=(Stage(number=1, cylinders=(only,)),), load_steps=(),
    )  # fmt: skip


def perfect_gas(exponent: float) -> Floats:
    row = np.zeros(COLUMNS)
    row[CP0] = exponent / (exponent - 1.0)
    row[OFFSET] = GAS_CONSTANT * row[CP0] * REFERENCE_TEMPERATURE_K
    row[MOLAR_MASS] = 0.0287
    row[COVOLUME] = 0.0
    ratio, constant = critical_flow(exponent)
    row[-2:] = ratio, constant**2
    return row


def ideal(
    vessels: Callable[..., Machine], unit: Unit, low: float, high: float, kelvin: float, exponent: float
) -> MachineOutcome:
    """The plant's cylinder with nothing that is not in the textbook."""
    weightless = StageEquipment(
        design_suction_pa=low,
        design_discharge_pa=high,
        valve_preload=1e-6,
        valve_full_lift=3e-6,
        nozzle_area=1e3,
    )
    machine = vessels(
        unit, low, high, kelvin, weightless, draw=replace(SealedDraw(), wall_heat=0.0), steps=7200
    )
    hot = kelvin * (high / low) ** ((exponent - 1.0) / exponent)
    machine._gas[:] = perfect_gas(exponent)
    machine._bottle_temperature[:] = kelvin, hot
    machine._bottle_amount[:] = machine._volumes * np.array([low / kelvin, high / hot]) / GAS_CONSTANT
    machine._moving["temperature"] = machine._moving["passage_temperature"] = kelvin
    machine._row = lambda _water: perfect_gas(exponent)
    machine._apply()
    machine.run(6)
    return machine.run(4)


CASES = [
    # bore, stroke, rpm, clearance, n, P1, P2, T1, VE by 1 + c - c r^(1/n)
    # source: Joel, Basic Engineering Thermodynamics, example 14.1: VE 0.86004 geometric, 13.982 kW, 164.29 C
    pytest.param(0.200, 0.300, 500.0, 0.05, 1.3, 97e3, 550e3, 293.15, 0.86004, id="Joel 14.1"),
    # source: Singh, Applied Thermodynamics, example 16.3: VE 0.81284 geometric
    pytest.param(0.200, 0.300, 300.0, 0.05, 1.25, 97e3, 679e3, 308.0, 0.81284, id="Singh 16.3"),
    # source: Nag, Basic and Applied Thermodynamics, example 19.3: VE 0.7861 of 2000 cm3, 5.476 kW at 800 rpm
    pytest.param(0.1366, 0.13648, 800.0, 0.05, 1.25, 101.3e3, 810.4e3, 288.0, 0.7861, id="Nag 19.3"),
    # source: Mooney, Mechanical Engineering Thermodynamics, example 4: this clearance makes VE one half
    pytest.param(0.200, 0.300, 300.0, 0.204181, 1.3, 15.0, 75.0, 300.0, 0.5, id="Mooney 4"),
]


@pytest.mark.parametrize(
    ("bore", "stroke", "rpm", "clearance", "n", "low", "high", "kelvin", "expected"), CASES
)
def test_ideal_cycle(
    vessels: Callable[..., Machine],
    bore: float,
    stroke: float,
    rpm: float,
    clearance: float,
    n: float,
    low: float,
    high: float,
    kelvin: float,
    expected: float,
) -> None:
    if low < 1e3:  # given in psia
        low, high = low * 6894.757, high * 6894.757
    got = ideal(vessels, single_acting(bore, stroke, rpm, clearance), low, high, kelvin, n)
    cylinder, ratio = got.cylinders[0], high / low
    assert cylinder.ends[0].volumetric_efficiency == pytest.approx(expected, abs=2e-3)
    # source: the closed form of the cycle, W = n/(n-1) P1 (V1 - V4) (r^((n-1)/n) - 1)
    swept = math.pi / 4.0 * bore**2 * stroke
    drawn = swept * (1.0 + clearance - clearance * ratio ** (1.0 / n))
    work = n / (n - 1.0) * low * drawn * (ratio ** ((n - 1.0) / n) - 1.0)
    assert cylinder.indicated_power_w == pytest.approx(work * rpm / 60.0, rel=3e-3)
    assert cylinder.delivered_temperature_k == pytest.approx(kelvin * ratio ** ((n - 1.0) / n), abs=0.3)


def test_power_of_joels_and_nags_compressors(vessels: Callable[..., Machine]) -> None:
    got = ideal(vessels, single_acting(0.200, 0.300, 500.0, 0.05), 97e3, 550e3, 293.0, 1.3)
    assert got.indicated_power_w == pytest.approx(13_982.0, rel=3e-3)  # source: Joel, example 14.1
    assert got.cylinders[0].delivered_temperature_k - 273.0 == pytest.approx(164.29, abs=0.3)
    got = ideal(vessels, single_acting(0.1366, 0.13648, 800.0, 0.05), 101.3e3, 810.4e3, 288.0, 1.25)
    assert got.indicated_power_w == pytest.approx(5_476.0, rel=4e-3)  # source: Nag, example 19.3
