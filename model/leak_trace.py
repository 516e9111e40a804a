"""A healthy cylinder over a turn, for what leaks along it: states of its gas, and how a leak bends them."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from model.cycle import discharge_stroke, suction_stroke
from model.machine import Cylinder, Side
from model.stage import StageState
from model.surface import GasSurface
from model.throw import EndRun, Frame, TurnGrid, end_runs, turn_grid

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Along:
    """Gas along the trace of a cylinder: functions of pressure alone; parts (frames, 1)."""

    frame: Frame
    suction_k: Array
    inside_k: Array  # at the end of suction
    power: Array  # ln(T2/T1) / ln(r)
    hot_k: Array

    def temperature(self, pressure: Array) -> Array:
        ps = self.frame.path.suction_pressure_pa
        return np.asarray(self.inside_k * (pressure / ps) ** self.power)

    def expanded(self, temperature: Array, pressure: Array) -> Array:
        """Temperature of gas let into an end at that pressure, once it has re-expanded to suction."""
        return np.asarray(temperature * (self.frame.path.suction_pressure_pa / pressure) ** self.power)

    def density(self, pressure: Array) -> Array:
        path = self.frame.path
        return np.asarray(
            path.cylinder_density_kg_m3 * (pressure / path.suction_pressure_pa) ** (1 / path.exponent)
        )


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class EndTrace:
    """One healthy end over a turn, (frames, angles) unless said otherwise."""

    run: EndRun
    pressure: Array
    draws: Mask  # (angles,) its suction stroke
    mass: Array  # of gas in it
    temperature: Array
    loaded: Array  # (frames, 1) 1, or 0 if it delivers nothing


def along_of(gas: GasSurface, frame: Frame, state: StageState) -> Along:
    ps, pd, ts = state.suction_pressure_pa, state.discharge_pressure_pa, state.suction_temperature_k
    rise = gas.temperature_from_entropy(gas.entropy(ts, ps), pd) - ts
    inside = ts + frame.corrections.preheat * rise
    hot = gas.temperature_from_entropy(gas.entropy(inside, ps), pd)
    return Along(
        frame=frame, suction_k=ts[:, None], inside_k=inside[:, None], hot_k=hot[:, None],
        power=(np.log(hot / inside) / np.log(pd / ps))[:, None],
    )  # fmt: skip


def traces_of(
    cylinder: Cylinder, along: Along, open_ends: dict[Side, Mask], angles: int
) -> dict[Side, EndTrace]:
    """Healthy ends of a cylinder over a turn."""
    found, frame = {}, along.frame
    for run in end_runs(cylinder, frame, open_ends):
        grid = turn_grid(run.end, frame.stroke_m, frame.rod_m, angles)
        shape = grid.geometry
        trace = _pressure(run, grid, shape.expansion, shape.compression, shape.travel_rate_m_rad)
        found[run.end.side] = EndTrace(
            run=run, pressure=trace, draws=shape.suction_stroke,
            mass=along.density(trace) * (shape.volume * run.area_m2 * frame.stroke_m),
            temperature=along.temperature(trace),
            loaded=np.where(run.cycle.held_open | run.cycle.dead, 0.0, 1.0),
        )  # fmt: skip
    return found


def bent_power(along: Along, end: EndTrace, into_kg_s: Array, brings_k: Array) -> Array:
    """Change of power, (frames,), by leaked gas.

    Between shut valves it bends the lines; with a valve open it spares the valve some of its flow.
    """
    frame, run = along.frame, end.run
    angles = into_kg_s.shape[1]
    step = 2 * np.pi / angles
    grid = turn_grid(run.end, frame.stroke_m, frame.rod_m, angles)
    shape = grid.geometry
    swells = into_kg_s * (brings_k / end.temperature)
    rate = swells * step / frame.speed_rad_s / end.mass
    gained = np.empty_like(rate)
    for part in (grid.suction, grid.discharge):
        gained[:, part] = np.cumsum(rate[:, part], axis=1) - (rate[:, part] + rate[:, part][:, :1]) / 2
    spared = swells / end.mass * (shape.volume * frame.stroke_m) / frame.speed_rad_s
    through = shape.travel_rate_m_rad + np.where(end.draws, -spared, spared)
    through = np.maximum(through, 0.0)
    pressure = _pressure(run, grid, shape.expansion - gained, shape.compression + gained, through)
    volume = run.area_m2 * frame.stroke_m * frame.speed_rad_s[:, 0] / (2 * np.pi)
    bent = ((pressure - end.pressure) * shape.volume_slope).sum(axis=1) * step
    return np.asarray(np.where(end.loaded[:, 0] > 0, -volume * bent, 0.0))


def _pressure(run: EndRun, grid: TurnGrid, expansion: Array, compression: Array, rate: Array) -> Array:
    """Pressure (frames, angles) of an end along its logarithms of volume and the flow of its valves."""
    into, out = grid.suction, grid.discharge
    trace = np.empty((run.efficiency.shape[0], grid.geometry.volume.size))
    trace[:, into], _ = suction_stroke(run.cycle, expansion[..., into], rate[..., into])
    trace[:, out], _ = discharge_stroke(run.cycle, compression[..., out], rate[..., out])
    return trace
