"""A compressor at rest: all empties into the suction header, temperatures go to those around it.

At a stop the recycles open, the suction valve stays open and the non-return valve holds the discharge header
off, so that every vessel comes to the pressure of the suction header.
"""

import math
from typing import Final

from simulator.course import UnitOrders
from simulator.outcome import MachineOutcome

SETTLE_OUT_S: Final = 15.0  # pressures; 2 % of the way is left after a minute
COOL_GAS_S: Final = 1500.0  # gas in bottles and wells
COOL_WALL_S: Final = 3600.0  # liners and heads


class Standstill:
    """True values of the tags of a stopped unit; begins where the machine left off."""

    def __init__(self) -> None:
        self.reset()

    def reset(self) -> None:
        self._pressures: dict[str, float] = {}
        self._temperatures: dict[str, float] = {}
        self.stopped_s = 0.0

    def begin(self, outcome: MachineOutcome) -> None:
        """Take over from the running machine."""
        self.stopped_s = 0.0
        for stage in outcome.stages:
            name = f"stage{stage.number}"
            self._pressures[f"{name}.suction_pressure"] = stage.suction_pressure_pa
            self._pressures[f"{name}.discharge_pressure"] = stage.discharge_pressure_pa
            self._temperatures[f"{name}.suction_temperature"] = stage.suction_temperature_k
            self._temperatures[f"{name}.discharge_temperature"] = stage.discharge_temperature_k

    def update(self, orders: UnitOrders, step_s: float) -> dict[str, float]:
        """The next true values.

        Parameters
        ----------
        orders : UnitOrders
            What holds around the unit.
        step_s : float
            Plant time since the last ones [s].

        Returns
        -------
        dict of str to float
            By series name [SI].
        """
        self.stopped_s += step_s
        near = -math.expm1(-step_s / SETTLE_OUT_S)
        cool = -math.expm1(-step_s / COOL_GAS_S)
        for name in self._pressures:
            self._pressures[name] += (orders.around.suction_pressure_pa - self._pressures[name]) * near
        for name in self._temperatures:
            self._temperatures[name] += (orders.ambient_k - self._temperatures[name]) * cool
        still = {"unit.speed": 0.0, "unit.flow": 0.0, "unit.electrical_power": 0.0, "unit.run_signal": 0.0}
        return {**self._pressures, **self._temperatures, **still}

    def wall_k(self, was_k: float, ambient_k: float) -> float:
        """Metal that was at a temperature when the unit stopped [K]."""
        return ambient_k + (was_k - ambient_k) * math.exp(-self.stopped_s / COOL_WALL_S)
