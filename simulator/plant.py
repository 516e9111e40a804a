"""The invented plant: machines that turn, a story, weather and instruments, sampled once a second.

No wire and no clock in here. The crank turns at its true rate at every pace: what a hurried plant hurries is
the world around it, the story, the weather, walls and thermowells. Its bottles then settle that much slower
than the world around them.
"""

import math
from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from types import MappingProxyType
from typing import Final

from agent.siteplan.plan import Input, SitePlan, UnitPlan
from simulator.course import Calm, UnitCourse, UnitOrders
from simulator.equipment import Equipment, Surroundings
from simulator.instrument_faults import SampleQuality
from simulator.instruments import HeaderSwing, Instrument, rounded
from simulator.machine import Machine, NotSettledError
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.outcome import MachineOutcome
from simulator.sample import Sample
from simulator.scenario import Scenario, Story
from simulator.standstill import Standstill
from simulator.weather import Weather

LIVE_STEPS: Final = 1200
"""Integration steps a turn of the live plant. Against 7 200 on all three units at their usual points: flow
and power within .03 %, discharge temperatures .04 K, reversal .06 degrees, no flow held back; two thirds of
the work of 1 800. At 900 two to three openings in a hundred are held back (measured)."""

MOST_S: Final = 3.0
"""Of a longer pause no more than this is turned: a starved machine falls behind rather than ever later."""

_FLUTTERING: Final = 20  # turns to take the mean of where there is no rest
_SWING: Final = MappingProxyType({"suction": 0.003, "discharge": 0.0015})  # share of the pressure
_TAP_BEFORE: Final = "suction header"  # a flow meter there sees what is drawn, elsewhere what is delivered


class PlantMismatchError(ValueError):
    """The site file asks for something this plant does not have."""


class UnitLife:
    """One unit: its machine, running or at rest.

    Parameters
    ----------
    plan : UnitPlan
        Nameplate and tags.
    equipment : Equipment
        What the nameplate does not say.
    usual : Surroundings
        What surrounds it as a rule.
    steps : int
        Integration steps a turn.
    """

    def __init__(self, plan: UnitPlan, equipment: Equipment, usual: Surroundings, *, steps: int) -> None:
        self._plan = plan
        self._flow_is_drawn = any(i.quantity == "flow" and i.tap == _TAP_BEFORE for i in plan.inputs)
        self._flow_is_dry = plan.flow_reference is None or plan.flow_reference.dry
        self._new = Machine(plan.unit, equipment, usual, SEED, steps=steps)
        self._settled: tuple[UnitOrders, Machine, MachineOutcome] | None = None
        self.reset()

    def reset(self) -> None:
        self._begun = False
        self._still = Standstill()
        self._runs = True
        self._turn_part = 0.0
        self._orders: UnitOrders | None = None
        self.turns = 0

    @property
    def outcome(self) -> MachineOutcome:
        """Of the last second in which the unit ran."""
        return self._outcome

    def begin(self, orders: UnitOrders) -> None:
        """Be found running since long under these orders; what was settled once is kept for the next time."""
        if self._settled is None or self._settled[0] != orders:
            machine = self._new.twin()
            machine.change(around=self._with_ends(orders), faults=orders.faults)
            machine.reset()
            try:
                outcome = machine.settle()
            except NotSettledError:  # plates that flutter come to no rest, yet wander no further
                outcome = machine.hasten(_FLUTTERING)
            self._settled = orders, machine, outcome
        _, machine, self._outcome = self._settled
        self._machine = machine.twin()
        self._begun = True

    def advance(self, orders: UnitOrders, *, real_s: float, plant_s: float) -> Mapping[str, float]:
        """Go on by a time on the clock and in the plant; true values by series name [SI]."""
        if not self._begun:
            self.begin(orders)
        if not orders.running:
            if self._runs:
                self._still.begin(self._outcome)
            self._runs = False
            return self._still.update(orders, plant_s)
        if not self._runs:
            self._start(orders)
        self._turn(orders, real_s, plant_s)
        return self._values()

    def _start(self, orders: UnitOrders) -> None:
        machine = self._machine
        walls = [self._still.wall_k(float(w), orders.ambient_k) for w in machine.wall_k]
        machine.change(around=self._with_ends(orders), faults=orders.faults)
        # Started on its bypass a machine is up to pressure within seconds, its stages at about equal ratios.
        # To pump it up against the header instead would heat the last stage as no real start does.
        machine.reset()
        machine.set_walls(walls)
        self._runs, self._orders = True, None

    def _turn(self, orders: UnitOrders, real_s: float, plant_s: float) -> None:
        if orders != self._orders:
            self._machine.change(around=self._with_ends(orders), faults=orders.faults)
            self._orders = orders
        turns = self._turn_part + self._machine.speed_rad_s / (2.0 * math.pi) * real_s
        whole = math.floor(turns)
        self._turn_part = turns - whole
        if whole:
            self._outcome = self._machine.run(whole, hurry=plant_s / real_s)
            self.turns += whole

    def _with_ends(self, orders: UnitOrders) -> Surroundings:
        """The load step as the machine feels it: which ends its unloaders hold open."""
        step = next(s for s in self._plan.unit.load_steps if s.word == orders.load_step)
        return replace(orders.around, held_open=step.held_open)

    def _values(self) -> Mapping[str, float]:
        found = self._outcome
        drawn = found.inlet_dry_mol_s if self._flow_is_dry else found.inlet_flow_mol_s
        delivered = found.export_dry_mol_s if self._flow_is_dry else found.export_flow_mol_s
        values = {
            "unit.speed": found.speed_rad_s,
            "unit.flow": drawn if self._flow_is_drawn else delivered,
            "unit.electrical_power": found.electrical_power_w,
            "unit.run_signal": 1.0,
        }
        for stage in found.stages:
            name = f"stage{stage.number}"
            values |= {
                f"{name}.suction_pressure": stage.suction_pressure_pa,
                f"{name}.suction_temperature": stage.suction_temperature_k,
                f"{name}.discharge_pressure": stage.discharge_pressure_pa,
                f"{name}.discharge_temperature": stage.discharge_temperature_k,
            }
        return values


class Plant:
    """All machines of a site under one scenario.

    Parameters
    ----------
    site : SitePlan
        The site.
    scenario : Scenario
        What happens.
    pace : float
        How many times faster the world around the machines goes.
    seed : int
        Of noise, swings and weather.
    steps : int
        Integration steps a turn.
    """

    def __init__(
        self, site: SitePlan, scenario: Scenario, *, pace: float, seed: int, steps: int = LIVE_STEPS
    ) -> None:
        _check(site)
        self._site = site
        self._pace = pace
        self._seed = seed
        self.story: Story = scenario.at_pace(pace)
        self._lives = {u.id: UnitLife(u, EQUIPMENT[u.id], USUAL[u.id], steps=steps) for u in site.units}
        self.reset()

    def reset(self) -> None:
        self._begins: float | None = None
        self._last_time: float | None = None
        self._plant_time = 0.0
        self._halted = False
        self.behind_s = 0.0  # of the clock, since pauses were too long to make up for
        self._weather = Weather(self._seed)
        for life in self._lives.values():
            life.reset()
        self._swings = {
            u.id: (self._swing(u.id, "suction"), self._swing(u.id, "discharge")) for u in self._site.units
        }
        self._instruments = {
            i.address: Instrument(i.quantity, f"{self._seed}/{u.id}/{i.tag}", span_low=i.span_low)
            for u in self._site.units
            for i in u.inputs
            if i.quantity != "load_step"
        }

    def life(self, unit: str) -> UnitLife:
        """One unit, for who wants to compare tags with the truth."""
        return self._lives[unit]

    def begin(self, time: float) -> None:
        """Settle every machine to the weather of an instant, UTC [s]; the first sample else does."""
        self._begins = time
        with ThreadPoolExecutor(len(self._site.units)) as pool:
            begun = [
                pool.submit(self._lives[u.id].begin, self._orders(u, self.story.units[u.id], -1.0))
                for u in self._site.units
            ]
        for one in begun:
            one.result()

    def halt(self) -> None:
        """From another thread: leave what is being sampled, for good."""
        self._halted = True

    def sample(self, time: float, story_start: float | None) -> Sequence[Sample]:
        """Every tag at one instant; machines turn for the time since the last one.

        Parameters
        ----------
        time : float
            The instant, UTC [s].
        story_start : float or None
            When the story began, UTC [s]; None while it has not.

        Returns
        -------
        Sequence[Sample]
            One sample per tag of the site.
        """
        if self._begins is None:
            self.begin(time)
        real = 0.0 if self._last_time is None else max(0.0, time - self._last_time)
        self._last_time = time
        self.behind_s += max(0.0, real - MOST_S)
        real = min(real, MOST_S)
        self._plant_time += real * self._pace
        elapsed = -1.0 if story_start is None else self.story.round_time(time - story_start)
        samples: list[Sample] = []
        for unit in self._site.units:
            if self._halted:
                break
            course = self.story.units[unit.id]
            orders = self._orders(unit, course, elapsed)
            true = self._lives[unit.id].advance(
                orders, real_s=real or 1.0, plant_s=(real or 1.0) * self._pace
            )
            samples += [
                self._sample(tag, true, orders, course, elapsed=elapsed, step=real * self._pace)
                for tag in unit.inputs
            ]
        return [replace(s, time=time) for s in samples]

    def _orders(self, unit: UnitPlan, course: UnitCourse, elapsed: float) -> UnitOrders:
        now = (self._begins or 0.0) + self._plant_time
        around = replace(USUAL[unit.id], cooling_water_k=self._weather.cooling_water_k(now))
        if around.composition is None and course.gas:
            around = replace(around, composition=unit.unit.composition)
        word = unit.unit.load_steps[0].word
        calm = Calm(around=around, load_step=word, ambient_k=self._weather.ambient_k(now))
        orders = course.orders(elapsed, calm)
        suction, discharge = self._swings[unit.id]
        swung = replace(
            orders.around,
            suction_pressure_pa=orders.around.suction_pressure_pa * suction.factor(self._plant_time),
            discharge_pressure_pa=orders.around.discharge_pressure_pa * discharge.factor(self._plant_time),
        )
        return replace(orders, around=swung)

    def _sample(
        self,
        tag: Input,
        true: Mapping[str, float],
        orders: UnitOrders,
        course: UnitCourse,
        *,
        elapsed: float,
        step: float,
    ) -> Sample:
        if tag.quantity == "load_step":
            return Sample(tag=tag, time=0.0, value=orders.load_step)
        faults = course.instrument_faults(tag.tag, elapsed)
        reading, quality = self._instruments[tag.address].update(true[tag.name], step, faults)
        return Sample(tag=tag, time=0.0, value=_shown(tag, reading), quality=quality)

    def _swing(self, unit: str, header: str) -> HeaderSwing:
        return HeaderSwing(_SWING[header], f"{self._seed}/{unit}/{header}")


def _shown(tag: Input, reading_si: float | None) -> float | bool | None:
    """What the sender shows of a reading."""
    if reading_si is None:
        return None
    reading = (reading_si - tag.offset) / tag.scale
    return reading > 0.5 if tag.quantity == "run_signal" else rounded(reading, tag.unit)


def _check(site: SitePlan) -> None:
    measured = {
        "suction_pressure", "discharge_pressure", "suction_temperature", "discharge_temperature", "speed",
        "flow", "electrical_power", "run_signal", "load_step",
    }  # fmt: skip
    for unit in site.units:
        if unit.id not in EQUIPMENT:
            raise PlantMismatchError(
                f"the invented plant has no machine {unit.id!r}; it has {', '.join(EQUIPMENT)}"
            )
        if len(EQUIPMENT[unit.id].stages) != len(unit.unit.stages):
            raise PlantMismatchError(
                f"{unit.id}: the invented plant's machine has {len(EQUIPMENT[unit.id].stages)} stages"
            )
        for tag in unit.inputs:
            if tag.quantity not in measured:
                raise PlantMismatchError(f"{unit.id} {tag.tag}: the invented plant measures no {tag.name}")
            taps = _taps(tag)
            if taps and tag.tap not in taps:
                raise PlantMismatchError(
                    f"{unit.id} {tag.tag}: the invented plant measures {tag.name} at "
                    f"{' or '.join(map(repr, taps))}, not at {tag.tap!r}"
                )


def _taps(tag: Input) -> tuple[str, ...]:
    """Where this plant has an instrument for a quantity; empty: the place does not matter.

    The line behind a cooler ends in the next suction bottle, at one pressure and temperature with it.
    """
    if tag.quantity == "flow":
        return (_TAP_BEFORE, "discharge header")
    if tag.quantity in {"discharge_pressure", "discharge_temperature"}:
        return ("discharge bottle",)
    if tag.quantity in {"suction_pressure", "suction_temperature"}:
        number = int(tag.subject.removeprefix("stage"))
        return ("suction bottle", f"after cooler {number - 1}") if number > 1 else ("suction bottle",)
    return ()


__all__ = ["LIVE_STEPS", "Plant", "PlantMismatchError", "Sample", "SampleQuality", "UnitLife"]
