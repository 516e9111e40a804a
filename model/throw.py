"""One cylinder with its rod: both ends over one turn, what it draws, what it takes, what its rod carries."""

from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.cycle import (
    EndCycle,
    EndGeometry,
    GasPath,
    discharge_stroke,
    end_cycle,
    end_geometry,
    end_pressure,
    suction_stroke,
)
from model.kinematics import piston_travel_curvature
from model.machine import Cylinder, End, OtherSide, Side
from model.rodload import gas_load, inertia_load, reversal

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

ANGLES: Final = 480
"""Steps of a turn: power to 3e-5 and reversal to 0.02 degrees; peaks are sought between the steps."""
_OPENING_PASSES: Final = 3  # of false position inside one step; leaves 1e-4 degrees


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Frame:
    """What a throw hangs on, apart from itself."""

    path: GasPath
    speed_rad_s: Array  # (frames, 1)
    stroke_m: float
    rod_m: float
    ambient_pressure_pa: float
    corrections: Corrections


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Throw:
    """A cylinder evaluated; arrays (frames,). Loads are positive, tension and compression apart."""

    flow_kg_s: Array
    full_flow_kg_s: Array  # with every end loaded
    swept_m3_s: Array  # by the loaded ends
    power_w: Array
    gas_tension_n: Array
    gas_compression_n: Array
    pin_tension_n: Array
    pin_compression_n: Array
    rod_tension_n: Array  # combined, at the piston rod
    rod_compression_n: Array
    reversal_rad: Array
    reversal_share: Array
    crossings: Array  # how often the load at the pin changes sign in a turn


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class EndRun:
    """One end of a cylinder in its load state, over frames."""

    end: End
    area_m2: float
    cycle: EndCycle
    efficiency: Array  # (frames, 1), when loaded


def end_runs(cylinder: Cylinder, frame: Frame, held_open: dict[Side, Mask]) -> tuple[EndRun, ...]:
    """Set up the ends of a cylinder. ``held_open`` holds (frames, 1) for each side."""
    runs = []
    for end in cylinder.ends:
        cycle, efficiency = end_cycle(
            end, frame.path, frame.speed_rad_s, held_open[end.side], frame.corrections,
            stroke_m=frame.stroke_m, rod_m=frame.rod_m,
            natural_frequency_hz=cylinder.valve_natural_frequency_hz,
        )  # fmt: skip
        runs.append(EndRun(end=end, area_m2=cylinder.area_m2(end.side), cycle=cycle, efficiency=efficiency))
    return tuple(runs)


def run_throw(cylinder: Cylinder, frame: Frame, held_open: dict[Side, Mask], angles: int = ANGLES) -> Throw:
    """Evaluate a cylinder over frames.

    Parameters
    ----------
    cylinder : Cylinder
        The cylinder.
    frame : Frame
        What it hangs on apart from itself.
    held_open : dict
        By side, (frames, 1): whether the end is held open.
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    Throw
        Flow, power, loads and reversal. [SI]

    Notes
    -----
    Power is the integral of pressure over volume at equal steps of the angle. Peaks are taken over those
    steps and over the very angles at which valves open.

    References
    ----------
    H. P. Bloch, J. J. Hoefner, *Reciprocating Compressors: Operation and Maintenance*, Gulf, 1996, p. 85.
    """
    runs = end_runs(cylinder, frame, held_open)
    turns = frame.speed_rad_s[:, 0] / (2 * np.pi)
    traces, openings = [], []
    flow: Array = np.zeros(turns.size)
    full = swept = power = flow
    for run in runs:
        grid = turn_grid(run.end, frame.stroke_m, frame.rod_m, angles)
        trace, opening = _grid_pressure(run, grid, frame)
        traces.append(trace)
        openings.append(opening)
        volume = run.area_m2 * frame.stroke_m * turns
        capacity = run.efficiency[:, 0] * volume * frame.path.suction_density_kg_m3[:, 0]
        loaded = ~run.cycle.held_open[:, 0]
        full = full + capacity
        flow = flow + np.where(loaded, capacity, 0.0)
        swept = swept + np.where(loaded, volume, 0.0)
        power = power - volume * (trace * grid.geometry.volume_slope).sum(axis=1) * (2 * np.pi / angles)
    gas, inertia = _loads(cylinder, runs, frame, _angles(angles)[None, :], traces)
    opening = np.concatenate(openings, axis=1)
    gas_there, inertia_there = _loads(cylinder, runs, frame, opening, None)
    pin, pin_there = gas + inertia, gas_there + inertia_there
    gas_tension, gas_compression = _peaks(gas, gas_there)
    pin_tension, pin_compression = _peaks(pin, pin_there)
    rod_tension, rod_compression = pin_tension, pin_compression
    if cylinder.crosshead_mass_kg:
        share = cylinder.rod_mass_share
        rod_tension, rod_compression = _peaks(gas + share * inertia, gas_there + share * inertia_there)
    turned = reversal(pin, pin_tension, pin_compression)
    return Throw(
        flow_kg_s=flow, full_flow_kg_s=full, swept_m3_s=swept, power_w=power,
        gas_tension_n=gas_tension, gas_compression_n=gas_compression,
        pin_tension_n=pin_tension, pin_compression_n=pin_compression,
        rod_tension_n=rod_tension, rod_compression_n=rod_compression,
        reversal_rad=turned.duration_rad, reversal_share=turned.share, crossings=turned.crossings,
    )  # fmt: skip


def opening_angles(cylinder: Cylinder, frame: Frame, held_open: dict[Side, Mask]) -> Array:
    """Crank angles (frames, openings) at which valves open, where the loads have corners. [rad]"""
    found = []
    for run in end_runs(cylinder, frame, held_open):
        grid = turn_grid(run.end, frame.stroke_m, frame.rod_m, ANGLES)
        found.append(_grid_pressure(run, grid, frame)[1])
    return np.concatenate(found, axis=1)


def loads_at(
    cylinder: Cylinder, runs: tuple[EndRun, ...], frame: Frame, angle_rad: Array
) -> tuple[Array, Array]:
    """Gas load and inertia load at any crank angles.

    Parameters
    ----------
    cylinder : Cylinder
        The cylinder.
    runs : tuple of EndRun
        Its ends.
    frame : Frame
        What it hangs on apart from itself.
    angle_rad : ndarray
        (1 or frames, n) crank angles. [rad]

    Returns
    -------
    tuple of ndarray
        Gas load and inertia load at the pin (frames, n), tension positive; the piston rod carries the
        `Cylinder.rod_mass_share` of the second. [N]

    References
    ----------
    See `model.rodload`.
    """
    return _loads(cylinder, runs, frame, angle_rad, None)


def _peaks(grid: Array, corners: Array) -> tuple[Array, Array]:
    highest = np.maximum(grid.max(axis=1), corners.max(axis=1))
    lowest = np.minimum(grid.min(axis=1), corners.min(axis=1))
    tension: Array = np.maximum(highest, 0.0)
    compression: Array = np.maximum(-lowest, 0.0)
    return tension, compression


def _loads(
    cylinder: Cylinder,
    runs: tuple[EndRun, ...],
    frame: Frame,
    angle_rad: Array,
    traces: list[Array] | None,
) -> tuple[Array, Array]:
    # A side without valves is open to what the nameplate says.
    outside = frame.ambient_pressure_pa
    suction = cylinder.other_side is OtherSide.SUCTION
    without = frame.path.suction_pressure_pa if suction else np.full_like(frame.speed_rad_s, outside)
    sides = dict.fromkeys(Side, without)
    for index, run in enumerate(runs):
        if traces is None:
            geometry = end_geometry(angle_rad, run.end, frame.stroke_m, frame.rod_m)
            sides[run.end.side] = end_pressure(run.cycle, geometry)
        else:
            sides[run.end.side] = traces[index]
    gas = gas_load(
        sides[Side.HEAD], sides[Side.CRANK], head_area_m2=cylinder.head_area_m2,
        crank_area_m2=cylinder.crank_area_m2, ambient_pressure_pa=outside,
    )  # fmt: skip
    if cylinder.distance_piece_pressure_pa is not None:  # pushes on the rod's section, where air else does
        gas = gas + (cylinder.distance_piece_pressure_pa - outside) * cylinder.rod_area_m2
    curvature = piston_travel_curvature(angle_rad, frame.stroke_m, frame.rod_m)
    return gas, inertia_load(cylinder.reciprocating_mass_kg, frame.speed_rad_s, curvature)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class TurnGrid:
    """One end at equal steps of a turn, and which of them are its suction stroke and its discharge stroke."""

    geometry: EndGeometry
    suction: slice
    discharge: slice


@lru_cache(maxsize=8)
def _angles(count: int) -> Array:
    return np.arange(count, dtype=np.float64) * (2 * np.pi / count)


@lru_cache(maxsize=256)
def turn_grid(end: End, stroke_m: float, rod_m: float, count: int) -> TurnGrid:
    """Volumes and rates of an end at equal steps of a turn; kept, as they never change."""
    first, second = slice(0, count // 2), slice(count // 2, count)
    suction, discharge = (first, second) if end.side is Side.HEAD else (second, first)
    geometry = end_geometry(_angles(count), end, stroke_m, rod_m)
    return TurnGrid(geometry=geometry, suction=suction, discharge=discharge)


def _grid_pressure(run: EndRun, grid: TurnGrid, frame: Frame) -> tuple[Array, Array]:
    """Pressure (frames, angles) on the grid and the angles (frames, 2) at which the valves open."""
    shape, angles = grid.geometry, _angles(grid.geometry.volume.size)
    trace = np.empty((frame.speed_rad_s.shape[0], angles.size))
    openings = np.empty((trace.shape[0], 2))
    strokes = (
        (grid.suction, suction_stroke, shape.expansion),
        (grid.discharge, discharge_stroke, shape.compression),
    )
    for place, (part, stroke, log_volume) in enumerate(strokes):
        trace[:, part], gap = stroke(run.cycle, log_volume[part], shape.travel_rate_m_rad[part])
        low, high, below, above = _bracket(gap, angles[part])
        for _ in range(_OPENING_PASSES):
            middle = low - below * (high - low) / (above - below)
            at = end_geometry(middle, run.end, frame.stroke_m, frame.rod_m)
            log_there = at.expansion if stroke is suction_stroke else at.compression
            value = stroke(run.cycle, log_there, at.travel_rate_m_rad)[1]
            under = value < 0
            low, below = np.where(under, middle, low), np.where(under, value, below)
            high, above = np.where(under, high, middle), np.where(under, above, value)
        openings[:, place] = (low - below * (high - low) / (above - below))[:, 0]
    return trace, openings


def _bracket(gap: Array, angles: Array) -> tuple[Array, Array, Array, Array]:
    """The step (frames, 1) in which the gap turns positive; without one, any step does no harm."""
    last = np.clip(np.argmax(gap >= 0, axis=1), 1, angles.size - 1)[:, None]
    below, above = np.take_along_axis(gap, last - 1, axis=1), np.take_along_axis(gap, last, axis=1)
    crosses = (below < 0) & (above >= 0)
    return (
        angles[last - 1],
        angles[last],
        np.where(crosses, below, -1.0),
        np.where(crosses, above, 1.0),
    )
