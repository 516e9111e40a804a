"""The whole machine from what holds it outside: interstage pressures, temperatures, flows and power.

Beside the local view, in which each stage is judged at its own measured pressures, this is the global one:
what all of them should be for the headers, the cooling water, the load step and the recycles there are.
"""

from collections.abc import Callable
from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.corrections import Corrections
from model.evaluation import Codes
from model.machine import Unit
from model.rows import joined, put_rows, rows_of
from model.stage import LOWEST_RATIO, LOWEST_SPEED_SHARE
from model.surface import GasSurface
from model.throw import ANGLES
from model.train_full import FullStages, rough_sketch, start_of
from model.train_sketch import Sketch, Took, redrawn, solve_sketch, stage_ends
from model.train_state import BY_STAGE, RESIDUAL, TrainBoundary, TrainSolution
from model.train_streams import LEAST_LEFT, Boundary, Lines, Streams, lines_of, streams, unknowns
from model.verdicts import Verdict
from model.wet import per_dry, water_held

__all__ = ["Lines", "TrainBoundary", "TrainSolution", "solve_train"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]
Steps = NDArray[np.intp]

CHUNK: Final = 100
"""Frames solved at once; more fall out of the processor's cache."""
MOST_ITERATIONS: Final = 14


def solve_train(
    unit: Unit,
    gas: GasSurface,
    corrections: Corrections | Callable[[int], Corrections],
    boundary: TrainBoundary,
    *,
    lines: Lines | None = None,
    start: TrainSolution | None = None,
    tolerance: float = RESIDUAL,
    angles: int = ANGLES,
) -> TrainSolution:
    """Solve a machine for what holds it outside.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas, dry.
    corrections : Corrections or callable
        How its cylinders depart from the ideal cycle; a callable gives those of a load step's index, as
        `model.calibration.Calibration.corrections_of` does.
    boundary : TrainBoundary
        Headers, cooling, load step and recycles. [SI]
    lines : Lines or None
        What stands between the cylinders; None takes it from the nameplate.
    start : TrainSolution or None
        A solution of as many frames to begin at, as of the second before; None begins at the frame alone.
    tolerance : float
        Largest logarithm that may be left of a balance. [-]
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    TrainSolution
        Pressures, temperatures, flows, water and power of every stage. [SI]

    Notes
    -----
    Unknown are the flow, the pressure before each further stage and the temperature at the first suction;
    known are, for each stage, that it draws the dry gas there is for it, and at the first suction the
    enthalpy of what meets there. A sketch of the stages is solved and drawn anew where its solution is
    evaluated in full, until the full balances close. The answer hangs on its own frame alone: frames in
    other company differ by less than the tolerance.

    Several services on one frame are several trains: solve each with a nameplate of its own stages.

    Ends that are held open warm the gas in the suction bottle: a tag there has their work in it, and the
    discharge temperature here has it once.

    Water is carried beside the gas: its moles count where gas is drawn, its small effect on density and
    heat is left out (below 0.1 % at one mole per hundred).

    References
    ----------
    Conservation of moles and enthalpy; see `model.train_streams`, `model.stage`, `model.cooler`,
    `model.wet`.
    """
    whole, codes = _rows(unit, gas, boundary)
    usable = np.flatnonzero(codes == Verdict.GOOD)
    pieces = []
    for found, members in _by_corrections(corrections, whole.load_step, usable):
        case = _Case(
            unit=unit, gas=gas, corrections=found, lines=lines or lines_of(unit), tolerance=tolerance,
            angles=angles,
        )  # fmt: skip
        for at in range(0, max(members.size, 1), CHUNK):
            rows = members[at : at + CHUNK]
            begin = None if start is None else (start.unknowns[rows], rows_of(start.sketch, rows))
            pieces.append((rows, _solve(case, rows_of(whole, rows), begin)))
    return _solution(whole, codes, joined(codes.size, pieces), tolerance)


def _by_corrections(
    corrections: Corrections | Callable[[int], Corrections], load_step: Steps, usable: Steps
) -> list[tuple[Corrections, Steps]]:
    """Rows of each set of corrections; one set at least."""
    if isinstance(corrections, Corrections):
        return [(corrections, usable)]
    steps = load_step[usable]
    groups: dict[Corrections, list[Steps]] = {}
    for step in np.unique(steps) if usable.size else [0]:
        groups.setdefault(corrections(int(step)), []).append(usable[steps == step])
    return [(found, np.concatenate(members)) for found, members in groups.items()]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class _Case:
    """A machine, and formulas for it."""

    unit: Unit
    gas: GasSurface
    corrections: Corrections
    lines: Lines
    tolerance: float
    angles: int


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class _Solved:
    """Rows as they get solved; written to."""

    x: Array
    sketch: Sketch
    found: Streams
    took: Took
    iterations: NDArray[np.intp]


def _solve(case: _Case, boundary: Boundary, begin: tuple[Array, Sketch] | None) -> _Solved:
    x, sketch, again = _begun(case, boundary, begin)
    ends, corrections = stage_ends(case.unit), case.corrections
    good, every, open_rows = x, [], np.arange(x.shape[0])
    x = solve_sketch(ends, corrections, case.lines, boundary, (x, sketch))
    iterations = np.zeros(x.shape[0], np.intp)
    for _ in range(MOST_ITERATIONS):
        here = rows_of(boundary, open_rows)
        full = FullStages(case.unit, case.gas, case.corrections, here, angles=case.angles)
        found = streams(case.lines, here, x[open_rows], full.providers())
        every.append((open_rows, (found, full.took)))
        iterations[open_rows] += 1
        worst = np.abs(found.residual).max(axis=1)
        going = np.asarray(~(worst <= case.tolerance))
        lost, on = going & ~np.isfinite(worst), going & np.isfinite(worst)
        x[open_rows[lost]] = (x[open_rows[lost]] + good[open_rows[lost]]) / 2
        rows = open_rows[on]
        if rows.size:
            good[rows] = x[rows]
            took, near = rows_of(full.took, on), rows_of(here, on)
            drawn = redrawn(
                ends, corrections, near, rows_of(sketch, rows), rows_of(found, on), took=took,
                again=again[rows],
            )  # fmt: skip
            put_rows(sketch, rows, drawn)
            x[rows] = solve_sketch(ends, corrections, case.lines, near, (x[rows], drawn))
            again[rows] = True
        open_rows = np.asarray(open_rows[going])
        if open_rows.size == 0:
            break
    return _Solved(
        x=x, sketch=sketch, iterations=iterations,
        found=joined(x.shape[0], [(rows, found) for rows, (found, _) in every]),
        took=joined(x.shape[0], [(rows, took) for rows, (_, took) in every]),
    )  # fmt: skip


def _begun(case: _Case, boundary: Boundary, begin: tuple[Array, Sketch] | None) -> tuple[Array, Sketch, Mask]:
    """Unknowns and sketch to begin with, and which rows were evaluated in full before."""
    warm: Mask = np.zeros(boundary.load_step.size, bool)
    if begin is not None:
        warm = np.asarray(np.isfinite(begin[0]).all(axis=1))
        if warm.all():
            return begin[0].copy(), rows_of(begin[1], np.arange(warm.size)), warm
    flow, pressures = start_of(stage_ends(case.unit), boundary)
    sketch = rough_sketch(case.gas, case.corrections, boundary, pressures)
    x = unknowns(flow, pressures[:, 1:-1], boundary.suction_temperature_k)
    if begin is not None:
        x[warm] = begin[0][warm]
        put_rows(sketch, warm, rows_of(begin[1], warm))
    return x, sketch, warm


def _rows(unit: Unit, gas: GasSurface, given: TrainBoundary) -> tuple[Boundary, Codes]:
    """Every frame with every number, and which may be solved, or why not."""
    frames, stages = given.frames, len(unit.stages)
    one = {
        f.name: np.broadcast_to(np.asarray(getattr(given, f.name), np.float64), (frames,))
        for f in fields(given)
        if f.name not in BY_STAGE
    }
    many = {name: _by_stage(getattr(given, name), frames, stages) for name in BY_STAGE}
    step = one.pop("load_step")
    codes = np.full(frames, Verdict.GOOD, np.uint8)
    codes[~(one["speed_rad_s"] >= LOWEST_SPEED_SHARE * unit.rated_speed_rad_s)] = Verdict.OUT_OF_MODEL
    ratio = one["discharge_pressure_pa"] / np.maximum(one["suction_pressure_pa"], 1.0)
    codes[~(ratio >= LOWEST_RATIO)] = Verdict.OUT_OF_MODEL
    numbers = [*one.values(), step, many["cooling_k"].sum(axis=1), many["packing_mol_s"].sum(axis=1)]
    codes[~np.isfinite(np.stack(numbers)).all(axis=0)] = Verdict.INPUT_MISSING
    known = np.isin(step, np.arange(len(unit.load_steps)))
    codes[np.isfinite(step) & ~known] = Verdict.UNKNOWN_WORD
    index = np.where(known, step, 0).astype(np.intp)
    passing = np.stack([part.loaded.sum(axis=1)[index] == 0 for part in stage_ends(unit)], axis=1)
    codes[passing.all(axis=1) & (codes == Verdict.GOOD)] = Verdict.NO_THROUGH_FLOW
    saturation = one.pop("water_saturation")
    water = np.zeros(frames)
    if saturation.any():
        held = water_held(gas, unit.composition, one["suction_temperature_k"], one["suction_pressure_pa"])
        water = per_dry(np.where(saturation > 0, saturation * held, 0.0))
    codes[~np.isfinite(water) & (codes == Verdict.GOOD)] = Verdict.OUT_OF_MODEL
    boundary = Boundary(
        **one, load_step=index, water=water, cooling_k=many["cooling_k"],
        packing_mol_s=many["packing_mol_s"], given_suction_k=many["stage_suction_k"], passing=passing,
    )  # fmt: skip
    return boundary, codes


def _by_stage(values: ArrayLike, frames: int, stages: int) -> Array:
    """(frames, stages) from a number, one a frame, or one a frame and stage."""
    array = np.asarray(values, np.float64)
    if array.ndim == 1 and array.size == frames:
        array = array[:, None]
    return np.broadcast_to(array, (frames, stages)).copy()


def _solution(boundary: Boundary, codes: Codes, solved: _Solved, tolerance: float) -> TrainSolution:
    """The solution of all frames, without the numbers of those that have none."""
    found, flows = solved.found, solved.found.flows
    worst = np.abs(found.residual).max(axis=1)
    usable = codes == Verdict.GOOD
    left = np.minimum(flows.first_left, flows.final_left)
    outside = ~(worst <= tolerance) | (left < LEAST_LEFT)
    low = (found.discharge_pressure_pa < LOWEST_RATIO * found.suction_pressure_pa) & ~boundary.passing
    codes = codes.copy()
    codes[usable & ~solved.took.passes.all(axis=1)] = Verdict.NO_THROUGH_FLOW
    codes[usable & (outside | low.any(axis=1))] = Verdict.OUT_OF_MODEL
    bad = codes != Verdict.GOOD

    def told(values: Array) -> Array:
        return np.where(bad if values.ndim == 1 else bad[:, None], np.nan, values)

    drawn, behind = found.water, found.water_behind
    return TrainSolution(
        codes=codes, residual=worst, iterations=solved.iterations,
        suction_pressure_pa=told(found.suction_pressure_pa),
        discharge_pressure_pa=told(found.discharge_pressure_pa),
        suction_temperature_k=told(found.suction_temperature_k),
        discharge_temperature_k=told(found.discharge_temperature_k),
        cooled_temperature_k=told(found.cooled_temperature_k),
        suction_flow_mol_s=told(flows.suction * (1 + drawn)), dry_flow_mol_s=told(flows.suction),
        water_fraction=told(drawn / (1 + drawn)), condensate_mol_s=told(flows.discharge * (drawn - behind)),
        power_w=told(solved.took.power_w), inlet_dry_mol_s=told(flows.inlet),
        export_dry_mol_s=told(flows.export), inlet_flow_mol_s=told(flows.inlet * (1 + boundary.water)),
        export_flow_mol_s=told(flows.export * (1 + behind[:, -1])),
        first_recycle_mol_s=told(flows.first_recycle), final_recycle_mol_s=told(flows.final_recycle),
        first_left=flows.first_left, final_left=flows.final_left, unknowns=told(solved.x),
        sketch=solved.sketch,
    )  # fmt: skip
