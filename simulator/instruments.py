"""What lies between a true value and the tag: thermowell and metal, noise, faults, the digits of the sender.

The noise budget is one table: white noise per sample, plus a slow part that wanders over hours (first-order
autoregressive, .6 from one hour to the next). Noise of pressure, flow and power is a share of the reading.

Noise, slow part and spikes each have a stream of their own and draw from it once a sample whatever is wrong,
so that a clean and a faulty run of one seed share their noise.
"""

import hashlib
import math
import random
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from simulator.instrument_faults import FaultTrack, InstrumentFault, InstrumentFaultKind, SampleQuality

HOURLY_CORRELATION: Final = 0.6
HOUR_S: Final = 3600.0

SPIKE_EVERY: Final = 60  # samples

# How arrays carry a quality.
QUALITY_CODES: Final[Mapping[SampleQuality, int]] = MappingProxyType(
    {SampleQuality.GOOD: 0, SampleQuality.UNCERTAIN: 1, SampleQuality.BAD: 2}
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """Noise and lag of one kind of instrument; standard deviations in SI or as a share of the reading.

    A thermometer sits in a well that is in part led by the metal about it: ``soak_share`` of what it shows
    follows the gas with ``soak_s``, before the lag of the well itself.
    """

    white: float
    hourly: float
    relative: bool
    lag_s: float  # thermowell, or the filling of bottles and the averaging of a transmitter
    soak_s: float = 0.0
    soak_share: float = 0.0


# source of the deviations: the project's noise budget; lags and soaking: common practice
BUDGETS: Final[Mapping[str, Budget]] = MappingProxyType(
    {
        "suction_pressure": Budget(white=0.0005, hourly=0.001, relative=True, lag_s=3.0),
        "discharge_pressure": Budget(white=0.0005, hourly=0.001, relative=True, lag_s=3.0),
        "suction_temperature": Budget(
            white=0.5, hourly=1.0, relative=False, lag_s=60.0, soak_s=600.0, soak_share=0.1
        ),
        "discharge_temperature": Budget(
            white=0.5, hourly=1.0, relative=False, lag_s=60.0, soak_s=900.0, soak_share=0.1
        ),
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

    def follow(self, values: NDArray[np.float64], steps_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """`update` for a row of values."""
        if not len(values):
            return values
        if self._time_constant_s == 0:
            self._value = float(values[-1])
            return values
        last_step, gain = math.nan, 0.0
        level = float(values[0]) if self._value is None else self._value
        out = []
        for value, step_s in zip(values.tolist(), steps_s.tolist(), strict=True):
            if step_s != last_step:
                last_step, gain = step_s, -math.expm1(-step_s / self._time_constant_s)
            level += (value - level) * gain
            out.append(level)
        self._value = level
        return np.array(out, dtype=np.float64)


class SlowWander:
    """The hour-scale part of the noise, with unit standard deviation at every instant."""

    def __init__(self, chance: np.random.Generator) -> None:
        self._chance = chance
        self.reset()

    def reset(self) -> None:
        self._value = float(self._chance.standard_normal())

    def update(self, step_s: float) -> float:
        keep = HOURLY_CORRELATION ** (step_s / HOUR_S)
        self._value = keep * self._value + math.sqrt(1 - keep * keep) * float(self._chance.standard_normal())
        return self._value

    def follow(self, steps_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """`update` for a row of steps."""
        draws = self._chance.standard_normal(len(steps_s)).tolist()
        value, last_step, keep, drive = self._value, math.nan, 1.0, 0.0
        out = []
        for step_s, draw in zip(steps_s.tolist(), draws, strict=True):
            if step_s != last_step:
                keep, last_step = HOURLY_CORRELATION ** (step_s / HOUR_S), step_s
                drive = math.sqrt(1 - keep * keep)
            value = keep * value + drive * draw
            out.append(value)
        self._value = value
        return np.array(out, dtype=np.float64)


class SpikeTrain:
    """An excursion of height one in every `SPIKE_EVERY` samples, somewhere in them, 1 or 2 samples long."""

    def __init__(self, chance: np.random.Generator) -> None:
        self._chance = chance
        self.reset()

    def reset(self) -> None:
        self._count = 0
        self._drawn = (0.0, 0.0)

    def update(self) -> float:
        place = self._count % SPIKE_EVERY
        if place == 0:
            where, length = self._chance.random(2).tolist()
            self._drawn = (where, length)
        self._count += 1
        return float(_spike(place, *self._drawn))

    def follow(self, count: int) -> NDArray[np.float64]:
        """`update` for a row of samples."""
        samples = np.arange(self._count, self._count + count)
        known = -(-self._count // SPIKE_EVERY)  # stretches begun
        begun = -(-(self._count + count) // SPIKE_EVERY)
        fresh = self._chance.random((begun - known, 2))
        drawn = np.concatenate([np.array([self._drawn]), fresh])
        if begun > known:
            self._drawn = (float(fresh[-1, 0]), float(fresh[-1, 1]))
        self._count += count
        where, length = drawn[samples // SPIKE_EVERY - (known - 1)].T
        return np.asarray(_spike(samples % SPIKE_EVERY, where, length), dtype=np.float64)


def _spike(place: ArrayLike, where: ArrayLike, length: ArrayLike) -> NDArray[np.bool_]:
    """Whether a sample lies in the spike; the last sample of a stretch never does, so that none touch."""
    after = place - np.floor(np.multiply(where, SPIKE_EVERY - 2))
    return np.asarray((after == 0) | ((after == 1) & (np.asarray(length) < 0.5)))


class Instrument:
    """One transmitter: true value to reading, both in SI; steps are in plant time.

    Parameters
    ----------
    quantity : str
        What it measures, a key of `BUDGETS`.
    seed : str
        Of its noise and of the places of its spikes.
    span_low : float
        Low end of its span, in SI; infinite where there is none [SI].
    holds_last : bool
        Whether its sender repeats the last value while it says bad, or gives none.
    """

    def __init__(self, quantity: str, seed: str, *, span_low: float = 0.0, holds_last: bool = False) -> None:
        self._budget = BUDGETS[quantity]
        self._seed = seed
        self._low = span_low if math.isfinite(span_low) else 0.0
        self._holds_last = holds_last
        self.reset()

    def reset(self) -> None:
        self._well = FirstOrder(self._budget.lag_s)
        self._metal = FirstOrder(self._budget.soak_s)
        self._wander = SlowWander(_stream(self._seed, "slow"))
        self._white = _stream(self._seed, "white")
        self._spikes = SpikeTrain(_stream(self._seed, "spikes"))
        self._shown: float | None = None  # its last reading
        self._sent: float | None = None  # the last one that was not called bad

    def update(
        self, true_value: float, step_s: float, faults: Sequence[InstrumentFault] = ()
    ) -> tuple[float | None, SampleQuality]:
        """The next reading, ``step_s`` after the last one.

        Parameters
        ----------
        true_value : float
            What there is to measure [SI].
        step_s : float
            Plant time since the last reading [s].
        faults : Sequence[InstrumentFault]
            What is wrong now.

        Returns
        -------
        tuple of float or None and SampleQuality
            The reading [SI], none if the sender gives none, and what the sender says of it.
        """
        share = self._budget.soak_share
        about = (1 - share) * true_value + share * self._metal.update(true_value, step_s)
        settled = self._well.update(about, step_s)
        slow, white = self._wander.update(step_s), float(self._white.standard_normal())
        reading = self._noisy(settled, self._budget.hourly * slow + self._budget.white * white)
        spike = self._spikes.update()
        kinds = {fault.kind for fault in faults if fault.present}
        if kinds:
            for fault in faults:
                if fault.kind is InstrumentFaultKind.WRONG_SPAN and fault.present:
                    reading = self._low + (reading - self._low) * fault.size
            for fault in faults:
                if fault.kind is InstrumentFaultKind.BIAS:
                    reading = reading + fault.size
                elif fault.kind is InstrumentFaultKind.SPIKES:
                    reading = reading + fault.size * spike
            if InstrumentFaultKind.STUCK in kinds and self._shown is not None:
                reading = self._shown
        self._shown = reading
        if InstrumentFaultKind.BAD_QUALITY in kinds:
            return (self._sent if self._holds_last else None), SampleQuality.BAD
        self._sent = reading
        uncertain = InstrumentFaultKind.UNCERTAIN_QUALITY in kinds
        return reading, SampleQuality.UNCERTAIN if uncertain else SampleQuality.GOOD

    def readings(
        self, true_values: ArrayLike, step_s: ArrayLike, faults: Sequence[FaultTrack] = ()
    ) -> tuple[NDArray[np.float64], NDArray[np.uint8]]:
        """`update` for a row of instants, with the same result; goes on from the last reading of either.

        Parameters
        ----------
        true_values : ArrayLike
            What there is to measure, (n,) [SI].
        step_s : ArrayLike
            Plant time from one reading to the next, one number or (n,) [s].
        faults : Sequence[FaultTrack]
            What is wrong at each instant.

        Returns
        -------
        tuple of NDArray and NDArray
            Readings [SI], NaN where the sender gives none, and qualities as in `QUALITY_CODES`.
        """
        true = np.asarray(true_values, dtype=np.float64)
        steps = np.broadcast_to(np.asarray(step_s, dtype=np.float64), true.shape)
        share = self._budget.soak_share
        about = (1 - share) * true + share * self._metal.follow(true, steps)
        settled = self._well.follow(about, steps)
        slow, white = self._wander.follow(steps), self._white.standard_normal(len(true))
        readings = self._noisy_row(settled, self._budget.hourly * slow + self._budget.white * white)
        spike = self._spikes.follow(len(true))
        for track in faults:
            if track.kind is InstrumentFaultKind.WRONG_SPAN:
                wrong = self._low + (readings - self._low) * track.sizes
                readings = np.where(track.sizes == 1.0, readings, wrong)
        for track in faults:
            if track.kind is InstrumentFaultKind.BIAS:
                readings = readings + track.sizes
            elif track.kind is InstrumentFaultKind.SPIKES:
                readings = readings + track.sizes * spike
        shown, self._shown = _held(
            readings, _present(faults, InstrumentFaultKind.STUCK, true.shape), self._shown
        )
        bad = _present(faults, InstrumentFaultKind.BAD_QUALITY, true.shape)
        uncertain = _present(faults, InstrumentFaultKind.UNCERTAIN_QUALITY, true.shape)
        kept, self._sent = _held(shown, bad, self._sent, without=math.nan)
        quality = np.where(bad, 2, np.where(uncertain, 1, 0)).astype(np.uint8)
        return (kept if self._holds_last else np.where(bad, math.nan, shown)), quality

    def _noisy(self, settled: float, noise: float) -> float:
        if self._budget.relative:
            return settled * (1 + noise)
        # a standing shaft shows no speed noise
        return settled + noise if settled != 0 else settled

    def _noisy_row(self, settled: NDArray[np.float64], noise: NDArray[np.float64]) -> NDArray[np.float64]:
        if self._budget.relative:
            return settled * (1 + noise)
        return np.where(settled != 0, settled + noise, settled)


def _stream(seed: str, name: str) -> np.random.Generator:
    """Random numbers that depend on nothing but a seed and a name."""
    digest = hashlib.sha256(f"{seed}/{name}".encode()).digest()
    return np.random.default_rng(np.frombuffer(digest, dtype="<u4"))


def _present(
    faults: Iterable[FaultTrack], kind: InstrumentFaultKind, shape: tuple[int, ...]
) -> NDArray[np.bool_]:
    found = np.zeros(shape, dtype=np.bool_)
    for track in faults:
        if track.kind is kind:
            found |= track.sizes != 0.0
    return found


def _held(
    values: NDArray[np.float64],
    hold: NDArray[np.bool_],
    before: float | None,
    *,
    without: float | None = None,
) -> tuple[NDArray[np.float64], float | None]:
    """Values, each replaced by the last one that was not held where ``hold`` says so; and the last of all.

    With nothing before it to hold, a value is ``without``; if that is none, the first one is taken and held.
    """
    if not len(values) or not hold.any():
        return values, float(values[-1]) if len(values) else before
    hold = hold.copy()
    if before is None and without is None:
        hold[0] = False
    places = np.maximum.accumulate(np.where(hold, -1, np.arange(len(values))))
    first = before if before is not None else without
    out = np.where(places < 0, math.nan if first is None else first, values[places])
    last = before if places[-1] < 0 else float(out[-1])
    return out, last


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

    def factors(self, plant_time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """`factor` for a row of instants."""
        wave = np.zeros_like(plant_time_s)
        for (share, period), phase in zip(self._PARTS, self._phases, strict=True):
            wave += share * np.sin(2 * math.pi * plant_time_s / period + phase)
        return 1 + self._amplitude * wave


def rounded(value: float, unit: str) -> float:
    """A reading with the digits its sender has, in the plant's unit."""
    step = RESOLUTION.get(unit)
    if step is None:
        return value
    digits = max(0, -math.floor(math.log10(step)))
    return round(round(value / step) * step, digits)
