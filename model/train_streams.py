"""The balances of a machine of several stages: what flows where, for pressures somebody tries."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.cooler import cooled_temperature, effectiveness_at, flow_drop
from model.machine import Unit

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

LEAST_LEFT: Final = 0.01
"""A recycle leaves at least this share of the gas it is taken from, or there is no train to solve."""


@dataclass(frozen=True, slots=True, kw_only=True)
class StageLine:
    """Cooler, knock-out and piping behind one stage, at design flow."""

    cooler_effectiveness: float
    drop: float  # share of the pressure in the discharge bottle lost up to the next suction bottle


@dataclass(frozen=True, slots=True, kw_only=True)
class Lines:
    """What stands between the cylinders of a unit."""

    design_flow_mol_s: float
    inlet_drop: float  # share of the suction header's pressure lost up to the first bottle
    stages: tuple[StageLine, ...]


def lines_of(unit: Unit) -> Lines:
    """What the nameplate says of coolers and piping; a cooler it is silent about cools to its water."""
    none = StageLine(cooler_effectiveness=1.0, drop=0.0)
    return Lines(design_flow_mol_s=1.0, inlet_drop=0.0, stages=(none,) * len(unit.stages))


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Boundary:
    """What holds a machine from outside, (rows,) or (rows, stages); every number usable."""

    suction_pressure_pa: Array
    suction_temperature_k: Array
    discharge_pressure_pa: Array
    speed_rad_s: Array
    load_step: NDArray[np.intp]
    water: Array  # moles of water per mole of dry gas at the suction header
    first_recycle_mol_s: Array  # dry, from behind the first cooler to the first suction
    first_recycle_share: Array  # the same as a share of what the first stage delivers; both add up
    final_recycle_mol_s: Array
    final_recycle_share: Array
    cooling_k: Array  # (rows, stages)
    packing_mol_s: Array  # (rows, stages) dry gas lost to the vents
    given_suction_k: Array  # (rows, stages) suction temperature where it is measured, else NaN
    passing: Mask  # (rows, stages) no end of the stage is loaded


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Providers:
    """Formulas of stages, water and mixing that the balances hang on; the full ones, or sketches of them."""

    stage: Callable[[int, Array, Array, Array, Array], tuple[Array, Array]]
    """(stage, suction pressure, discharge pressure, suction temperature, flow through) -> capacity and
    discharge temperature; for a stage that only passes gas, the pressure it loses over that at suction."""
    warmed: Callable[[int, Array, Array, Array], Array]
    """(stage, suction pressure, temperature of the gas that arrives, flow through) -> temperature in the
    suction bottle, into which ends held open push back what they have warmed."""
    held: Callable[[int, Array, Array], Array]
    """(stage, temperature, pressure) behind its cooler -> water per dry gas, saturated."""
    mixed: Callable[[Array, Array, Array, Array], Array]
    """(flows, temperatures, pressures), each (rows, 3), and the pressure they meet at -> temperature."""


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Flows:
    """Flows of dry gas in moles, (rows,) or (rows, stages)."""

    suction: Array  # at the suction flanges
    discharge: Array
    first_recycle: Array
    final_recycle: Array
    inlet: Array  # from the suction header
    export: Array  # to the discharge header
    first_left: Array  # share left of the gas a recycle is taken from, before any bound
    final_left: Array


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Streams:
    """A tried state of the machine, (rows, stages)."""

    flows: Flows
    suction_pressure_pa: Array
    discharge_pressure_pa: Array
    suction_temperature_k: Array
    discharge_temperature_k: Array
    cooled_temperature_k: Array
    water: Array  # per dry gas, drawn in
    water_behind: Array  # per dry gas, behind the cooler
    capacity_mol_s: Array  # moist; of a stage that only passes gas, the share of pressure it loses
    residual: Array  # (rows, stages + 1): one a stage, and the temperature at the first suction


def unknowns(flow_mol_s: Array, pressures_pa: Array, temperature_k: Array) -> Array:
    """Unknowns (rows, stages + 1): logarithms of flow, of each interstage pressure, of first temperature."""
    columns = (flow_mol_s[:, None], pressures_pa, temperature_k[:, None])
    return np.log(np.concatenate(columns, axis=1))


def streams(lines: Lines, boundary: Boundary, x: Array, use: Providers) -> Streams:
    """Balances of tried states.

    Parameters
    ----------
    lines : Lines
        What stands between the cylinders.
    boundary : Boundary
        What holds the machine from outside.
    x : ndarray
        (rows, stages + 1) tried `unknowns`. [-]
    use : Providers
        Formulas of stages, water and mixing.

    Returns
    -------
    Streams
        Every stream, and what is left of the balances. [SI]

    Notes
    -----
    Residuals are natural logarithms: of the dry flow a stage draws over the dry flow there is for it, and of
    the temperature at the first suction over that of the gas that meets there. Dry gas is neither made nor
    lost in coolers; half of a packing's loss leaves before the gas is delivered, half adds to what is drawn.

    References
    ----------
    Conservation of moles and of enthalpy.
    """
    count = len(lines.stages)
    first, suction_k = np.exp(x[:, 0]), np.exp(x[:, count])
    flows = _flows(boundary, first, count)
    inlet_loss = flow_drop(lines.inlet_drop, flows.inlet / lines.design_flow_mol_s)
    pressures = np.empty((x.shape[0], count))
    pressures[:, 0] = boundary.suction_pressure_pa * (1 - inlet_loss)
    pressures[:, 1:] = np.exp(x[:, 1:count])
    load = flows.discharge / lines.design_flow_mol_s
    behind = np.concatenate([pressures[:, 1:], boundary.discharge_pressure_pa[:, None]], axis=1)
    raised = behind / (1 - flow_drop(np.array([line.drop for line in lines.stages]), load))
    best = np.array([line.cooler_effectiveness for line in lines.stages])
    effectiveness = effectiveness_at(best, load)
    ts, td, cooled, capacity = (np.empty_like(pressures) for _ in range(4))
    now = suction_k
    for k in range(count):
        given = boundary.given_suction_k[:, k]
        through = flows.suction[:, k]
        ts[:, k] = np.where(np.isnan(given), use.warmed(k, pressures[:, k], now, through), given)
        capacity[:, k], td[:, k] = use.stage(k, pressures[:, k], raised[:, k], ts[:, k], through)
        cooled[:, k] = now = cooled_temperature(td[:, k], boundary.cooling_k[:, k], effectiveness[:, k])
    held = np.stack([use.held(k, cooled[:, k], behind[:, k]) for k in range(count)], axis=1)
    drawn, left = _water(boundary.water, held, flows)
    met = use.mixed(
        np.stack([
            flows.inlet * (1 + boundary.water),
            flows.first_recycle * (1 + left[:, 0]),
            flows.final_recycle * (1 + left[:, -1]),
        ], axis=1),
        np.stack([boundary.suction_temperature_k, cooled[:, 0], cooled[:, -1]], axis=1),
        np.stack([boundary.suction_pressure_pa, behind[:, 0], behind[:, -1]], axis=1),
        pressures[:, 0],
    )  # fmt: skip
    residual = np.empty_like(x)
    wanted = (flows.suction - boundary.packing_mol_s / 2) * (1 + drawn)
    with np.errstate(divide="ignore", invalid="ignore"):
        lost = np.log(raised / pressures) - np.log1p(-np.minimum(capacity, 0.5))
        residual[:, :count] = np.where(boundary.passing, lost, np.log(capacity / wanted))
        residual[:, count] = np.log(suction_k / met)
    return Streams(
        flows=flows, suction_pressure_pa=pressures, discharge_pressure_pa=raised, suction_temperature_k=ts,
        discharge_temperature_k=td, cooled_temperature_k=cooled, water=drawn, water_behind=left,
        capacity_mol_s=capacity, residual=residual,
    )  # fmt: skip


def _flows(boundary: Boundary, first: Array, count: int) -> Flows:
    """Dry flows for a tried flow at the first suction, each recycle bounded by what there is."""
    suction, discharge = np.empty((first.size, count)), np.empty((first.size, count))
    first_recycle = first_left = first
    for k in range(count):
        suction[:, k] = first if k == 0 else discharge[:, k - 1]
        if k == 1:
            suction[:, k] -= first_recycle
        loss = np.minimum(boundary.packing_mol_s[:, k], (1 - LEAST_LEFT) * suction[:, k])
        discharge[:, k] = suction[:, k] - loss
        if k == 0:
            first_recycle, first_left = _withdrawn(
                discharge[:, 0], boundary.first_recycle_share, boundary.first_recycle_mol_s
            )
    last = discharge[:, -1] - first_recycle if count == 1 else discharge[:, -1]
    final, final_left = _withdrawn(last, boundary.final_recycle_share, boundary.final_recycle_mol_s)
    return Flows(
        suction=suction, discharge=discharge, first_recycle=first_recycle, final_recycle=final,
        inlet=first - first_recycle - final, export=last - final, first_left=first_left,
        final_left=final_left,
    )  # fmt: skip


def _withdrawn(available: Array, share: Array, flow: Array) -> tuple[Array, Array]:
    """A recycle, bounded by what there is, and the share that would be left without the bound."""
    wanted = share * available + flow
    return np.minimum(wanted, (1 - LEAST_LEFT) * available), 1 - wanted / available


def _water(header: Array, held: Array, flows: Flows) -> tuple[Array, Array]:
    """Water per dry gas (rows, stages) drawn in, and behind each cooler.

    Recycled gas has passed one knock-out or all of them. What is drawn in is the mean of what meets; where a
    knock-out finds nothing to take, the recycle brings back what was drawn in itself.
    """
    first, driest = held[:, 0], held.min(axis=1)
    inlet, back, final = flows.inlet, flows.first_recycle, flows.final_recycle
    loose = (inlet * header + final * driest) / (inlet + final)  # the first knock-out takes nothing
    taken = (inlet * header + back * first + final * driest) / (inlet + back + final)
    drawn = np.empty_like(held)
    drawn[:, 0] = np.where(header <= driest, header, np.where(loose <= first, loose, taken))
    left = np.minimum(drawn[:, :1], np.minimum.accumulate(held, axis=1))
    drawn[:, 1:] = left[:, :-1]
    return drawn, left
