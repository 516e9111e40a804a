"""What lies between a true value and the tag: settling, thermowells, noise and the resolution of the sender.

The noise budget is one table: white noise per sample, plus a slow part that wanders over hours (first-order
autoregressive, .6 from one hour to the next). Noise of pressure, flow and power is a share of the reading.
"""

import math
import random
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

HOURLY_CORRELATION: Final = 0.6
HOUR_S: Final = 3600.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """Noise and lag of one kind of instrument; standard deviations in SI or as a share of the reading."""

    white: float
    hourly: float
    relative: bool
    lag_s: float  # thermowell, or the filling of bottles and the averaging of a transmitter


BUDGETS: Final[Mapping[str, Budget]] = MappingProxyType(
    {
        "suction_pressure": Budget(white=0.0005, hourly=0.001, relative=True, lag_s=3.0),
        "discharge_pressure": Budget(white=0.0005, hourly=0.001, relative=True, lag_s=3.0),
        "suction_temperature": Budget(white=0.5, hourly=1.0, relative=False, lag_s=60.0),
        "discharge_temperature": Budget(white=0.5, hourly=1.0, relative=False, lag_s=60.0),
        "speed": Budget(white=0.02, hourly=0.0, relative=False, lag_s=5.0),
        "flow": Budget(white=0.005, hourly=0.007, relative=True, lag_s=5.0),
        "electrical_power": Budget(white=0.003, hourly=0.005, relative=True, lag_s=2.0),
        "run_signal": Budget(white=0.0, hourly=0.0, relative=False, lag_s=0.0),
    }
)

# Last digit that a sender shows, in the plant's unit.
RESOLUTION: Final[Mapping[str, float]] = MappingProxyType(
    {"barg": 0.01, "bara": 0.01, "degC": 0.1, "K": 0.1, "rpm": 0.1, "Nm3/h": 1.0, "kW": 1.0, "switch": 1.0}
)


class FirstOrder:
    """A first-order lag; starts at the first value it is given."""

    def __init__(self, time_constant_s: float) -> None:
        if time_constant_s < 0:
            raise ValueError(f"time constant {time_constant_s} s is negative")
        self._time_constant_s = time_constant_s
        self.reset()

    def reset(self) -> None:
        self._value: float | None = None

    def update(self, value: float, step_s: float) -> float:
        if self._value is None or self._time_constant_s == 0:
            self._value = value
        else:
            self._value += (value - self._value) * -math.expm1(-step_s / self._time_constant_s)
        return self._value


class SlowWander:
    """The hour-scale part of the noise, with unit standard deviation at every instant."""

    def __init__(self, chance: random.Random) -> None:
        self._chance = chance
        self.reset()

    def reset(self) -> None:
        self._value = self._chance.gauss(0.0, 1.0)

    def update(self, step_s: float) -> float:
        keep = HOURLY_CORRELATION ** (step_s / HOUR_S)
        self._value = keep * self._value + math.sqrt(1 - keep * keep) * self._chance.gauss(0.0, 1.0)
        return self._value


class Instrument:
    """One transmitter: true value to reading, both in SI; steps are in plant time."""

    def __init__(self, quantity: str, seed: str) -> None:
        self._budget = BUDGETS[quantity]
        self._seed = seed
        self.reset()

    def reset(self) -> None:
        self._chance = random.Random(self._seed)
        self._lag = FirstOrder(self._budget.lag_s)
        self._wander = SlowWander(self._chance)

    def update(self, true_value: float, step_s: float) -> float:
        settled = self._lag.update(true_value, step_s)
        noise = self._budget.hourly * self._wander.update(step_s) + self._budget.white * self._chance.gauss(
            0.0, 1.0
        )
        if self._budget.relative:
            return settled * (1 + noise)
        # a standing shaft shows no speed noise
        return settled + noise if settled != 0 else settled


class HeaderSwing:
    """The slow breathing of a header: two sines of a few minutes, as a factor about one."""

    _PARTS = ((1.0, 240.0), (0.5, 97.0))  # share of the amplitude, period in seconds

    def __init__(self, amplitude: float, seed: str) -> None:
        chance = random.Random(seed)
        self._amplitude = amplitude
        self._phases = [chance.uniform(0, 2 * math.pi) for _ in self._PARTS]

    def factor(self, plant_time_s: float) -> float:
        turns = zip(self._PARTS, self._phases, strict=True)
        wave = sum(a * math.sin(2 * math.pi * plant_time_s / period + phase) for (a, period), phase in turns)
        return 1 + self._amplitude * wave


def rounded(value: float, unit: str) -> float:
    """A reading with the digits its sender has, in the plant's unit."""
    step = RESOLUTION.get(unit)
    if step is None:
        return value
    digits = max(0, -math.floor(math.log10(step)))
    return round(round(value / step) * step, digits)
