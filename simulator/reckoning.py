"""From the sums of a run to what it gave: means, loads, closure."""

import math
from dataclasses import dataclass, field

import numpy as np

from model.machine import Side, Unit
from simulator.cylinder import (
    CLIPPED,
    DISCHARGE,
    HELD_BACK,
    NOZZLE,
    PACKING,
    PASSAGE_MEAN,
    SUCTION,
    WALL_HEAT,
    WORK,
    Crank,
    Records,
)
from simulator.eos import gas_state, gas_temperature, gas_volume
from simulator.equipment import Equipment, Surroundings
from simulator.gas_data import Floats
from simulator.kinematics import motion, reversal
from simulator.layout import Place
from simulator.network import FINAL_RECYCLE, FIRST_RECYCLE, INLET, LINES
from simulator.outcome import Card, Closure, CylinderOutcome, EndOutcome, MachineOutcome, StageOutcome

_THROUGH_FLOW = 0.005  # share of the swept flow below which a delivered temperature means nothing
_OPENINGS = 2  # an end: suction valve, discharge valve


@dataclass(slots=True, kw_only=True)
class Run:
    """Sums over some turns, with what is needed to make means of them."""

    unit: Unit
    equipment: Equipment
    around: Surroundings
    places: tuple[Place, ...]
    ends: Records
    crank: Crank
    turns: int
    sums: Floats
    flows: Floats
    bottles: Floats
    trace: Floats
    volumes: Floats
    inlet_water: float
    duration_s: float = 0.0
    indicated_w: float = 0.0
    stored: list[tuple[float, float]] = field(default_factory=list)  # moles in all, energy in the ends
    gas: Floats = field(default_factory=lambda: np.zeros(0))
    water: Floats = field(default_factory=lambda: np.zeros(0))
    cooled_k: Floats = field(default_factory=lambda: np.zeros(0))
    wall: Floats = field(default_factory=lambda: np.zeros(0))

    @property
    def condensate(self) -> Floats:
        """Moles drained behind each stage."""
        return self.flows[LINES : LINES + len(self.unit.stages), 2]

    def start(self, gas: Floats, moving: Records, bottle_amount: Floats) -> None:
        self._store(gas, moving, bottle_amount)

    def add(self, period_s: float, sums: Floats, flows: Floats, bottles: Floats) -> None:
        self.sums += sums
        self.flows += flows
        self.bottles += bottles
        self.duration_s += period_s
        self.indicated_w = float(sums[:, WORK].sum()) / period_s

    def finish(self, gas: Floats, moving: Records, bottle_amount: Floats) -> None:
        self._store(gas, moving, bottle_amount)
        self.gas = gas.copy()

    def note(self, water: Floats, cooled_k: Floats, wall: Floats) -> None:
        self.water, self.cooled_k, self.wall = water.copy(), cooled_k.copy(), wall.copy()

    def _store(self, gas: Floats, moving: Records, bottle_amount: Floats) -> None:
        energy = 0.0
        for e in range(len(self.places)):
            volume, n = float(self.crank.volume[e, 0]), float(moving["amount"][e])
            p, _, h, _ = gas_state(float(moving["temperature"][e]), volume / n, gas[self.ends["stage"][e]])
            energy += n * h - p * volume
        moles = float(moving["amount"].sum() + moving["passage_amount"].sum() + bottle_amount.sum())
        self.stored.append((moles, energy))


def _mean(run: Run, e: int, column: int) -> float:
    return float(run.sums[e, column]) / run.duration_s


def _delivered_k(run: Run, ends: list[int], stage: int) -> float:
    flow = sum(_mean(run, e, DISCHARGE) for e in ends)
    pressure, hot = run.bottles[2 * stage + 1] / run.duration_s
    swept = sum(float(run.ends["area"][e]) for e in ends) * run.unit.stroke_m * run.turns / run.duration_s
    least = _THROUGH_FLOW * swept / _suction_volume(run, stage)
    if flow < least:
        return math.nan
    heat = sum(_mean(run, e, DISCHARGE + 1) for e in ends)
    return gas_temperature(heat / flow, float(pressure), float(hot), run.gas[stage])


def _suction_volume(run: Run, stage: int) -> float:
    pressure, temperature = run.bottles[2 * stage] / run.duration_s
    return gas_volume(float(temperature), float(pressure), run.gas[stage])


def _end(run: Run, e: int) -> EndOutcome:
    stage = run.places[e].stage
    swept = float(run.ends["area"][e]) * run.unit.stroke_m * run.turns / run.duration_s
    return EndOutcome(
        side=run.places[e].end.side,
        volumetric_efficiency=_mean(run, e, DISCHARGE) * _suction_volume(run, stage) / swept,
        indicated_power_w=_mean(run, e, WORK),
        wall_heat_w=_mean(run, e, WALL_HEAT),
        wall_temperature_k=float(run.wall[e]),
        suction_passage_temperature_k=_mean(run, e, PASSAGE_MEAN),
        delivered_temperature_k=_delivered_k(run, [e], stage),
    )


def cards(run: Run) -> tuple[Card, ...]:
    """Pressures and loads over each cylinder's own crank angle."""
    moved = motion(run.unit.stroke_m, run.unit.connecting_rod_m, run.trace.shape[1])
    speed = 2.0 * math.pi * run.turns / run.duration_s
    ambient = run.around.ambient_pressure_pa
    found = []
    for throw, cylinder in enumerate(run.unit.cylinders):
        ends = [e for e, p in enumerate(run.places) if p.throw == throw]
        pressures = {run.places[e].end.side: run.trace[e] / run.turns for e in ends}
        volumes = {}
        for e in ends:
            x = moved.position_m
            way = x if run.places[e].end.side is Side.HEAD else run.unit.stroke_m - x
            volumes[run.places[e].end.side] = run.ends["clearance"][e] + run.ends["area"][e] * way
        still = np.full(run.trace.shape[1], ambient)  # behind a piston face that compresses nothing
        head, crank = cylinder.head_area_m2, cylinder.crank_area_m2
        gas = pressures.get(Side.CRANK, still) * crank - pressures.get(Side.HEAD, still) * head
        gas = gas + ambient * (head - crank)
        inertia = cylinder.reciprocating_mass_kg * speed**2 * moved.per_radian_squared_m
        found.append(
            Card(
                number=cylinder.number, angle_rad=moved.angle_rad, volumes_m3=volumes, pressures_pa=pressures,
                gas_load_n=gas, pin_load_n=gas + inertia,
            )
        )  # fmt: skip
    return tuple(found)


def _cylinder(run: Run, card: Card, throw: int) -> CylinderOutcome:
    ends = [e for e, p in enumerate(run.places) if p.throw == throw]
    return CylinderOutcome(
        number=card.number,
        suction_flow_mol_s=sum(_mean(run, e, NOZZLE) for e in ends),
        discharge_flow_mol_s=sum(_mean(run, e, DISCHARGE) for e in ends),
        packing_flow_mol_s=sum(_mean(run, e, PACKING) for e in ends),
        indicated_power_w=sum(_mean(run, e, WORK) for e in ends),
        delivered_temperature_k=_delivered_k(run, ends, run.places[ends[0]].stage),
        gas_load_tension_n=max(0.0, float(card.gas_load_n.max())),
        gas_load_compression_n=max(0.0, float(-card.gas_load_n.min())),
        pin_load_tension_n=max(0.0, float(card.pin_load_n.max())),
        pin_load_compression_n=max(0.0, float(-card.pin_load_n.min())),
        reversal=reversal(card.pin_load_n),
        ends=tuple(_end(run, e) for e in ends),
    )


def _stage(run: Run, k: int) -> StageOutcome:
    ends = [e for e, p in enumerate(run.places) if p.stage == k]
    suction, discharge = run.bottles[2 * k] / run.duration_s, run.bottles[2 * k + 1] / run.duration_s
    stages = len(run.unit.stages)
    return StageOutcome(
        number=run.unit.stages[k].number,
        suction_pressure_pa=float(suction[0]),
        suction_temperature_k=float(suction[1]),
        discharge_pressure_pa=float(discharge[0]),
        discharge_temperature_k=float(discharge[1]),
        suction_flow_mol_s=sum(_mean(run, e, NOZZLE) for e in ends),
        discharge_flow_mol_s=sum(_mean(run, e, DISCHARGE) for e in ends),
        water_fraction=float(run.water[k]),
        condensate_mol_s=float(run.condensate[k]) / run.duration_s,
        cooler_outlet_temperature_k=float(run.cooled_k[k]),
        relief_flow_mol_s=float(run.flows[LINES + stages + k, 0]) / run.duration_s,
        indicated_power_w=sum(_mean(run, e, WORK) for e in ends),
    )


def _closure(run: Run, export: float) -> Closure:
    (moles_before, energy_before), (moles_after, energy_after) = run.stored
    out = export + float(run.condensate.sum() + run.flows[LINES + len(run.unit.stages) :, 0].sum())
    out += float(run.sums[:, PACKING].sum())
    into = float(run.flows[INLET, 0])
    heat = run.sums[:, SUCTION + 1] - run.sums[:, DISCHARGE + 1] - run.sums[:, PACKING + 1]
    heat = heat + run.sums[:, WALL_HEAT] + run.sums[:, WORK]
    work = float(np.abs(run.sums[:, WORK]).sum())
    steps = run.turns * run.trace.shape[1] * len(run.places)
    return Closure(
        amount=(into - out - (moles_after - moles_before)) / into if into else math.nan,
        energy=(float(heat.sum()) - (energy_after - energy_before)) / work if work else math.nan,
        held_back=float(run.sums[:, HELD_BACK].sum()) * run.trace.shape[1] * run.turns
        / run.duration_s / (_OPENINGS * steps),
        clipped=float(run.sums[:, CLIPPED].sum()) / (2 * steps),
    )  # fmt: skip


def reckon(run: Run) -> MachineOutcome:
    """Means over a run."""
    stages = len(run.unit.stages)
    flows = run.flows[:, 0] / run.duration_s
    delivered = float(flows[LINES + stages - 1])
    export = delivered - float(run.condensate[-1]) / run.duration_s - float(flows[FINAL_RECYCLE])
    header_water = run.inlet_water
    indicated = float(run.sums[:, WORK].sum()) / run.duration_s
    return MachineOutcome(
        duration_s=run.duration_s,
        speed_rad_s=2.0 * math.pi * run.turns / run.duration_s,
        inlet_flow_mol_s=float(flows[INLET]),
        inlet_dry_mol_s=float(flows[INLET]) * (1.0 - header_water),
        export_flow_mol_s=export,
        export_dry_mol_s=export * (1.0 - float(run.water[-1])),
        first_recycle_mol_s=float(flows[FIRST_RECYCLE]),
        final_recycle_mol_s=float(flows[FINAL_RECYCLE]),
        indicated_power_w=indicated,
        electrical_power_w=run.equipment.driver.electrical_power(indicated),
        stages=tuple(_stage(run, k) for k in range(stages)),
        cylinders=tuple(_cylinder(run, card, throw) for throw, card in enumerate(cards(run))),
        closure=_closure(run, export * run.duration_s),
    )
