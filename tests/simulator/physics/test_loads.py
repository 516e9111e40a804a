# ruff: noqa: PLR0917 - one argument a column of the table
"""Gas load, inertia and their sum at the crosshead pin against textbook engines.

The plant's loads are reckoned from its pressure traces; here the traces are the textbook's.
"""

import math
from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np
import pytest

from model.machine import Cylinder, End, GasDomain, Side, Stage, Unit
from simulator.equipment import StageEquipment
from simulator.machine import Machine
from simulator.outcome import Card

STEPS = 3600
AIR_PA = 101_325.0


def engine(
    bore: float, stroke: float, piston_rod: float, connecting_rod: float, mass: float, rpm: float, ends: int
) -> Unit:
    sides = tuple(
        End(side=s, clearance=0.1, suction_area_ratio=0.1, discharge_area_ratio=0.1)
        for s in (Side.HEAD, Side.CRANK)[:ends]
    )
    only = Cylinder(
        number=1, bore_m=bore, rod_diameter_m=piston_rod, reciprocating_mass_kg=mass,
        valve_natural_frequency_hz=200.0, ends=sides,
    )  # fmt: skip
    return Unit(
        id="engine", name="engine", service="test", stroke_m=stroke, connecting_rod_m=connecting_rod,
        rated_speed_rad_s=rpm * math.pi / 30.0, ambient_pressure_pa=AIR_PA, composition={"nitrogen": 1.0},
        domain=GasDomain(
            low_temperature_k=250, high_temperature_k=600, low_pressure_pa=1e4, high_pressure_pa=1e7
        ),
        stages=(Stage(number=1, cylinders=(only,)),), load_steps=(),
    )  # fmt: skip


def card(vessels: Callable[..., Machine], what: Unit, gauge_pa: Mapping[Side, float]) -> Card:
    """Loads of a cylinder whose ends stand at steady pressures above that of the air."""
    both = StageEquipment(design_suction_pa=2e5, design_discharge_pa=4e5)
    machine = vessels(what, 2e5, 4e5, 300.0, both, steps=STEPS)
    machine.run(1)
    run = machine._last
    assert run is not None
    for e, place in enumerate(run.places):
        run.trace[e] = AIR_PA + gauge_pa[place.end.side]
    return machine.cards()[0]


def at(degrees: float) -> int:
    return round(degrees / 360.0 * STEPS)


@pytest.mark.parametrize(
    ("unit", "head_pa", "crank_pa", "degrees", "gas_n", "inertia_n"),
    [
        # source: Khurmi and Gupta, Theory of Machines, example 15.12: gas 23 699 N, inertia 1 340 N by the
        # two-term formula, 1 359.1 N by exact kinematics
        pytest.param(
            engine(0.250, 0.400, 0.050, 0.600, 60.0, 120.0, 2), 550e3, 70e3, 45.0, 23_699.0, 1_359.1,
            id="Khurmi 15.12",
        ),
        # source: Khurmi and Gupta, example 15.8: gas 2 017.5 N, inertia -14 161 N; exact -14 144.9 N
        pytest.param(
            engine(0.300, 0.450, 0.050, 1.200, 225.0, 200.0, 2), 30e3, 1.5e3, 125.0, 2_017.5, -14_144.9,
            id="Khurmi 15.8",
        ),
        # source: Khurmi and Gupta, example 15.9: gas 3 519 N, inertia 1 671 N; exact x 0.94466 / 0.94035
        pytest.param(
            engine(0.080, 0.100, 0.020, 0.200, 1.0, 1800.0, 1), 700e3, 0.0, 33.0, 3_519.0, 1_678.7,
            id="Khurmi 15.9",
        ),
    ],
)  # fmt: skip
def test_loads_of_textbook_engines(
    vessels: Callable[..., Machine],
    unit: Unit,
    head_pa: float,
    crank_pa: float,
    degrees: float,
    gas_n: float,
    inertia_n: float,
) -> None:
    found = card(vessels, unit, {Side.HEAD: head_pa, Side.CRANK: crank_pa})
    i = at(degrees)
    # the books count pressure on the cover side as driving; here that is compression of the rod, below zero
    assert -found.gas_load_n[i] == pytest.approx(gas_n, rel=5e-4)
    assert found.pin_load_n[i] - found.gas_load_n[i] == pytest.approx(inertia_n, rel=5e-4)


@pytest.mark.parametrize(
    ("unit", "pressure_pa", "degrees", "rpm", "exact"),
    [
        # source: Khurmi and Gupta, example 15.9: no net load at 2612 rpm by the two-term formula; the exact
        # acceleration is 0.94466 / 0.94035 of that
        pytest.param(
            engine(0.080, 0.100, 0.020, 0.200, 1.0, 2612.0, 1), 700e3, 33.0, 2612.0, 2606.0, id="Khurmi 15.9"
        ),
        # source: Sarkar, Theory of Machines, example 5.4: reversal at 2528.4 rpm by the two-term formula; the
        # exact acceleration is 1.06344 / 1.06058 of that. The engine stands: its weight is entered too.
        pytest.param(
            engine(0.100, 0.120, 0.020, 0.250, 1.2, 2528.4, 1), 680e3 + 1.2 * 9.81 / 7.854e-3, 25.0, 2528.4,
            2525.0, id="Sarkar 5.4",
        ),
    ],
)  # fmt: skip
def test_speed_at_which_the_net_load_vanishes(
    vessels: Callable[..., Machine], unit: Unit, pressure_pa: float, degrees: float, rpm: float, exact: float
) -> None:
    found = card(vessels, unit, {Side.HEAD: pressure_pa, Side.CRANK: 0.0})
    i = at(degrees)
    inertia = found.pin_load_n[i] - found.gas_load_n[i]
    # inertia goes with the square of speed; the books round pressures and speeds to three digits
    assert rpm * math.sqrt(-found.gas_load_n[i] / inertia) == pytest.approx(exact, rel=5e-4)


def test_gas_load_behind_perfect_valves_is_that_of_the_line_pressures(
    vessels: Callable[..., Machine], natural_gas: Mapping[str, float]
) -> None:
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 85: compression Pd A_he - Ps A_ce,
    # tension Pd A_ce - Ps A_he, pressures absolute; the air on the rod's area is added by hand
    low, high = 20e5, 60e5
    weightless = StageEquipment(
        design_suction_pa=low, design_discharge_pa=high, valve_preload=1e-6, valve_full_lift=3e-6,
        nozzle_area=1e3,
    )  # fmt: skip
    unit = engine(0.250, 0.150, 0.065, 0.400, 250.0, 300.0, 2)
    ends = tuple(replace(e, suction_area_ratio=1.0, discharge_area_ratio=1.0) for e in unit.cylinders[0].ends)
    only = replace(unit.cylinders[0], ends=ends, valve_natural_frequency_hz=1500.0)
    unit = replace(unit, composition=natural_gas, stages=(Stage(number=1, cylinders=(only,)),))
    machine = vessels(unit, low, high, 308.0, weightless, steps=7200)
    machine.run(6)
    got = machine.run(4).cylinders[0]
    air = AIR_PA * (only.head_area_m2 - only.crank_area_m2)
    compression = high * only.head_area_m2 - low * only.crank_area_m2 - air
    tension = high * only.crank_area_m2 - low * only.head_area_m2 + air
    assert got.gas_load_compression_n == pytest.approx(compression, rel=5e-3)
    assert got.gas_load_tension_n == pytest.approx(tension, rel=5e-3)


def test_without_mass_the_pin_carries_the_gas_load(vessels: Callable[..., Machine]) -> None:
    unit = engine(0.250, 0.400, 0.050, 0.600, 1e-9, 600.0, 2)
    found = card(vessels, unit, {Side.HEAD: 3e5, Side.CRANK: 5e5})
    assert np.allclose(found.pin_load_n, found.gas_load_n, rtol=1e-9)
