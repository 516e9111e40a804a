"""The train beside the invented plant, uncalibrated: verification, not validation.

The plant turns its crank with its own gas law, valves, walls and vessels; the train gets what holds it
outside, the nameplate, and the data sheets of coolers and lines. Bars come from what the two codes differed
by when the model was first written (flow .4 %, power 2.2 %, pressures between 1.2 %, temperature 2.6 K),
rounded up; a wider one names its reason.
"""

import functools
import os
from dataclasses import dataclass, replace
from importlib.resources import files
from pathlib import Path

import numpy as np
import pytest

# Machine code of the plant is kept between test runs; a change of its sources makes it anew.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))

from agent.siteplan.load import load_site
from model.corrections import Corrections
from model.gas import build_surface
from model.machine import Unit
from model.surface import GasSurface
from model.train import Lines, TrainBoundary, TrainSolution, solve_train
from model.train_streams import StageLine
from simulator.equipment import NOMINAL, SealedDraw
from simulator.machine import Machine
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.outcome import MachineOutcome

pytestmark = pytest.mark.slow

FLOW, POWER, PRESSURE, TEMPERATURE = 0.01, 0.03, 0.015, 3.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """Something that differs from the usual conditions of a unit, and bars for it."""

    name: str
    suction: float = 1.0
    discharge: float = 1.0
    cooling_k: float = 0.0
    step: int = 0
    first_recycle: float = 0.0
    pressure: float = PRESSURE
    temperature: float = TEMPERATURE


# Half of a double-acting throw delivers in gulps: the bottles of the plant breathe by several per cent, and
# the mean of the pressure is no longer that of the flow. Measured: up to 3.1 % before the last stage.
BREATHING = 0.035
# The ratio of the second stage is 1.7 % high, as the two pressures about it say: 1.3 K, and with warmer water
# a little more. Measured: 3.3 K.
SECOND_STAGE_K = 3.5
HALF_K = 4.0

USUALLY = Event(name="design")
EVENTS = {
    "K-110": (
        USUALLY, Event(name="suction -10 %", suction=0.9), Event(name="suction +10 %", suction=1.1),
        Event(name="discharge +5 %", discharge=1.05), Event(name="half load", step=1),
    ),
    "K-220": (
        Event(name="design", temperature=SECOND_STAGE_K),
        Event(name="suction -10 %", suction=0.9),
        Event(name="suction +10 %", suction=1.1, temperature=SECOND_STAGE_K),
        Event(name="discharge -10 %", discharge=0.9, temperature=SECOND_STAGE_K),
        Event(name="discharge +10 %", discharge=1.1, temperature=SECOND_STAGE_K),
        Event(name="water +8 K", cooling_k=8.0, temperature=SECOND_STAGE_K),
        Event(name="water -8 K", cooling_k=-8.0, temperature=SECOND_STAGE_K),
        Event(name="head ends open", step=1, pressure=BREATHING, temperature=HALF_K),
        Event(name="crank ends open", step=2, pressure=BREATHING, temperature=HALF_K),
        Event(name="first recycle", first_recycle=0.02),
    ),
    "K-330": (
        USUALLY, Event(name="suction -10 %", suction=0.9), Event(name="suction +10 %", suction=1.1),
        Event(name="discharge -10 %", discharge=0.9), Event(name="discharge +10 %", discharge=1.1),
        Event(name="water +8 K", cooling_k=8.0), Event(name="water -8 K", cooling_k=-8.0),
        Event(name="half load", step=1), Event(name="first recycle", first_recycle=0.02),
    ),
}  # fmt: skip
CASES = [
    pytest.param(name, event, id=f"{name} {event.name}")
    for name, events in EVENTS.items()
    for event in events
]


@functools.cache
def plate(name: str) -> Unit:
    return load_site(Path(str(files("simulator") / "sites" / "ostmere.yaml"))).unit(name).unit


@functools.cache
def gas_of(name: str) -> GasSurface:
    return build_surface(plate(name).composition, plate(name).domain)


def lines_of(name: str) -> Lines:
    sheet = EQUIPMENT[name]
    return Lines(
        design_flow_mol_s=sheet.design_flow_mol_s, inlet_drop=sheet.inlet_drop,
        stages=tuple(
            StageLine(cooler_effectiveness=s.cooler_effectiveness, drop=s.line_drop + s.cooler_drop)
            for s in sheet.stages
        ),
    )  # fmt: skip


@functools.cache
def both(name: str, event: Event, draw: SealedDraw | int = NOMINAL) -> tuple[MachineOutcome, TrainSolution]:
    usual, unit = USUAL[name], plate(name)
    around = replace(
        usual,
        suction_pressure_pa=usual.suction_pressure_pa * event.suction,
        discharge_pressure_pa=usual.discharge_pressure_pa * event.discharge,
        cooling_water_k=usual.cooling_water_k + event.cooling_k,
        held_open=unit.load_steps[event.step].held_open,
        first_recycle=event.first_recycle,
    )
    real = Machine(unit, EQUIPMENT[name], around, draw).settle(most=800, averaged=20)
    water = real.stages[1].water_fraction if len(real.stages) > 1 else 0.0
    boundary = TrainBoundary(
        suction_pressure_pa=around.suction_pressure_pa, suction_temperature_k=around.suction_temperature_k,
        discharge_pressure_pa=around.discharge_pressure_pa, speed_rad_s=real.speed_rad_s,
        load_step=event.step, cooling_k=around.cooling_water_k, water_saturation=around.saturation,
        first_recycle_mol_s=np.array([real.first_recycle_mol_s * (1 - water)]),
    )  # fmt: skip
    found = solve_train(unit, gas_of(name), Corrections.nominal(), boundary, lines=lines_of(name))
    return real, found.require()


def delivered_k(name: str, real: MachineOutcome, stage: int) -> float:
    """Temperature of what a stage delivers, by flow: the mean over time of a breathing bottle is not."""
    cylinders = [real.cylinder(c.number) for c in plate(name).stages[stage].cylinders]
    flow = sum(c.discharge_flow_mol_s for c in cylinders)
    return sum(c.discharge_flow_mol_s * c.delivered_temperature_k for c in cylinders) / flow


@pytest.mark.parametrize(("name", "event"), CASES)
def test_the_train_meets_the_plant(name: str, event: Event) -> None:
    real, found = both(name, event)
    assert found.inlet_dry_mol_s[0] == pytest.approx(real.inlet_dry_mol_s, rel=FLOW)
    assert found.unit_power_w[0] == pytest.approx(real.indicated_power_w, rel=POWER)
    for k, stage in enumerate(real.stages):
        assert found.suction_pressure_pa[0, k] == pytest.approx(stage.suction_pressure_pa, rel=event.pressure)
        assert found.discharge_pressure_pa[0, k] == pytest.approx(
            stage.discharge_pressure_pa, rel=event.pressure
        )
        assert found.suction_temperature_k[0, k] == pytest.approx(stage.suction_temperature_k, abs=1.0)
        hot = delivered_k(name, real, k) if event.step else stage.discharge_temperature_k
        assert found.discharge_temperature_k[0, k] == pytest.approx(hot, abs=event.temperature)


@pytest.mark.parametrize("name", ["K-220", "K-330"])
def test_changes_are_those_of_the_plant(name: str) -> None:
    """What an event changes is met better than the state itself: differences of the codes cancel."""
    real, found = both(name, EVENTS[name][0])
    for event in EVENTS[name]:
        if event.step or event.name == "design":
            continue
        real_then, found_then = both(name, event)
        for k in range(1, len(real.stages)):
            plant = real_then.stages[k].suction_pressure_pa / real.stages[k].suction_pressure_pa
            model = found_then.suction_pressure_pa[0, k] / found.suction_pressure_pa[0, k]
            assert model == pytest.approx(plant, rel=0.006), event.name
        plant = real_then.inlet_dry_mol_s / real.inlet_dry_mol_s
        assert found_then.inlet_dry_mol_s[0] / found.inlet_dry_mol_s[0] == pytest.approx(plant, rel=0.007)
        plant = real_then.indicated_power_w / real.indicated_power_w
        assert found_then.unit_power_w[0] / found.unit_power_w[0] == pytest.approx(plant, rel=0.008)


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_a_machine_as_built_is_met_too(name: str) -> None:
    """With the sealed draw of valves and walls the model does not know: half as much again."""
    event = EVENTS[name][0]
    real, found = both(name, event, SEED)
    assert found.inlet_dry_mol_s[0] == pytest.approx(real.inlet_dry_mol_s, rel=1.5 * FLOW)
    assert found.unit_power_w[0] == pytest.approx(real.indicated_power_w, rel=1.5 * POWER)
    for k, stage in enumerate(real.stages):
        assert found.suction_pressure_pa[0, k] == pytest.approx(stage.suction_pressure_pa, rel=1.5 * PRESSURE)
        assert found.discharge_temperature_k[0, k] == pytest.approx(
            stage.discharge_temperature_k, abs=1.5 * TEMPERATURE
        )


@pytest.mark.parametrize(("name", "rel"), [("K-220", 0.02), ("K-330", 0.02)])
def test_the_knock_outs_drain_what_the_plant_drains(name: str, rel: float) -> None:
    real, found = both(name, EVENTS[name][0])
    for k, stage in enumerate(real.stages):
        assert found.condensate_mol_s[0, k] == pytest.approx(stage.condensate_mol_s, rel=rel)
        assert found.water_fraction[0, k] == pytest.approx(stage.water_fraction, rel=rel)
