"""The invented machine itself: a state that turns of the crank move on. Importing this loads the compiler."""

import copy
import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Final

import numpy as np

from model.machine import Unit
from simulator.cylinder import MOVING, RATE_COLUMNS, WALL_AREA, WALL_AREA_HEAT, Records
from simulator.eos import gas_enthalpy, gas_row, gas_state, gas_volume
from simulator.equipment import (
    ConditionError,
    DriverKind,
    Equipment,
    SealedDraw,
    Surroundings,
)
from simulator.faults import HEALTHY, FaultKind, Faults
from simulator.gas_data import Floats, mixture
from simulator.layout import (
    bottle_evaporation,
    bottle_volumes,
    crank_of,
    jacket_conductance,
    lay_out_ends,
    line_areas,
    places,
)
from simulator.network import FINAL_RECYCLE, FIRST_RECYCLE, FLOW_COLUMNS, INLET, LINES, Network, turn
from simulator.outcome import Card, MachineOutcome
from simulator.reckoning import Run, cards, reckon
from simulator.wet_gas import water_held, wetted

WALL_LAG_S: Final = 420.0  # liner and head metal (invented plant)
SETTLED_PRESSURE: Final = 3e-4  # change of a bottle's pressure in ten turns, share
SETTLED_TEMPERATURE_K: Final = 0.05
_RELAX: Final = 0.5  # share of the way a wall goes in one turn while settling
_BLOCK: Final = 10  # turns
_HUNDRED_K: Final = 100.0
_WATER_STEP: Final = 2e-6  # change of water fraction that is worth new gas constants
_COOLER_POWER: Final = 0.4  # heat-transfer units ~ flow to the minus this


class NotSettledError(RuntimeError):
    def __init__(self, unit: str, turns: int) -> None:
        super().__init__(f"{unit}: not periodic after {turns} turns")


class Machine:
    """One unit of the invented plant.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    equipment : Equipment
        What the nameplate does not say.
    around : Surroundings
        What the site imposes at first.
    draw : SealedDraw | int
        How the machine differs from its nameplate: the sealed draw, or the seed to make it from.
    steps : int
        Integration steps per turn, a multiple of what the crank phases need.
    """

    def __init__(
        self,
        unit: Unit,
        equipment: Equipment,
        around: Surroundings,
        draw: SealedDraw | int,
        *,
        steps: int = 1800,
    ) -> None:
        if len(equipment.stages) != len(unit.stages):
            raise ConditionError("stages", len(equipment.stages), f"{len(unit.stages)}, as {unit.id} has")
        if len(equipment.phases_deg) != len(unit.cylinders):
            raise ConditionError("phases_deg", equipment.phases_deg, "one a throw")
        self.unit = unit
        self.equipment = equipment
        self._draw = SealedDraw.from_seed(draw, unit.id) if isinstance(draw, int) else draw
        self._steps = steps
        self._places = places(unit)
        self._volumes = bottle_volumes(unit, equipment)
        self._inlet_area, self._line_area = line_areas(unit, equipment)
        self.around = around
        self.faults = HEALTHY
        self.reset()

    def reset(self) -> None:
        """Fill every vessel at a guessed pressure: equal stage ratios, coolers at their best."""
        self._wall = np.full(len(self._places), self.around.jacket_water_k)
        stages = len(self.unit.stages)
        self._water = np.full(stages + 1, self._header_water())
        self._gas = np.array([self._row(y) for y in self._water])
        self._cooled_k = np.full(stages, self.around.cooling_water_k + 5.0)
        self._line_flow = np.full(stages, self.equipment.design_flow_mol_s)
        self._load = 0.8
        self._hurry = 1.0
        self._fill()
        self._apply()
        self._last: Run | None = None

    def change(self, *, around: Surroundings | None = None, faults: Faults | None = None) -> None:
        """Impose other surroundings or faults from the next turn on; the state stays."""
        if faults is not None:
            faults.check(self.unit)
            self.faults = faults
        if around is not None:
            self.around = around
        self._apply()

    def twin(self) -> "Machine":
        """Another machine in the same state, which goes its own way from here."""
        other = copy.copy(self)
        for name, value in vars(self).items():
            if isinstance(value, np.ndarray):
                setattr(other, name, value.copy())
        other._apply()  # noqa: SLF001 - another of its own kind
        return other

    def run(self, turns: int, *, hurry: float = 1.0) -> MachineOutcome:
        """Turn the crank, walls lagging as metal does; means over these turns.

        ``hurry`` is how many times faster the metal warms and cools than the crank's own time goes.
        """
        self._hurry = hurry
        return self._turns(turns, None)

    @property
    def wall_k(self) -> Floats:
        """Temperature of each end's metal [K]."""
        return self._wall.copy()

    def set_walls(self, wall_k: Sequence[float]) -> None:
        """Take up with the metal at other temperatures, as after a stop [K]."""
        self._wall[:] = wall_k
        self._turning["wall_temperature"] = self._wall

    def settle(self, *, most: int = 400, averaged: int = _BLOCK) -> MachineOutcome:
        """Turn until bottles and walls repeat, walls hastened; means over the last ``averaged`` turns.

        Raises
        ------
        NotSettledError
            ``most`` turns were not enough.
        """
        before: MachineOutcome | None = None
        for done in range(0, most, _BLOCK):
            outcome = self._turns(_BLOCK, _RELAX)
            if before is not None and done >= 2 * _BLOCK and _alike(before, outcome):
                return self._turns(averaged, _RELAX)
            before = outcome
        raise NotSettledError(self.unit.id, most)

    def hasten(self, turns: int) -> MachineOutcome:
        """Turn the crank with the walls hastened, as `settle` does; means over these turns."""
        return self._turns(turns, _RELAX)

    @property
    def slow(self) -> Floats:
        """What takes many turns to come to rest, each part of the order of one; idle ends are slow too."""
        moving = self._moving
        amounts = (self._bottle_amount, moving["amount"], moving["passage_amount"])
        warmths = (self._bottle_temperature, moving["temperature"], moving["passage_temperature"], self._wall)
        return np.concatenate([*(np.log(n) for n in amounts), *(t / _HUNDRED_K for t in warmths)])

    def place(self, slow: Floats) -> None:
        """Go on from another slow state; what moves within a turn follows by itself."""
        bottles, ends = len(self._volumes), len(self._places)
        sizes = (bottles, ends, ends, bottles, ends, ends)
        parts = np.split(slow, np.cumsum(sizes))
        moving = self._moving
        self._bottle_amount[:], moving["amount"], moving["passage_amount"] = (np.exp(x) for x in parts[:3])
        warmths = [x * _HUNDRED_K for x in parts[3:]]
        self._bottle_temperature[:], moving["temperature"], moving["passage_temperature"] = warmths[:3]
        self._wall[:] = self._turning["wall_temperature"] = warmths[3]

    def cards(self) -> tuple[Card, ...]:
        """Pressure over crank angle of each cylinder, mean of the last run."""
        if self._last is None:
            raise ConditionError("cards", None, "there before the first turn")
        return cards(self._last)

    @property
    def speed_rad_s(self) -> float:
        driver = self.equipment.driver
        slip = driver.full_load_slip * self._load if driver.kind is DriverKind.INDUCTION else 0.0
        return self.around.speed_rad_s * (1.0 - slip)

    # --- state

    def _fill(self) -> None:
        around, stages = self.around, len(self.unit.stages)
        ratio = (around.discharge_pressure_pa / around.suction_pressure_pa) ** (1.0 / stages)
        amount, temperature, pressures = (np.empty(2 * stages) for _ in range(3))
        for k in range(stages):
            suction_pa = around.suction_pressure_pa * ratio**k
            suction_k = around.suction_temperature_k if k == 0 else float(self._cooled_k[k - 1])
            states = (
                (2 * k, suction_pa, suction_k),
                (2 * k + 1, suction_pa * ratio, suction_k * ratio**0.25),
            )
            for j, pressure, hot in states:
                temperature[j], pressures[j] = hot, pressure
                amount[j] = self._volumes[j] / gas_volume(hot, pressure, self._gas[k])
        self._bottle_amount, self._bottle_temperature = amount, temperature
        self._bottle_mean = np.column_stack((pressures, temperature))  # over the last turn
        count = len(self._places)
        ends = self._ends()
        volume = crank_of(self.unit, ends, self._steps).volume[:, 0]
        moving = np.zeros(count, dtype=MOVING)
        for e, place in enumerate(self._places):
            j = 2 * place.stage
            density = amount[j] / self._volumes[j]
            moving["amount"][e] = density * volume[e]
            moving["passage_amount"][e] = density * ends["passage_volume"][e]
            moving["temperature"][e] = moving["passage_temperature"][e] = temperature[j]
        self._moving = moving

    def _dry(self) -> Mapping[str, float]:
        return self.around.composition or self.unit.composition

    def _row(self, water: float) -> Floats:
        return gas_row(mixture(wetted(self._dry(), water)))

    def _header_water(self) -> float:
        around = self.around
        if around.saturation == 0.0:
            return 0.0
        held = water_held(self._dry(), around.suction_temperature_k, around.suction_pressure_pa)
        return around.saturation * held

    def _ends(self) -> Records:
        turning = replace(self.around, speed_rad_s=self.speed_rad_s)
        return lay_out_ends(
            self.unit, self.equipment, self._draw, self.faults, turning, self._steps, self._wall
        )

    def _apply(self) -> None:
        around, faults, inlet = self.around, self.faults, self._inlet_area
        stages = self.unit.stages
        self._gas = np.array([self._row(y) for y in self._water])
        self._turning = self._ends()
        self._crank = crank_of(self.unit, self._turning, self._steps)
        first = around.first_recycle + faults.at_unit(FaultKind.FIRST_RECYCLE_PASSING)
        final = around.final_recycle + faults.at_unit(FaultKind.FINAL_RECYCLE_PASSING)
        relief = [faults.at_stage(FaultKind.RELIEF_PASSING, s.number) for s in stages]
        self._network = Network(
            volume=self._volumes,
            inlet_area=inlet * (1.0 - min(0.999, faults.at_unit(FaultKind.STRAINER_PLUGGING))),
            line_area=self._line_area,
            first_recycle_area=first * inlet,
            final_recycle_area=final * inlet,
            relief_area=inlet * np.array(relief),
            relief_pa=self.equipment.relief_pressure_pa,
            vent_pa=self.equipment.vent_pressure_pa,
            sides=np.zeros((2, 5)),
            cooled_enthalpy=np.zeros(len(stages)),
            vapour_share=np.ones(len(stages)),
            evaporation=bottle_evaporation(self.unit, faults),
            pinned=self.equipment.pinned,
        )
        kept = 1.0 - min(0.999, faults.at_unit(FaultKind.JACKET_WATER_LOSS))
        conductance = [jacket_conductance(p, self.unit, self.equipment.stages[p.stage]) for p in self._places]
        self._jacket = kept * np.array(conductance)
        self._cool()

    # --- between turns

    def _cool(self) -> None:
        """Coolers, knock-outs and both headers, from the state as it stands."""
        around, network, stages = self.around, self._network, len(self.unit.stages)
        moist = np.empty(stages + 1)
        moist[0] = self._water[0]
        for k, vessels in enumerate(self.equipment.stages):
            number = self.unit.stages[k].number
            units = -math.log(1.0 - vessels.cooler_effectiveness)
            units *= 1.0 - min(0.999, self.faults.at_stage(FaultKind.COOLER_FOULING, number))
            load = max(0.02, self._line_flow[k] / self.equipment.design_flow_mol_s)
            effectiveness = 1.0 - math.exp(-units * load**-_COOLER_POWER)
            effectiveness *= 1.0 - min(1.0, self.faults.at_stage(FaultKind.COOLER_WATER_LOSS, number))
            hot = self._bottle_mean[2 * k + 1, 1]
            cooled = around.cooling_water_k + (1.0 - effectiveness) * (hot - around.cooling_water_k)
            pressure = self._bottle_mean[2 * k + 2, 0] if k + 1 < stages else around.discharge_pressure_pa
            held = water_held(self._dry(), cooled, pressure) if moist[k] > 0.0 else 0.0
            moist[k + 1] = min(moist[k], held)
            network.vapour_share[k] = (1.0 - moist[k]) / (1.0 - moist[k + 1])
            self._cooled_k[k] = cooled
            network.cooled_enthalpy[k] = gas_enthalpy(cooled, pressure, self._gas[k + 1])
        self._set_water(moist)
        sides = (
            (around.suction_pressure_pa, around.suction_temperature_k, 0),
            (around.discharge_pressure_pa, float(self._cooled_k[-1]), stages),
        )
        for i, (pressure, temperature, row) in enumerate(sides):
            volume = gas_volume(temperature, pressure, self._gas[row])
            _, slope, enthalpy, heat_capacity = gas_state(temperature, volume, self._gas[row])
            network.sides[i] = (pressure, slope, enthalpy, heat_capacity, 1.0 / volume)

    def _set_water(self, moist: Floats) -> None:
        for k, y in enumerate(moist):
            if abs(y - self._water[k]) > _WATER_STEP:
                self._gas[k] = self._row(float(y))
                self._water[k] = y

    def _mix_at_suction(self, flows: Floats) -> float:
        """Water in the first suction bottle: the header's and that of both recycles, by flow."""
        water = self._water
        rows = ((INLET, self._header_water()), (FIRST_RECYCLE, water[1]), (FINAL_RECYCLE, water[-1]))
        total = sum(max(0.0, flows[i, 0]) for i, _ in rows)
        if total <= 0.0:
            return float(self._water[0])
        return float(sum(max(0.0, flows[i, 0]) * y for i, y in rows) / total)

    def _after_turn(self, sums: Floats, flows: Floats, period: float, relax: float | None) -> None:
        film, heat = sums[:, WALL_AREA], sums[:, WALL_AREA_HEAT]
        jacket = self._jacket * period
        aim = (heat + jacket * self.around.jacket_water_k) / (film + jacket)
        share = 1.0 - math.exp(-self._hurry * period / WALL_LAG_S) if relax is None else relax
        self._wall += share * (aim - self._wall)
        self._turning["wall_temperature"] = self._wall
        self._line_flow = flows[LINES : LINES + len(self.unit.stages), 0] / period
        if self._water.any() or self.around.saturation > 0.0:
            self._set_water(np.concatenate(([self._mix_at_suction(flows)], self._water[1:])))
        self._cool()

    def _turns(self, turns: int, relax: float | None) -> MachineOutcome:
        if turns < 1:
            raise ConditionError("turns", turns, "at least one")
        count, stages = len(self._places), len(self.unit.stages)
        run = Run(
            unit=self.unit, equipment=self.equipment, around=self.around, places=self._places,
            ends=self._turning, crank=self._crank, turns=turns, sums=np.zeros((count, RATE_COLUMNS)),
            flows=np.zeros((LINES + 2 * stages, FLOW_COLUMNS)), bottles=np.zeros((2 * stages, 2)),
            trace=np.zeros((count, self._steps)), volumes=self._volumes,
            inlet_water=self._header_water(),
        )  # fmt: skip
        run.start(self._gas, self._moving, self._bottle_amount)
        for _ in range(turns):
            speed = self.speed_rad_s
            sums, flows, bottles = (np.zeros_like(x) for x in (run.sums, run.flows, run.bottles))
            turn(
                self._turning, self._crank, self._network, self._gas, self._moving, self._bottle_amount,
                self._bottle_temperature, speed, sums, flows, bottles, run.trace,
            )  # fmt: skip
            period = 2.0 * math.pi / speed
            run.add(period, sums, flows, bottles)
            self._bottle_mean = bottles / period
            self._after_turn(sums, flows, period, relax)
            driver = self.equipment.driver
            self._load = driver.shaft_power(run.indicated_w) / driver.rated_power_w
        run.finish(self._gas, self._moving, self._bottle_amount)
        run.note(self._water, self._cooled_k, self._wall)
        self._last = run
        return reckon(run)


def _alike(before: MachineOutcome, after: MachineOutcome) -> bool:
    for one, other in zip(before.stages, after.stages, strict=True):
        for name in ("suction_pressure_pa", "discharge_pressure_pa"):
            if abs(getattr(other, name) / getattr(one, name) - 1.0) > SETTLED_PRESSURE:
                return False
        for name in ("suction_temperature_k", "discharge_temperature_k"):
            if abs(getattr(other, name) - getattr(one, name)) > SETTLED_TEMPERATURE_K:
                return False
    walls = zip(before.cylinders, after.cylinders, strict=True)
    return all(
        abs(a.wall_temperature_k - b.wall_temperature_k) < SETTLED_TEMPERATURE_K
        for one, other in walls
        for a, b in zip(one.ends, other.ends, strict=True)
    )
