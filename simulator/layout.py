"""From nameplate, equipment, draw, faults and surroundings to the numbers the turning machine needs."""

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np

from model.machine import Cylinder, End, Side, Unit
from simulator.cylinder import CRANK, END, HEAD, Crank, Records
from simulator.eos import CHOKED_SQUARED, CRITICAL_RATIO, MOLAR_MASS, gas_row, gas_volume
from simulator.equipment import Equipment, SealedDraw, StageEquipment, Surroundings
from simulator.faults import FaultKind, Faults
from simulator.gas_data import Floats, mixture, transport
from simulator.kinematics import motion
from simulator.valves import flow_function
from simulator.wet_gas import EVAPORATION_HEAT_J_MOL

_FILM_CONSTANT = 0.053 * 0.82  # Adair, Qvale, Pearson (1972), mean over a turn
_MEAN_GAS_K = 350.0  # at which transport properties are taken
_EVAPORATED_IN_BOTTLE = 0.15  # share of carried-over liquid (invented plant)
_LEAST_CLEARANCE = 0.02


@dataclass(frozen=True, slots=True, kw_only=True)
class Place:
    """One end, with the cylinder and the stage it belongs to."""

    stage: int  # from 0
    throw: int  # from 0
    cylinder: Cylinder
    end: End

    @property
    def area_m2(self) -> float:
        return self.cylinder.area_m2(self.end.side)


def places(unit: Unit) -> tuple[Place, ...]:
    """All ends of a unit in the order of its cylinders."""
    found = []
    throw = 0
    for k, stage in enumerate(unit.stages):
        for cylinder in stage.cylinders:
            found += [Place(stage=k, throw=throw, cylinder=cylinder, end=end) for end in cylinder.ends]
            throw += 1
    return tuple(found)


def crank_of(unit: Unit, ends: Records, steps: int) -> Crank:
    """Volumes of all ends over one turn."""
    moved = motion(unit.stroke_m, unit.connecting_rod_m, steps)
    volume, per_radian = np.empty((len(ends), steps + 1)), np.empty((len(ends), steps + 1))
    for e, end in enumerate(ends):
        at = (np.arange(steps + 1) + end["offset"]) % steps
        x, slope = moved.position_m[at], moved.per_radian_m[at]
        if end["side"] < 0.0:
            x, slope = unit.stroke_m - x, -slope
        volume[e] = end["clearance"] + end["area"] * x
        per_radian[e] = end["area"] * slope
    return Crank(volume=volume, per_radian=per_radian)


def film_factor(cylinder: Cylinder, composition: Mapping[str, float], piston_speed_m_s: float) -> float:
    """Film coefficient of a cylinder's walls / density^0.8, SI.

    Parameters
    ----------
    cylinder : Cylinder
        For its bore.
    composition : Mapping[str, float]
        Component -> mole fraction.
    piston_speed_m_s : float
        Mean piston speed [m/s].

    Notes
    -----
    Nu = 0.053 Re^0.8 Pr^0.6 with twice the mean piston speed and the bore. The constant has not been
    seen in the original; the sealed draw moves it by 30 % anyway.

    References
    ----------
    Adair, Qvale, Pearson, Purdue Compressor Conference (1972), after later authors.
    """
    viscosity, conductivity = transport(composition, _MEAN_GAS_K)
    gas = mixture(composition)
    prandtl = gas.ideal_heat_capacity(_MEAN_GAS_K) * viscosity / (conductivity * gas.molar_mass_kg_mol)
    bore = cylinder.bore_m
    reynolds = 2.0 * piston_speed_m_s * bore / viscosity
    return float(_FILM_CONSTANT * conductivity / bore * reynolds**0.8 * prandtl**0.6)


def jacket_conductance(place: Place, unit: Unit, equipment: StageEquipment) -> float:
    """Heat transfer from wall to jacket water of one end [W/K]."""
    liner = 0.5 * math.pi * place.cylinder.bore_m * unit.stroke_m
    return equipment.jacket_w_m2k * (place.area_m2 + liner)


def _held_open(place: Place, around: Surroundings, faults: Faults) -> float:
    at = (place.cylinder.number, place.end.side)
    told = 1.0 if at in around.held_open else 0.0
    told *= 1.0 - min(1.0, faults.at_end(FaultKind.UNLOADER_STUCK_CLOSED, *at))
    return max(told, min(1.0, faults.at_end(FaultKind.UNLOADER_STUCK_OPEN, *at)))


def _clearance(place: Place, draw: SealedDraw, around: Surroundings, faults: Faults) -> float:
    at = (place.cylinder.number, place.end.side)
    added = around.added_clearance.get(at, 0.0) + faults.at_end(FaultKind.POCKET_OPEN, *at)
    return max(_LEAST_CLEARANCE, place.end.clearance + draw.clearance_shift) + added


def lay_out_ends(  # noqa: PLR0917 - one call only
    unit: Unit,
    equipment: Equipment,
    draw: SealedDraw,
    faults: Faults,
    around: Surroundings,
    steps: int,
    wall_temperature: Floats,
) -> Records:
    """Constants of all ends under the present faults and surroundings."""
    where = places(unit)
    dry = around.composition or unit.composition
    stroke = unit.stroke_m
    piston_speed = stroke * around.speed_rad_s / math.pi

    def each(value: Callable[[Place], float]) -> Floats:
        return np.array([value(p) for p in where])

    def of(p: Place) -> StageEquipment:
        return equipment.stages[p.stage]

    def leak(kind: FaultKind) -> Floats:
        return each(lambda p: faults.at_end(kind, p.cylinder.number, p.end.side) * p.area_m2)

    def cylinder_leak(kind: FaultKind, side: Side) -> Floats:
        return each(
            lambda p: (
                faults.at_cylinder(kind, p.cylinder.number) * p.cylinder.head_area_m2
                if p.end.side is side
                else 0.0
            )
        )

    def preload(p: Place) -> float:
        return of(p).valve_preload * draw.valve_preload

    def full_lift(p: Place) -> float:
        return of(p).valve_full_lift * draw.valve_full_lift

    number = {(p.cylinder.number, p.end.side): e for e, p in enumerate(where)}
    opposite = {Side.HEAD: Side.CRANK, Side.CRANK: Side.HEAD}
    phase = [round(equipment.phases_deg[p.throw] / 360.0 * steps) for p in where]
    suction_area = each(lambda p: p.end.suction_area_ratio * p.area_m2)
    film = draw.wall_heat
    values: dict[str, object] = {
        "stage": np.array([p.stage for p in where]),
        "offset": np.array([(-shift) % steps for shift in phase]),
        "partner": np.array([number.get((p.cylinder.number, opposite[p.end.side]), -1) for p in where]),
        "side": each(lambda p: HEAD if p.end.side is Side.HEAD else CRANK),
        "area": each(lambda p: p.area_m2),
        "clearance": each(lambda p: _clearance(p, draw, around, faults) * p.area_m2 * stroke),
        "suction_area": suction_area * draw.valve_area,
        "discharge_area": each(lambda p: p.end.discharge_area_ratio * p.area_m2) * draw.valve_area,
        "suction_leak": leak(FaultKind.SUCTION_VALVE_LEAK),
        "discharge_leak": leak(FaultKind.DISCHARGE_VALVE_LEAK),
        "ring_leak": cylinder_leak(FaultKind.RING_LEAK, Side.HEAD),
        "packing_leak": cylinder_leak(FaultKind.PACKING_LEAK, Side.CRANK),
        "held_open": each(lambda p: _held_open(p, around, faults)),
        "frequency": each(lambda p: p.cylinder.valve_natural_frequency_hz)
        * (2.0 * math.pi * draw.valve_frequency),
        "suction_preload": each(lambda p: preload(p) * of(p).design_suction_pa),
        "suction_full": each(lambda p: full_lift(p) * of(p).design_suction_pa),
        "discharge_preload": each(lambda p: preload(p) * of(p).design_discharge_pa),
        "discharge_full": each(lambda p: full_lift(p) * of(p).design_discharge_pa),
        "film": each(lambda p: film * film_factor(p.cylinder, dry, piston_speed)),
        "wall_base": each(lambda p: 2.0 * p.area_m2),
        "wall_per_volume": each(lambda p: math.pi * p.cylinder.bore_m / p.area_m2),
        "wall_temperature": wall_temperature,
        "passage_volume": each(lambda p: of(p).passage_volume * p.area_m2 * stroke) * draw.passage_volume,
        "nozzle_area": each(lambda p: of(p).nozzle_area) * suction_area,
        "evaporation": each(
            lambda p: (1.0 - _EVAPORATED_IN_BOTTLE) * EVAPORATION_HEAT_J_MOL
            * faults.at_stage(FaultKind.LIQUID_CARRY_OVER, unit.stages[p.stage].number)
        ),
    }  # fmt: skip
    ends = np.zeros(len(where), dtype=END)
    for name, value in values.items():
        ends[name] = value
    return ends


def bottle_evaporation(unit: Unit, faults: Faults) -> Floats:
    """Heat that carried-over liquid takes in each stage's suction bottle, J per mole of gas."""
    carried = [faults.at_stage(FaultKind.LIQUID_CARRY_OVER, s.number) for s in unit.stages]
    return _EVAPORATED_IN_BOTTLE * EVAPORATION_HEAT_J_MOL * np.array(carried)


def bottle_volumes(unit: Unit, equipment: Equipment) -> Floats:
    volumes = []
    for stage, vessels in zip(unit.stages, equipment.stages, strict=True):
        swept = unit.stroke_m * sum(c.area_m2(e.side) for c in stage.cylinders for e in c.ends)
        volumes += [vessels.suction_bottle * swept, vessels.discharge_bottle * swept]
    return np.array(volumes)


def line_area(flow_mol_s: float, pressure_pa: float, temperature_k: float, drop: float, gas: Floats) -> float:
    """Effective area that passes a flow at a given loss of pressure [m2].

    Parameters
    ----------
    flow_mol_s : float
        Flow [mol/s].
    pressure_pa : float
        Upstream pressure [Pa].
    temperature_k : float
        Upstream temperature [K].
    drop : float
        Share of the pressure lost [-].
    gas : Floats
        Row of constants.
    """
    psi = flow_function(1.0 - drop, gas[CRITICAL_RATIO], gas[CHOKED_SQUARED])
    concentration = 1.0 / gas_volume(temperature_k, pressure_pa, gas)
    return flow_mol_s / (psi * math.sqrt(pressure_pa * concentration / gas[MOLAR_MASS]))


def line_areas(unit: Unit, equipment: Equipment) -> tuple[float, Floats]:
    """Areas of the inlet line and of the line behind each stage, sized at design."""
    gas = gas_row(mixture(unit.composition))
    flow, suction_k = equipment.design_flow_mol_s, equipment.design_suction_temperature_k
    inlet = line_area(flow, equipment.stages[0].design_suction_pa, suction_k, equipment.inlet_drop, gas)
    behind = []
    for vessels in equipment.stages:
        ratio = vessels.design_discharge_pa / vessels.design_suction_pa
        drop = vessels.line_drop + vessels.cooler_drop
        behind.append(line_area(flow, vessels.design_discharge_pa, suction_k * ratio**0.25, drop, gas))
    return inlet, np.array(behind)
