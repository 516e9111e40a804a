"""What a stage draws and the work it takes, without the loads of its rods: for what asks many times."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.cycle import EndGeometry, discharge_stroke, end_geometry, suction_stroke
from model.machine import Cylinder, End, Side, Stage, Unit
from model.stage import StageState, stage_frame
from model.steps import by_make, frame_rows, held_open, makes
from model.surface import GasSurface
from model.throw import ANGLES, EndRun, Frame, end_runs
from model.valves import full_lift_loss

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class StageWork:
    """A stage over frames, (frames,)."""

    flow_kg_s: Array
    full_flow_kg_s: Array  # with every end loaded
    power_w: Array
    enthalpy_j_kg: Array  # at suction


def alike(unit: Unit, stage: Stage) -> tuple[tuple[Cylinder, int], ...]:
    """Cylinders of a stage that differ, each with how many there are of it."""
    found: dict[tuple[object, ...], tuple[Cylinder, int]] = {}
    for cylinder in stage.cylinders:
        states = tuple(step.state(cylinder.number, side) for step in unit.load_steps for side in Side)
        ends = tuple(made.ends for made in makes(unit, cylinder))
        key = (
            cylinder.bore_m, cylinder.rod_diameter_m, cylinder.tail_rod_diameter_m,
            cylinder.valve_natural_frequency_hz, cylinder.ends, ends, states,
        )  # fmt: skip
        found[key] = (found.get(key, (cylinder, 0))[0], found.get(key, (cylinder, 0))[1] + 1)
    return tuple(found.values())


def stage_work(
    unit: Unit,
    cylinders: tuple[tuple[Cylinder, int], ...],
    gas: GasSurface,
    corrections: Corrections,
    state: StageState,
    *,
    angles: int,
) -> StageWork:
    """Flow and indicated power of a stage: those of `model.stage.run_stage`, at a third of its price.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    cylinders : tuple
        The stage's cylinders that differ, each with how many there are of it.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    state : StageState
        What is around the stage.
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    StageWork
        Flow, power, and enthalpy at suction. [SI]

    References
    ----------
    See `model.cycle` and `model.throw`.
    """
    frame, enthalpy = stage_frame(unit, gas, corrections, state)
    turns = state.speed_rad_s / (2 * np.pi)
    flow, full, power = (np.zeros(turns.size) for _ in range(3))
    for cylinder, count in cylinders:
        for made, rows in by_make(unit, cylinder, state.load_step):
            at = slice(None) if rows is None else rows
            part = frame_rows(frame, rows)
            for run in end_runs(made, part, held_open(unit, cylinder, state.load_step[at])):
                volume = count * run.area_m2 * unit.stroke_m * turns[at]
                capacity = run.efficiency[:, 0] * volume * part.path.suction_density_kg_m3[:, 0]
                full[at] += capacity
                flow[at] += np.where(run.cycle.held_open[:, 0], 0.0, capacity)
                power[at] -= volume * _mean_work(run, part, angles)
    return StageWork(flow_kg_s=flow, full_flow_kg_s=full, power_w=power, enthalpy_j_kg=enthalpy)


def idle_power(
    unit: Unit,
    cylinders: tuple[tuple[Cylinder, int], ...],
    corrections: Corrections,
    density_kg_m3: Array,
    *,
    speed_rad_s: Array,
    load_step: NDArray[np.intp],
) -> Array:
    """Power of the ends of a stage that are held open: gas pushed to and fro through suction valves.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    cylinders : tuple
        The stage's cylinders that differ, each with how many there are of it.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    density_kg_m3 : ndarray
        (frames,) density at suction. [kg/m3]
    speed_rad_s : ndarray
        (frames,) speed of the crankshaft. [rad/s]
    load_step : ndarray of int
        (frames,) index of the load step. [-]

    Returns
    -------
    ndarray
        Power, (frames,). [W]

    Notes
    -----
    The loss of both strokes through valves at full lift, times the volume that moves. The gas carries this
    work back into the suction bottle: a stage with idle ends draws warmer gas.

    References
    ----------
    Quasi-steady incompressible flow through an orifice; any text on fluid mechanics.
    """
    rate = np.abs(
        _shape(cylinders[0][0].ends[0], unit.stroke_m, unit.connecting_rod_m, ANGLES).travel_rate_m_rad
    )
    cubes = float((rate**3).sum() * (2 * np.pi / ANGLES))
    power: Array = np.zeros(density_kg_m3.size)
    for cylinder, count in cylinders:
        open_ends = held_open(unit, cylinder, load_step)
        for end in cylinder.ends:
            loss = corrections.valve_loss * full_lift_loss(density_kg_m3, speed_rad_s, end.suction_area_ratio)
            work = count * cylinder.area_m2(end.side) * loss * cubes * speed_rad_s / (2 * np.pi)
            power = power + np.where(open_ends[end.side][:, 0], work, 0.0)
    return power


def _mean_work(run: EndRun, frame: Frame, angles: int) -> Array:
    """Integral of pressure over volume per swept volume, (frames,)."""
    shape = _shape(run.end, frame.stroke_m, frame.rod_m, angles)
    half = angles // 2
    first, second = slice(0, half), slice(half, angles)
    into, out = (first, second) if run.end.side is Side.HEAD else (second, first)
    rate, slope = shape.travel_rate_m_rad, shape.volume_slope
    drawing, _ = suction_stroke(run.cycle, shape.expansion[into], rate[into])
    pushing, _ = discharge_stroke(run.cycle, shape.compression[out], rate[out])
    work = (drawing * slope[into]).sum(axis=1) + (pushing * slope[out]).sum(axis=1)
    return np.asarray(work * (2 * np.pi / angles))


@lru_cache(maxsize=256)
def _shape(end: End, stroke_m: float, rod_m: float, count: int) -> EndGeometry:
    return end_geometry(np.arange(count, dtype=np.float64) * (2 * np.pi / count), end, stroke_m, rod_m)
