"""Frames sorted by what their load step makes of a cylinder: pockets and late closing change its ends."""

import numpy as np
from numpy.typing import NDArray

from model.cycle import GasPath
from model.machine import Cylinder, EndState, Side, Unit
from model.rows import joined, rows_of
from model.throw import ANGLES, Frame, Throw, run_throw

Mask = NDArray[np.bool_]
Steps = NDArray[np.intp]


def makes(unit: Unit, cylinder: Cylinder) -> tuple[Cylinder, ...]:
    """The cylinder as it works in each load step of its unit."""
    return tuple(step.made_of(cylinder) for step in unit.load_steps)


def held_open(unit: Unit, cylinder: Cylinder, load_step: Steps) -> dict[Side, Mask]:
    """Which frames hold an end open, (frames, 1) by side."""
    return {
        side: np.array(
            [step.state(cylinder.number, side) is EndState.HELD_OPEN for step in unit.load_steps], bool
        )[load_step][:, None]
        for side in Side
    }


def by_make(unit: Unit, cylinder: Cylinder, load_step: Steps) -> tuple[tuple[Cylinder, Steps | None], ...]:
    """What a cylinder is in frames of several load steps.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    cylinder : Cylinder
        One of its cylinders.
    load_step : ndarray of int
        (frames,) index of the load step. [-]

    Returns
    -------
    tuple
        Each cylinder that it is made into, with its rows; None stands for every row.

    References
    ----------
    Plumbing; no formula.
    """
    made = makes(unit, cylinder)
    if len(set(made)) <= 1:
        return (((made[0] if made else cylinder), None),)
    present = tuple(int(i) for i in np.unique(load_step))
    kinds = dict.fromkeys(made[i] for i in present)
    if len(kinds) == 1:
        return ((next(iter(kinds)), None),)
    return tuple(
        (kind, np.flatnonzero(np.isin(load_step, [i for i in present if made[i] == kind]))) for kind in kinds
    )


def frame_rows(frame: Frame, rows: Steps | None) -> Frame:
    """Some frames of what a throw hangs on; every one for None."""
    if rows is None:
        return frame
    path: GasPath = rows_of(frame.path, rows)
    return Frame(
        path=path, speed_rad_s=frame.speed_rad_s[rows], stroke_m=frame.stroke_m, rod_m=frame.rod_m,
        ambient_pressure_pa=frame.ambient_pressure_pa, corrections=frame.corrections,
    )  # fmt: skip


def run_cylinder(
    unit: Unit,
    cylinder: Cylinder,
    frame: Frame,
    load_step: Steps,
    angles: int = ANGLES,
) -> Throw:
    """Evaluate a cylinder over frames of any load steps.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    cylinder : Cylinder
        One of its cylinders.
    frame : Frame
        What it hangs on apart from itself.
    load_step : ndarray of int
        (frames,) index of the load step. [-]
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    Throw
        Flow, power, loads and reversal. [SI]

    References
    ----------
    See `model.throw.run_throw`.
    """
    pieces = []
    for made, rows in by_make(unit, cylinder, load_step):
        steps = load_step if rows is None else load_step[rows]
        found = run_throw(made, frame_rows(frame, rows), held_open(unit, cylinder, steps), angles)
        if rows is None:
            return found
        pieces.append((rows, found))
    return joined(load_step.size, pieces)
