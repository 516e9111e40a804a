"""True values of one unit, chunk by chunk: settled values from tables, and what takes longer than a minute.

Pressures, flows and power follow within a minute. What does not is added here: cylinder walls that warm and
cool, the gas that follows them a little, and a machine that stands still. Wells lag in the instruments.
"""

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

import numpy as np

from agent.siteplan.plan import UnitPlan
from simulator.course import UnitOrders
from simulator.equipment import Surroundings
from simulator.faults import HEALTHY
from simulator.gas_data import Floats
from simulator.history_minutes import Minutes
from simulator.history_tables import Piece, codes
from simulator.machine import WALL_LAG_S
from simulator.outcome import Closure, MachineOutcome, StageOutcome
from simulator.standstill import COOL_WALL_S, Standstill

MINUTE_S: Final = 60.0
_TAP_BEFORE: Final = "suction header"
# Share of a shift of the cylinder walls that discharge gas follows, all ends at work and some held open:
# measured by shifting the walls of the settled machine by 30 K.
WALL_SHARE: Final = MappingProxyType(
    {"K-110": (0.054, 0.096), "K-220": (0.103, 0.168), "K-330": (0.046, 0.070)}
)
_WALL_SHARE_ELSE: Final = (0.06, 0.10)


class TrueValues:
    """One unit through its history.

    Parameters
    ----------
    plan : UnitPlan
        The unit and its tags.
    usual : Surroundings
        What surrounds it as a rule.
    pieces : Mapping[int, Piece]
        Its tables, by code.
    """

    def __init__(self, plan: UnitPlan, usual: Surroundings, pieces: Mapping[int, Piece]) -> None:
        self._plan, self._usual, self._pieces = plan, usual, pieces
        self._drawn = any(i.quantity == "flow" and i.tap == _TAP_BEFORE for i in plan.inputs)
        self._dry = plan.flow_reference is None or plan.flow_reference.dry
        self.reset()

    def reset(self) -> None:
        self._walls: dict[int, float] = {}
        self._still = Standstill()
        self._runs = True
        self._last: dict[str, float] = {}

    def follow(self, minutes: Minutes) -> dict[str, Floats]:
        """The next minutes: tags by series name, and hidden truths by their own names [SI]."""
        settled = self._settled(minutes)
        running = minutes.running
        hidden = {
            name: values
            for name, values in settled.items()
            if name.startswith("cylinder") or name == "indicated_power_w"
        }
        tags = self._tags(settled)
        self._warm(minutes, hidden, tags)
        if not running.all():
            self._stand(minutes, tags)
        at = len(running) - 1
        self._last = {name: float(values[at]) for name, values in tags.items()}
        self._runs = bool(running[at])
        return {**tags, **hidden}

    def _settled(self, minutes: Minutes) -> dict[str, Floats]:
        code = codes(minutes)
        found: dict[str, Floats] = {}
        names = next(iter(self._pieces.values())).table if self._pieces else None
        if names is None:
            return found
        for number in np.unique(code[minutes.running]):
            chosen = minutes.running & (code == number)
            for name, values in self._pieces[int(number)].values(minutes, chosen).items():
                found.setdefault(name, np.full(len(code), np.nan))[chosen] = values
        if not found:
            found = {name: np.full(len(code), np.nan) for name in names.value_names}
        return found

    def _tags(self, settled: Mapping[str, Floats]) -> dict[str, Floats]:
        flow = f"{'inlet' if self._drawn else 'export'}_{'dry' if self._dry else 'flow'}_mol_s"
        tags = {
            "unit.speed": settled["speed_rad_s"],
            "unit.flow": settled[flow],
            "unit.electrical_power": settled["electrical_power_w"],
        }
        for stage in self._plan.unit.stages:
            for quantity, suffix in _OF_STAGE:
                tags[f"stage{stage.number}.{quantity}"] = settled[f"stage{stage.number}.{quantity}{suffix}"]
        tags["unit.run_signal"] = np.ones(len(settled[flow]))
        return tags

    def _warm(self, minutes: Minutes, hidden: dict[str, Floats], tags: dict[str, Floats]) -> None:
        """Walls lag behind; discharge gas is a little colder or hotter until they have come along."""
        running, ambient = minutes.running, minutes.ambient_k
        warmed, cooled = (-math.expm1(-MINUTE_S / s) for s in (WALL_LAG_S, COOL_WALL_S))
        gain = np.where(running, warmed, cooled)
        at_work, held_open = WALL_SHARE.get(self._plan.unit.id, _WALL_SHARE_ELSE)
        idle = np.array([bool(step.held_open) for step in self._plan.unit.load_steps])
        share = np.where(idle[minutes.step], held_open, at_work)
        for stage in self._plan.unit.stages:
            behind = []
            for cylinder in stage.cylinders:
                name = f"cylinder{cylinder.number}.wall_temperature_k"
                aim = np.where(running, hidden[name], ambient)
                wall = _lagged(aim, gain, self._walls.get(cylinder.number, float(aim[0])))
                self._walls[cylinder.number] = float(wall[-1])
                behind.append(wall - aim)
                hidden[name] = wall
            tags[f"stage{stage.number}.discharge_temperature"] += share * np.mean(behind, axis=0)

    def _stand(self, minutes: Minutes, tags: dict[str, Floats]) -> None:
        running = minutes.running
        for i in np.flatnonzero(~running):
            before = running[i - 1] if i else self._runs
            if before:
                last = {n: float(v[i - 1]) for n, v in tags.items()} if i else self._last
                self._still.begin(self._stopping(last or self._usually()))
            around = self._standing_around(float(minutes.values["suction_pressure_pa"][i]))
            word = self._plan.unit.load_steps[int(minutes.step[i])].word
            orders = UnitOrders(
                around=around, faults=HEALTHY, load_step=word, running=False,
                ambient_k=float(minutes.ambient_k[i]),
            )  # fmt: skip
            for name, value in self._still.update(orders, MINUTE_S).items():
                tags[name][i] = value

    def _standing_around(self, suction_pa: float) -> Surroundings:
        usual = self._usual
        high = max(usual.discharge_pressure_pa, suction_pa * 1.01)
        return Surroundings(
            suction_pressure_pa=suction_pa, discharge_pressure_pa=high,
            suction_temperature_k=usual.suction_temperature_k, speed_rad_s=usual.speed_rad_s,
        )  # fmt: skip

    def _usually(self) -> dict[str, float]:
        """A history that begins at a standstill: all at the suction header's pressure."""
        values = {}
        for stage in self._plan.unit.stages:
            for quantity, suffix in _OF_STAGE:
                pressure = suffix == "_pa"
                values[f"stage{stage.number}.{quantity}"] = (
                    self._usual.suction_pressure_pa if pressure else self._usual.suction_temperature_k
                )
        return values

    def _stopping(self, tags: Mapping[str, float]) -> MachineOutcome:
        """The last running minute, as the standstill wants it told."""
        nan = math.nan
        stages = tuple(
            StageOutcome(
                number=s.number,
                suction_pressure_pa=tags[f"stage{s.number}.suction_pressure"],
                suction_temperature_k=tags[f"stage{s.number}.suction_temperature"],
                discharge_pressure_pa=tags[f"stage{s.number}.discharge_pressure"],
                discharge_temperature_k=tags[f"stage{s.number}.discharge_temperature"],
                suction_flow_mol_s=nan, discharge_flow_mol_s=nan, water_fraction=nan, condensate_mol_s=nan,
                cooler_outlet_temperature_k=nan, relief_flow_mol_s=nan, indicated_power_w=nan,
            )
            for s in self._plan.unit.stages
        )  # fmt: skip
        return MachineOutcome(
            duration_s=MINUTE_S, speed_rad_s=nan, inlet_flow_mol_s=nan, inlet_dry_mol_s=nan,
            export_flow_mol_s=nan, export_dry_mol_s=nan, first_recycle_mol_s=nan, final_recycle_mol_s=nan,
            indicated_power_w=nan, electrical_power_w=nan, stages=stages, cylinders=(),
            closure=Closure(amount=nan, energy=nan, held_back=nan, clipped=nan),
        )  # fmt: skip


_OF_STAGE: Final = (
    ("suction_pressure", "_pa"),
    ("discharge_pressure", "_pa"),
    ("suction_temperature", "_k"),
    ("discharge_temperature", "_k"),
)


def _lagged(aim: Floats, gain: Floats, start: float) -> Floats:
    """A first-order lag with a gain of its own at every step."""
    level, out = start, []
    for target, share in zip(aim.tolist(), gain.tolist(), strict=True):
        level += (target - level) * share
        out.append(level)
    return np.array(out)
