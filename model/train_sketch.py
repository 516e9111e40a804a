"""A quick sketch of a machine around a state at which its stages were evaluated in full, and its solution.

A sketch needs neither gas tables nor crank angles: re-expansion with the exponent found, temperature rise as
a power of the pressure ratio, compressibility in proportion to pressure. It is made to agree with the full
formulas at the state it was drawn at, so its solution is that of the full ones but for how much the drawing
changes on the way, which is of the order of a hundredth of the way.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.cycle import late_closing
from model.machine import EndState, Unit
from model.rows import rows_of
from model.surface import GAS_CONSTANT
from model.train_streams import Boundary, Lines, Providers, Streams, streams
from model.wet import MOST_HELD, per_dry, water_vapour_pressure

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

LONGEST_STEP: Final = 0.2
"""Longest step of the logarithm of a pressure or flow: a ratio of 1.22 at a time."""
_LONGEST_TEMPERATURE_STEP: Final = 0.05
_CLOSE: Final = 3e-5
"""A step from a residual of this leaves its square, which is less than a sketch is worth."""
_MOST_PASSES: Final = 60
_DIFFERENCE: Final = 1e-6
_LEAST_EFFICIENCY: Final = 0.02
"""Below this an efficiency goes on falling towards zero, never through it, so that a way back is seen."""
_LEAST_MOVE: Final = 3e-3  # of ln(r): two states closer than this tell no slope
_Z_POWER: Final = 3.0  # how 1 - Z falls with temperature


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class StageEnds:
    """The compression ends of one stage."""

    volume_m3: Array  # (ends,) swept
    clearance: Array  # (load steps, ends)
    reach: Array  # (load steps, ends) volume in which compression begins / swept volume
    loaded: Array  # (load steps, ends) 1 or 0


def stage_ends(unit: Unit) -> tuple[StageEnds, ...]:
    """Ends of each stage of a unit."""
    found = []
    for stage in unit.stages:
        pairs = [(c, e) for c in stage.cylinders for e in c.ends]
        loaded = [
            [step.state(c.number, e.side) is EndState.LOADED for c, e in pairs] for step in unit.load_steps
        ]
        made = [[e for c in stage.cylinders for e in step.made_of(c).ends] for step in unit.load_steps]
        clearance = np.array([[e.clearance for e in ends] for ends in made])
        back = [[late_closing(e, unit.stroke_m, unit.connecting_rod_m)[1] for e in ends] for ends in made]
        found.append(
            StageEnds(
                volume_m3=np.array([c.area_m2(e.side) * unit.stroke_m for c, e in pairs]),
                clearance=clearance,
                reach=1 + clearance - np.array(back),
                loaded=np.array(loaded, np.float64),
            )
        )
    return tuple(found)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Sketch:
    """Numbers of a sketch, (rows, stages) but for the last."""

    pressure_pa: Array  # at suction, where it was drawn
    temperature_k: Array
    log_ratio: Array
    exponent: Array  # of pressure against volume
    departure: Array  # Z - 1
    density: Array  # in the cylinder after suction over the line, without preheat
    heat: Array  # ln(Td/Ts) / ln(r); of a stage that only passes gas, ln(Td/Ts)
    capacity: Array  # full formulas over the sketch
    lost: Array  # share of pressure that a stage loses which only passes gas
    held: Array  # water held over that held by empty space
    capacity_slope: Array  # of its logarithm over ln(r), from two full evaluations
    heat_slope: Array
    warming: Array  # temperature in the suction bottle over that of the gas that arrives
    mixing_k: Array  # (rows,) temperature at the first suction less the mean of what meets there


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Took:
    """What full evaluations found beside the balances."""

    power_w: Array  # (rows, stages) indicated
    passes: Mask  # (rows, stages) enough gas to judge its temperature by
    enhancement: Array  # (rows, stages) of the water held behind each cooler
    mixing_k: Array  # (rows,) temperature at the first suction less the mean of what meets there
    warming: Array  # (rows, stages) temperature in the suction bottle over that of the gas that arrives
    idle_w: Array  # (rows, stages) power of the ends held open, which goes into the suction bottle


def providers(
    corrections: Corrections, ends: Sequence[StageEnds], boundary: Boundary, sketch: Sketch
) -> Providers:
    """The formulas of a sketch, for the rows of a boundary."""
    turns = boundary.speed_rad_s / (2 * np.pi)
    loaded = [part.loaded[boundary.load_step] * part.volume_m3 for part in ends]
    clearance = [part.clearance[boundary.load_step] for part in ends]
    reach = [part.reach[boundary.load_step] for part in ends]

    def stage(k: int, ps: Array, pd: Array, ts: Array, _through: Array) -> tuple[Array, Array]:
        log_r = np.log(pd / ps)
        off = log_r - sketch.log_ratio[:, k]
        heat = sketch.heat[:, k] + sketch.heat_slope[:, k] * off
        rise = np.expm1(heat * log_r)
        density = sketch.density[:, k] / (1 + corrections.preheat * rise)
        swell = np.exp(log_r / (corrections.expansion_exponent * sketch.exponent[:, k]))
        raw = density[:, None] * (reach[k] - clearance[k] * swell[:, None]) - corrections.volumetric_deficit
        low = _LEAST_EFFICIENCY
        efficiency = np.where(raw > low, raw, low * np.exp(np.minimum(raw / low - 1, 0.0)))
        drawn = (loaded[k] * efficiency).sum(axis=1) * turns
        z = (
            1
            + sketch.departure[:, k]
            * (ps / sketch.pressure_pa[:, k])
            * (sketch.temperature_k[:, k] / ts) ** _Z_POWER
        )
        capacity = sketch.capacity[:, k] * np.exp(sketch.capacity_slope[:, k] * off)
        capacity = capacity * drawn * ps / (z * GAS_CONSTANT * ts)
        passing = boundary.passing[:, k]
        td = ts * np.exp(np.where(passing, sketch.heat[:, k], heat * log_r))
        return np.where(passing, sketch.lost[:, k], capacity), td

    def held(k: int, temperature: Array, pressure: Array) -> Array:
        return per_dry(
            np.minimum(sketch.held[:, k] * water_vapour_pressure(temperature) / pressure, MOST_HELD)
        )

    def mixed(flows: Array, temperatures: Array, _pressures: Array, _meeting: Array) -> Array:
        mean = (flows * temperatures).sum(axis=1) / flows.sum(axis=1)
        return np.asarray(mean + sketch.mixing_k)

    def warmed(k: int, _ps: Array, arriving: Array, _through: Array) -> Array:
        return np.asarray(arriving * sketch.warming[:, k])

    return Providers(stage=stage, warmed=warmed, held=held, mixed=mixed)


def solve_sketch(
    ends: Sequence[StageEnds],
    corrections: Corrections,
    lines: Lines,
    boundary: Boundary,
    begin: tuple[Array, Sketch],
) -> Array:
    """Solve the balances of a sketch.

    Parameters
    ----------
    ends : sequence of StageEnds
        The compression ends of each stage.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    lines : Lines
        What stands between the cylinders.
    boundary : Boundary
        What holds the machine from outside.
    begin : tuple
        Unknowns (rows, stages + 1) to begin at, and the sketch.

    Returns
    -------
    ndarray
        (rows, stages + 1) unknowns. [-]

    Notes
    -----
    Newton; differences of all unknowns are further rows of one call. Steps are cut to 0.2, each row on its
    own, and a row that is done stays as it is, so that its neighbours do not change its answer.

    References
    ----------
    Newton's method; any text on numerical analysis.
    """
    start, sketch = begin
    x, count = start.copy(), start.shape[1]
    open_rows = np.arange(x.shape[0])
    for _ in range(_MOST_PASSES):
        rows = np.tile(open_rows, count + 1)
        tried = np.tile(x[open_rows], (count + 1, 1, 1))
        for j in range(count):
            tried[j + 1, :, j] += _DIFFERENCE
        there = rows_of(boundary, rows)
        use = providers(corrections, ends, there, rows_of(sketch, rows))
        found = streams(lines, there, tried.reshape(-1, count), use).residual
        found = found.reshape(count + 1, open_rows.size, count)
        base = found[0]
        x[open_rows] += _newton_step(np.moveaxis((found[1:] - base) / _DIFFERENCE, 0, 2), base)
        size = np.abs(base).max(axis=1)
        open_rows = open_rows[(size > _CLOSE) & np.isfinite(size)]
        if open_rows.size == 0:
            break
    return x


def _newton_step(slope: Array, residual: Array) -> Array:
    """Newton steps (rows, unknowns), cut; none where the slope says nothing."""
    usable = np.isfinite(slope).all(axis=(1, 2)) & np.isfinite(residual).all(axis=1)
    step = np.zeros_like(residual)
    if usable.any():
        step[usable] = _solved(slope[usable], -residual[usable])
    longest = np.full(residual.shape[1], LONGEST_STEP)
    longest[-1] = _LONGEST_TEMPERATURE_STEP
    cut = np.minimum(1.0, longest / np.maximum(np.abs(step), 1e-300)).min(axis=1)
    return np.asarray(step * cut[:, None])


def _solved(matrix: Array, right: Array) -> Array:
    """Elimination with pivoting over many small systems at once, in plain loops over their size."""
    a, b = matrix.copy(), right.copy()
    size, rows = b.shape[1], np.arange(b.shape[0])
    for i in range(size):
        pivot = i + np.argmax(np.abs(a[:, i:, i]), axis=1)
        a[rows, i], a[rows, pivot] = a[rows, pivot], a[rows, i]
        b[rows, i], b[rows, pivot] = b[rows, pivot], b[rows, i]
        lead = np.where(a[:, i, i] == 0, np.inf, a[:, i, i])
        factor = a[:, i + 1 :, i] / lead[:, None]
        a[:, i + 1 :] -= factor[:, :, None] * a[:, None, i]
        b[:, i + 1 :] -= factor * b[:, i, None]
    for i in range(size - 1, -1, -1):
        b[:, i] -= (a[:, i, i + 1 :] * b[:, i + 1 :]).sum(axis=1)
        lead = np.where(a[:, i, i] == 0, np.inf, a[:, i, i])
        b[:, i] /= lead
    return b


def redrawn(
    ends: Sequence[StageEnds],
    corrections: Corrections,
    boundary: Boundary,
    sketch: Sketch,
    full: Streams,
    *,
    took: Took,
    again: Mask,
) -> Sketch:
    """The sketch made to agree with the full formulas at a state that was evaluated in full.

    ``again`` marks rows that were made to agree before: two states give the slopes of what is corrected.
    """
    log_r = np.log(full.discharge_pressure_pa / full.suction_pressure_pa)
    passing, still = boundary.passing, np.zeros_like(log_r)
    with np.errstate(divide="ignore", invalid="ignore"):
        warm = np.log(full.discharge_temperature_k / full.suction_temperature_k)
        heat = np.where(passing, warm, warm / log_r)
    off = log_r - sketch.log_ratio
    moved = (np.abs(off) > _LEAST_MOVE) & ~passing & again[:, None]
    apart = np.where(moved, off, 1.0)
    heat_slope = np.where(moved, (heat - sketch.heat) / apart, sketch.heat_slope)
    plain = replace(
        sketch, log_ratio=log_r, heat=heat, heat_slope=np.clip(heat_slope, -0.5, 0.5), capacity=still + 1,
        capacity_slope=still, lost=np.where(passing, full.capacity_mol_s, 0.0), held=took.enhancement,
        mixing_k=took.mixing_k, warming=took.warming,
    )  # fmt: skip
    use = providers(corrections, ends, boundary, plain)
    around = (full.suction_pressure_pa, full.discharge_pressure_pa, full.suction_temperature_k, still)
    drawn = [use.stage(k, *(part[:, k] for part in around))[0] for k in range(log_r.shape[1])]
    capacity = np.clip(full.capacity_mol_s / np.where(passing, 1.0, np.stack(drawn, axis=1)), 0.2, 5.0)
    slope = np.where(moved, np.log(capacity / sketch.capacity) / apart, sketch.capacity_slope)
    return replace(plain, capacity=capacity, capacity_slope=np.clip(slope, -1.0, 1.0))
