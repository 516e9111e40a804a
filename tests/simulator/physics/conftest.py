# ruff: noqa: PLR0917 - a cylinder has that many numbers
"""Units and single-cylinder rigs for the tests of the plant's physics."""

import functools
import math
import os
from collections.abc import Callable, Mapping
from dataclasses import replace
from importlib.resources import files
from pathlib import Path

import pytest

# Machine code of the plant is kept between test runs; a change of its sources makes it anew.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[3] / ".pytest_cache" / "plant"))

from agent.siteplan.load import load_site
from model.machine import Cylinder, End, GasDomain, Side, Stage, Unit
from simulator.equipment import (
    NOMINAL,
    Driver,
    DriverKind,
    Equipment,
    SealedDraw,
    StageEquipment,
    Surroundings,
)
from simulator.faults import Fault, Faults
from simulator.machine import Machine
from simulator.ostmere import EQUIPMENT, USUAL
from simulator.outcome import MachineOutcome

NATURAL_GAS: Mapping[str, float] = {
    "methane": 0.900,
    "ethane": 0.050,
    "propane": 0.015,
    "n-butane": 0.005,
    "nitrogen": 0.015,
    "carbon dioxide": 0.015,
}
HYDROGEN_RICH: Mapping[str, float] = {
    "hydrogen": 0.900,
    "methane": 0.070,
    "ethane": 0.015,
    "propane": 0.005,
    "nitrogen": 0.010,
}
RPM = 2.0 * math.pi / 60.0


def cylinder(
    number: int,
    bore: float,
    rod: float,
    mass: float,
    clearance: tuple[float, float],
    area: float,
    frequency: float,
) -> Cylinder:
    sides = zip((Side.HEAD, Side.CRANK), clearance, strict=True)
    ends = (End(side=s, clearance=c, suction_area_ratio=area, discharge_area_ratio=area) for s, c in sides)
    return Cylinder(
        number=number,
        bore_m=bore,
        rod_diameter_m=rod,
        reciprocating_mass_kg=mass,
        valve_natural_frequency_hz=frequency,
        ends=tuple(ends),
    )


def unit(
    name: str,
    gas: Mapping[str, float],
    stroke: float,
    rod: float,
    rpm: float,
    stages: tuple[tuple[Cylinder, ...], ...],
) -> Unit:
    return Unit(
        id=name,
        name=name,
        service="test",
        stroke_m=stroke,
        connecting_rod_m=rod,
        rated_speed_rad_s=rpm * RPM,
        ambient_pressure_pa=1.013e5,
        composition=gas,
        domain=GasDomain(
            low_temperature_k=270.0, high_temperature_k=450.0, low_pressure_pa=1e5, high_pressure_pa=2e7
        ),
        stages=tuple(Stage(number=i + 1, cylinders=c) for i, c in enumerate(stages)),
        load_steps=(),
    )


def _k110() -> Unit:
    throws = tuple(cylinder(n, 0.195, 0.063, 165.0, (0.16, 0.18), 0.06, 150.0) for n in (1, 2))
    return unit("K-110", NATURAL_GAS, 0.14, 0.36, 900.0, (throws,))


def _k220() -> Unit:
    first = tuple(cylinder(n, 0.320, 0.090, 470.0, (0.14, 0.16), 0.06, 70.0) for n in (1, 2))
    second = (cylinder(3, 0.315, 0.090, 470.0, (0.14, 0.16), 0.06, 70.0),)
    third = (cylinder(4, 0.225, 0.090, 420.0, (0.15, 0.18), 0.06, 70.0),)
    return unit("K-220", HYDROGEN_RICH, 0.32, 0.80, 375.0, (first, second, third))


@functools.cache
def _k330() -> Unit:
    return load_site(Path(str(files("simulator") / "sites" / "ostmere.yaml"))).unit("K-330").unit


UNITS: Mapping[str, Callable[[], Unit]] = {"K-110": _k110, "K-220": _k220, "K-330": _k330}


def make(
    name: str,
    *faults: Fault,
    draw: SealedDraw | int = NOMINAL,
    steps: int = 1800,
    around: Surroundings | None = None,
) -> Machine:
    """A unit of Ostmere Works under dry gas, or under what is given."""
    machine = Machine(
        UNITS[name](),
        EQUIPMENT[name],
        around or replace(USUAL[name], saturation=0.0),
        draw,
        steps=steps,
    )
    machine.change(faults=Faults(present=faults))
    return machine


@functools.cache
def settle(name: str, *faults: Fault, wet: bool = False, steps: int = 1800) -> MachineOutcome:
    """The same, settled; kept, since many tests look at the same states."""
    around = USUAL[name] if wet else None
    return make(name, *faults, steps=steps, around=around).settle(averaged=20)


def single(
    gas: Mapping[str, float],
    *,
    rpm: float,
    ratio: float,
    suction_pa: float = 20e5,
    suction_k: float = 308.0,
    clearance: tuple[float, float] = (0.15, 0.17),
    mass: float = 250.0,
    held_open: frozenset[tuple[int, Side]] = frozenset(),
    steps: int = 1800,
) -> Machine:
    """One cylinder (bore 250, rod 65, stroke 150, connecting rod 400 mm) between two boundless vessels."""
    only = cylinder(1, 0.25, 0.065, mass, clearance, 0.055, 100.0)
    return between_vessels(
        unit("rig", gas, 0.15, 0.40, rpm, ((only,),)),
        suction_pa,
        suction_pa * ratio,
        suction_k,
        StageEquipment(design_suction_pa=suction_pa, design_discharge_pa=suction_pa * ratio),
        held_open=held_open,
        steps=steps,
    )


def between_vessels(
    what: Unit,
    suction_pa: float,
    discharge_pa: float,
    suction_k: float,
    vessels: StageEquipment,
    *,
    held_open: frozenset[tuple[int, Side]] = frozenset(),
    draw: SealedDraw = NOMINAL,
    steps: int = 1800,
) -> Machine:
    equipment = Equipment(
        stages=(vessels,),
        phases_deg=(0.0,),
        design_flow_mol_s=100.0,
        design_suction_temperature_k=suction_k,
        driver=Driver(kind=DriverKind.VARIABLE, rated_power_w=5e5),
        pinned=True,
    )
    around = Surroundings(
        suction_pressure_pa=suction_pa,
        suction_temperature_k=suction_k,
        discharge_pressure_pa=discharge_pa,
        speed_rad_s=what.rated_speed_rad_s,
        held_open=held_open,
    )
    return Machine(what, equipment, around, draw, steps=steps)


@pytest.fixture(name="settled", scope="session")
def _settled() -> Callable[..., MachineOutcome]:
    return settle


@pytest.fixture(name="machine_of", scope="session")
def _machine_of() -> Callable[..., Machine]:
    return make


@pytest.fixture(name="rig", scope="session")
def _rig() -> Callable[..., Machine]:
    return single


@pytest.fixture(name="vessels", scope="session")
def _vessels() -> Callable[..., Machine]:
    return between_vessels


@pytest.fixture(name="natural_gas", scope="session")
def _natural_gas() -> Mapping[str, float]:
    return NATURAL_GAS


@pytest.fixture(name="hydrogen_rich", scope="session")
def _hydrogen_rich() -> Mapping[str, float]:
    return HYDROGEN_RICH
