"""The full formulas behind the balances of a machine, and where its solution begins."""

from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.machine import Stage, Unit
from model.stage import THROUGH_FLOW_SHARE, StageState, discharge_temperature, gas_path
from model.stage_work import alike, idle_power, stage_work
from model.surface import GAS_CONSTANT, GasSurface
from model.train_sketch import Sketch, StageEnds, Took, stage_ends
from model.train_streams import Boundary, Providers
from model.valves import full_lift_loss, plate_loss
from model.wet import MOST_HELD, enhancement_factor, per_dry, water_vapour_pressure

Array = NDArray[np.float64]

_IDLE_RATIO: Final = 1.5  # at which a stage without loaded ends is evaluated: its ends see suction alone
_APPROACH_K: Final = 5.0  # by which a cooler misses its water, to begin with
_EFFICIENCY: Final = 0.85  # volumetric, to begin with
_LOSS: Final = 1.08  # temperature rise over the isentropic one, to begin with
_LEAST_CAPACITY: Final = 1e-6  # of the swept flow, so that its logarithm shows a way back


class FullStages:
    """Evaluates stages with everything the model knows, and remembers what they took."""

    def __init__(
        self, unit: Unit, gas: GasSurface, corrections: Corrections, boundary: Boundary, *, angles: int
    ) -> None:
        self._unit, self._gas, self._corrections, self._boundary = unit, gas, corrections, boundary
        self._angles, self._alike = angles, tuple(alike(unit, stage) for stage in unit.stages)
        shape = boundary.passing.shape
        self.took = Took(
            power_w=np.full(shape, np.nan), passes=np.ones(shape, bool), enhancement=np.ones(shape),
            mixing_k=np.full(shape[0], np.nan), warming=np.ones(shape), idle_w=np.zeros(shape),
        )  # fmt: skip
        self._idle = boundary.passing.any() or any(
            (part.loaded[boundary.load_step] == 0).any() for part in stage_ends(unit)
        )

    def providers(self) -> Providers:
        return Providers(stage=self._stage, warmed=self._warmed, held=self._held, mixed=self._mixed)

    def _stage(self, k: int, ps: Array, pd: Array, ts: Array, through: Array) -> tuple[Array, Array]:
        unit, gas, around = self._unit, self._gas, self._boundary
        stage, passing = unit.stages[k], around.passing[:, k]
        state = StageState(
            suction_pressure_pa=ps, discharge_pressure_pa=np.where(passing, _IDLE_RATIO * ps, pd),
            suction_temperature_k=ts, speed_rad_s=around.speed_rad_s, load_step=around.load_step,
        )  # fmt: skip
        work = stage_work(unit, self._alike[k], gas, self._corrections, state, angles=self._angles)
        self.took.power_w[:, k] = work.power_w
        mass = gas.molar_mass_kg_mol
        self.took.passes[:, k] = passing | (work.flow_kg_s >= THROUGH_FLOW_SHARE * work.full_flow_kg_s)
        capacity = np.maximum(work.flow_kg_s, _LEAST_CAPACITY * work.full_flow_kg_s) / mass
        flow = np.where(passing, through, capacity) * mass
        hot = discharge_temperature(
            gas,
            work.enthalpy_j_kg,
            work.power_w - self.took.idle_w[:, k],
            flow,
            pd,
            heat_loss=self._corrections.heat_loss,
        )
        if not passing.any():
            return capacity, hot
        lost = passing_loss(stage, self._corrections, gas.density(ts, ps), through * mass, ps)
        return np.where(passing, lost, capacity), hot

    def _warmed(self, k: int, ps: Array, arriving: Array, through: Array) -> Array:
        if not self._idle:
            return arriving
        gas, around = self._gas, self._boundary
        density, enthalpy, _ = gas.properties(arriving, ps)
        idle = idle_power(
            self._unit, self._alike[k], self._corrections, density, speed_rad_s=around.speed_rad_s,
            load_step=around.load_step,
        )  # fmt: skip
        rise = idle / (through * gas.molar_mass_kg_mol)
        bottle = np.where(idle > 0, gas.temperature_from_enthalpy(enthalpy + rise, ps), arriving)
        self.took.idle_w[:, k], self.took.warming[:, k] = idle, bottle / arriving
        return bottle

    def _held(self, k: int, temperature: Array, pressure: Array) -> Array:
        if not self._boundary.water.any():
            return np.ones(temperature.shape)  # any: a dry gas has none to lose
        gas, composition = self._gas, self._unit.composition
        factor = enhancement_factor(gas, composition, temperature, pressure)
        self.took.enhancement[:, k] = factor
        return per_dry(np.minimum(factor * water_vapour_pressure(temperature) / pressure, MOST_HELD))

    def _mixed(self, flows: Array, temperatures: Array, pressures: Array, meeting: Array) -> Array:
        whole = flows.sum(axis=1)
        heat = (flows * self._gas.enthalpy(temperatures, pressures)).sum(axis=1) / whole
        met = self._gas.temperature_from_enthalpy(heat, meeting)
        self.took.mixing_k[:] = met - (flows * temperatures).sum(axis=1) / whole
        return met


def passing_loss(
    stage: Stage, corrections: Corrections, density_kg_m3: Array, mass_flow_kg_s: Array, ps: Array
) -> Array:
    """Share of the pressure lost by a stage that holds every end open and lets the gas of others through.

    Parameters
    ----------
    stage : Stage
        The stage.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    density_kg_m3 : ndarray
        Density at suction. [kg/m3]
    mass_flow_kg_s : ndarray
        Flow through it. [kg/s]
    ps : ndarray
        Suction pressure, absolute. [Pa]

    Returns
    -------
    ndarray
        Loss over suction pressure. [-]

    Notes
    -----
    Steady flow in through suction valves that are held open and out through discharge valves that must be
    lifted, all ends side by side. What the pistons push to and fro meanwhile is left out.

    References
    ----------
    Quasi-steady incompressible flow through an orifice; any text on fluid mechanics.
    """
    ends = [(c.area_m2(e.side), e) for c in stage.cylinders for e in c.ends]
    volume = mass_flow_kg_s / density_kg_m3
    into = sum(area * e.suction_area_ratio for area, e in ends)
    out = sum(area * e.discharge_area_ratio for area, e in ends)
    valve_loss = corrections.valve_loss
    suction = valve_loss * full_lift_loss(density_kg_m3, volume, into)
    lifted = plate_loss(
        valve_loss * full_lift_loss(density_kg_m3, volume, out), ps, corrections.valve_preload,
        corrections.valve_full_lift,
    )  # fmt: skip
    return np.asarray((suction + lifted) / ps)


def start_of(ends: tuple[StageEnds, ...], boundary: Boundary) -> tuple[Array, Array]:
    """Flow (rows,) and pressures (rows, stages + 1) to begin with: equal ratios of the stages that work."""
    works = np.cumsum(~boundary.passing, axis=1)
    overall = np.log(boundary.discharge_pressure_pa / boundary.suction_pressure_pa)
    levels = np.concatenate([np.zeros((works.shape[0], 1)), works / works[:, -1:]], axis=1)
    pressures = boundary.suction_pressure_pa[:, None] * np.exp(levels * overall[:, None])
    flow = np.full(works.shape[0], np.inf)
    for k, part in enumerate(ends):
        swept = (part.loaded[boundary.load_step] * part.volume_m3).sum(axis=1)
        dense = pressures[:, k] / (GAS_CONSTANT * boundary.suction_temperature_k)
        taken = _EFFICIENCY * swept * dense * boundary.speed_rad_s / (2 * np.pi)
        flow = np.where(boundary.passing[:, k] | ~np.isinf(flow), flow, taken)
    return flow, pressures


def rough_sketch(gas: GasSurface, corrections: Corrections, boundary: Boundary, pressures: Array) -> Sketch:
    """A sketch from the gas alone, at the pressures a solution begins with."""
    rows, count = boundary.passing.shape
    ps, pd = pressures[:, :-1], pressures[:, 1:]
    pd = np.where(boundary.passing, _IDLE_RATIO * ps, pd)
    ts = np.concatenate(
        [boundary.suction_temperature_k[:, None], boundary.cooling_k[:, :-1] + _APPROACH_K], axis=1
    )
    ts = np.where(np.isnan(boundary.given_suction_k), ts, boundary.given_suction_k)
    path, _ = gas_path(gas, ts.ravel(), ps.ravel(), pd.ravel(), corrections.preheat)
    hot = gas.temperature_from_entropy(gas.entropy(ts, ps), pd)
    log_r = np.log(pd / ps)
    density = path.suction_density_kg_m3.reshape(rows, count)
    z = ps * gas.molar_mass_kg_mol / (density * GAS_CONSTANT * ts)
    inside = path.cylinder_density_kg_m3.reshape(rows, count) / density
    heat = np.log(1 + _LOSS * (hot / ts - 1)) / log_r
    cold = inside * (1 + corrections.preheat * np.expm1(heat * log_r))
    still = np.zeros((rows, count))
    return Sketch(
        pressure_pa=ps, temperature_k=ts, log_ratio=log_r,
        exponent=_or(path.exponent.reshape(rows, count), 1.3),
        departure=_or(z - 1, 0.0), density=_or(cold, 1.0),
        heat=np.where(boundary.passing, 0.0, _or(heat, 0.23)),
        capacity=still + 1, lost=still + corrections.valve_full_lift, held=still + 1, capacity_slope=still,
        heat_slope=still, mixing_k=np.zeros(rows), warming=still + 1,
    )  # fmt: skip


def _or(values: Array, otherwise: float) -> Array:
    return np.where(np.isfinite(values), values, otherwise)
