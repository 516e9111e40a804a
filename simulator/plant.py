"""The invented plant: scenario, machines and instruments, sampled on demand. No wire and no clock in here."""

from collections.abc import Mapping, Sequence
from dataclasses import replace
from types import MappingProxyType
from typing import Final

from agent.siteplan.plan import Input, SitePlan
from simulator.instruments import HeaderSwing, Instrument, rounded
from simulator.sample import Sample
from simulator.scenario import Scenario
from simulator.steady_table import Conditions, Machine

_SWING: Final = MappingProxyType({"suction": 0.003, "discharge": 0.0015})  # share of the pressure


class PlantMismatchError(ValueError):
    """The site file asks for something this plant does not have."""


class Plant:
    """All machines of a site under one scenario."""

    def __init__(
        self, site: SitePlan, scenario: Scenario, machines: Mapping[str, Machine], *, pace: float, seed: int
    ) -> None:
        if not pace > 0:
            raise ValueError(f"pace {pace} is not above zero")
        _check(site, machines)
        self._site = site
        self._scenario = scenario
        self._machines = machines
        self._pace = pace
        self._seed = seed
        self.reset()

    def reset(self) -> None:
        self._last_time: float | None = None
        self._plant_time = 0.0
        self._swings = {
            u.id: (self._swing(u.id, "suction"), self._swing(u.id, "discharge")) for u in self._site.units
        }
        self._instruments = {
            i.address: Instrument(i.quantity, f"{self._seed}/{u.id}/{i.tag}")
            for u in self._site.units
            for i in u.inputs
            if i.quantity != "load_step"
        }

    def sample(self, time: float, story_start: float | None) -> Sequence[Sample]:
        """Every tag at one instant.

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
        step = 0.0 if self._last_time is None else max(0.0, time - self._last_time) * self._pace
        self._last_time = time
        self._plant_time += step
        elapsed = -1.0 if story_start is None else time - story_start
        samples: list[Sample] = []
        for unit in self._site.units:
            at = self._conditions(unit.id, elapsed)
            true = self._machines[unit.id].tags(at)
            for tag in unit.inputs:
                value = (
                    at.load_step if tag.quantity == "load_step" else self._reading(tag, true[tag.name], step)
                )
                samples.append(Sample(tag=tag, time=time, value=value))
        return samples

    def _conditions(self, unit: str, elapsed: float) -> Conditions:
        at = self._scenario.conditions(unit, self._machines[unit].rated, elapsed, self._pace)
        suction, discharge = self._swings[unit]
        return replace(
            at,
            suction_header_pa=at.suction_header_pa * suction.factor(self._plant_time),
            discharge_header_pa=at.discharge_header_pa * discharge.factor(self._plant_time),
        )

    def _reading(self, tag: Input, true: float, step: float) -> float | bool | None:
        in_si, _ = self._instruments[tag.address].update(true, step)
        if in_si is None:
            return None
        reading = (in_si - tag.offset) / tag.scale
        if tag.quantity == "run_signal":
            return reading > 0.5
        return rounded(reading, tag.unit)

    def _swing(self, unit: str, header: str) -> HeaderSwing:
        return HeaderSwing(_SWING[header], f"{self._seed}/{unit}/{header}")


def _check(site: SitePlan, machines: Mapping[str, Machine]) -> None:
    for unit in site.units:
        if unit.id not in machines:
            raise PlantMismatchError(
                f"the invented plant has no machine {unit.id!r}; it has {', '.join(machines)}"
            )
        machine = machines[unit.id]
        known = machine.tags(machine.rated)
        for tag in unit.inputs:
            if tag.quantity != "load_step" and tag.name not in known:
                raise PlantMismatchError(f"{unit.id} {tag.tag}: the invented plant measures no {tag.name}")
        words = {step.word for step in unit.unit.load_steps}
        if missing := words - set(machine.steps):
            raise PlantMismatchError(
                f"{unit.id}: the invented plant knows no load step {', '.join(sorted(missing))}"
            )
