"""One cylinder over one turn, to be drawn: the same numbers the stored peaks came from."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.cycle import end_geometry, end_pressure
from model.errors import NotEvaluatedError
from model.evaluate import stage_inputs
from model.machine import Side, Stage, Unit
from model.measured import Measured
from model.rodload import NO_LOAD_SHARE, positive_intervals
from model.stage import StageState, run_stage, stage_frame
from model.steps import held_open
from model.surface import GasSurface
from model.throw import Throw, end_runs, loads_at, opening_angles
from model.verdicts import Verdict

Array = NDArray[np.float64]
Intervals = tuple[tuple[float, float], ...]

POINTS = 361


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class EndCurve:
    """One end over one turn."""

    side: Side
    held_open: bool
    volume_m3: Array  # (361,)
    pressure_pa: Array  # (361,)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Curves:
    """One cylinder over one turn. Loads are signed, tension positive; the peaks are the stored ones.

    Angles run from the head-end dead centre to the next, a degree apart but for the points nearest to a valve
    opening: those stand on it, since the loads have their corners there.
    """

    cylinder: int
    angle_rad: Array  # (361,)
    ends: tuple[EndCurve, ...]
    gas_load_n: Array  # (361,)
    inertia_load_n: Array
    pin_load_n: Array
    tension_intervals: Intervals  # angles at which the pin is pulled
    compression_intervals: Intervals
    reversal_intervals: Intervals  # those of the sign that lasts for less of the turn; none without reversal
    peaks: Throw  # (1,) each


def curves(
    unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, cylinder_number: int
) -> Curves:
    """Evaluate one frame of one cylinder over the turn.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    measured : Measured
        One frame.
    cylinder_number : int
        Which cylinder. [-]

    Returns
    -------
    Curves
        Volumes, pressures and loads over the crank angle.

    Raises
    ------
    KeyError
        The unit has no such cylinder.
    NotEvaluatedError
        The frame cannot be evaluated; its verdict says why.

    References
    ----------
    See the formulas: `model.cycle`, `model.rodload`, `model.kinematics`.
    """
    stage, cylinder = unit.cylinder(cylinder_number)
    state = _state(unit, stage, measured)
    frame, _ = stage_frame(unit, gas, corrections, state)
    open_ends = held_open(unit, cylinder, state.load_step)
    peaks = run_stage(unit, stage, gas, corrections, state).throws[cylinder_number]
    if not np.isfinite(peaks.pin_tension_n).all():
        raise NotEvaluatedError(Verdict.OUT_OF_MODEL)
    cylinder = unit.load_steps[int(state.load_step[0])].made_of(cylinder)
    runs = end_runs(cylinder, frame, open_ends)
    angles = _angles(opening_angles(cylinder, frame, open_ends)[0])
    ends = []
    for run in runs:
        geometry = end_geometry(angles, run.end, unit.stroke_m, unit.connecting_rod_m)
        ends.append(
            EndCurve(
                side=run.end.side,
                held_open=bool(run.cycle.held_open[0, 0]),
                volume_m3=geometry.volume * run.area_m2 * unit.stroke_m,
                pressure_pa=end_pressure(run.cycle, geometry)[0],
            )
        )
    gas_load, inertia = loads_at(cylinder, runs, frame, angles[None, :])
    pin = gas_load[0] + inertia[0]
    dead = NO_LOAD_SHARE * float(np.maximum(peaks.pin_tension_n, peaks.pin_compression_n)[0])
    pulled, pushed = positive_intervals(pin, angles, dead), positive_intervals(-pin, angles, dead)
    minor = min(pulled, pushed, key=_total) if pulled and pushed else ()
    return Curves(
        cylinder=cylinder_number, angle_rad=angles, ends=tuple(ends), gas_load_n=gas_load[0],
        inertia_load_n=inertia[0], pin_load_n=pin, tension_intervals=pulled, compression_intervals=pushed,
        reversal_intervals=minor, peaks=peaks,
    )  # fmt: skip


def _state(unit: Unit, stage: Stage, measured: Measured) -> StageState:
    inputs = stage_inputs(unit, stage, measured)
    if inputs.codes[0] != Verdict.GOOD:
        raise NotEvaluatedError(Verdict(int(inputs.codes[0])))
    return StageState(
        suction_pressure_pa=inputs.ps[:1], discharge_pressure_pa=inputs.pd[:1],
        suction_temperature_k=inputs.ts[:1], speed_rad_s=inputs.speed[:1],
        load_step=inputs.step[:1].astype(np.intp),
    )  # fmt: skip


def _angles(openings: Array) -> Array:
    angles = np.linspace(0.0, 2 * np.pi, POINTS)
    step, last = angles[1], 0
    for opening in np.unique(np.round(openings, 9)):
        place = max(round(float(opening) / step), last + 1)
        if place < POINTS - 1:
            angles[place], last = opening, place
    return angles


def _total(intervals: Intervals) -> float:
    return sum(end - start for start, end in intervals)
