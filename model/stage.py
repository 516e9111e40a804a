"""One stage at the pressures and temperature measured around it."""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.corrections import Corrections
from model.cycle import GasPath
from model.machine import Cylinder, Side, Stage, Unit
from model.steps import held_open, makes, run_cylinder
from model.surface import GasSurface
from model.throw import ANGLES, Frame, Throw

Array = NDArray[np.float64]

THROUGH_FLOW_SHARE: Final = 0.03
"""A stage that passes less than this share of its full-step flow gives no discharge temperature to judge."""
LOWEST_RATIO: Final = 1.02
"""Below this there is no exponent of compression: both densities are the same within their error."""
LOWEST_SPEED_SHARE: Final = 0.1
"""Below this share of rated speed a machine is starting or stopping, not running."""


def stage_ratio(suction_pressure_pa: ArrayLike, discharge_pressure_pa: ArrayLike) -> Array:
    """Ratio of the pressures around a stage.

    Parameters
    ----------
    suction_pressure_pa : array_like
        Suction pressure, absolute. [Pa]
    discharge_pressure_pa : array_like
        Discharge pressure, absolute. [Pa]

    Returns
    -------
    ndarray
        Discharge over suction; NaN where the suction pressure is not above zero. [-]

    References
    ----------
    Definition.
    """
    suction = np.asarray(suction_pressure_pa, np.float64)
    return np.asarray(np.asarray(discharge_pressure_pa) / np.where(suction > 0, suction, np.nan))


def isentropic_discharge_temperature(
    gas: GasSurface,
    suction_temperature_k: ArrayLike,
    suction_pressure_pa: ArrayLike,
    discharge_pressure_pa: ArrayLike,
) -> Array:
    """Temperature of the gas at discharge pressure and the entropy of its suction state.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    suction_temperature_k : array_like
        Suction temperature. [K]
    suction_pressure_pa : array_like
        Suction pressure, absolute. [Pa]
    discharge_pressure_pa : array_like
        Discharge pressure, absolute. [Pa]

    Returns
    -------
    ndarray
        Temperature; NaN outside the domain of the gas. [K]

    Notes
    -----
    Real gas: ``T1 r^((k-1)/k)`` with the ratio of heat capacities lies 11 K too high on average for a
    natural gas, and up to 37 K.

    References
    ----------
    P. K. Nag, *Basic and Applied Thermodynamics*, chapter 19 (perfect-gas limit).
    """
    entropy = gas.entropy(suction_temperature_k, suction_pressure_pa)
    return gas.temperature_from_entropy(entropy, discharge_pressure_pa)


def gas_path(
    gas: GasSurface,
    suction_temperature_k: Array,
    suction_pressure_pa: Array,
    discharge_pressure_pa: Array,
    preheat: float,
) -> tuple[GasPath, Array]:
    """States of the gas through a stage, and its suction enthalpy.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    suction_temperature_k : ndarray
        (frames,) [K]
    suction_pressure_pa : ndarray
        (frames,) absolute. [Pa]
    discharge_pressure_pa : ndarray
        (frames,) absolute. [Pa]
    preheat : float
        Share of the isentropic temperature rise that the gas takes up on its way in. [-]

    Returns
    -------
    tuple
        The path, each part (frames, 1), and the enthalpy (frames,) [J/kg].

    Notes
    -----
    The exponent of pressure against volume joins the preheated state to the one at the same entropy and
    discharge pressure: ``n = ln(P2/P1) / ln(rho2/rho1)``.

    References
    ----------
    Definition of the exponent of an isentrope between two states.
    """
    ps, pd, ts = suction_pressure_pa, discharge_pressure_pa, suction_temperature_k
    rho_s, enthalpy, entropy = gas.properties(ts, ps)
    t1 = ts + preheat * (gas.temperature_from_entropy(entropy, pd) - ts)
    rho_1, _, entropy_1 = gas.properties(t1, ps)
    rho_2 = gas.density(gas.temperature_from_entropy(entropy_1, pd), pd)
    exponent = np.log(pd / ps) / np.log(rho_2 / rho_1)
    path = GasPath(
        suction_pressure_pa=ps[:, None],
        discharge_pressure_pa=pd[:, None],
        suction_density_kg_m3=rho_s[:, None],
        cylinder_density_kg_m3=rho_1[:, None],
        discharge_density_kg_m3=rho_2[:, None],
        exponent=exponent[:, None],
    )
    return path, enthalpy


def discharge_temperature(
    gas: GasSurface,
    suction_enthalpy_j_kg: ArrayLike,
    power_w: ArrayLike,
    flow_kg_s: ArrayLike,
    discharge_pressure_pa: ArrayLike,
    *,
    heat_loss: float = 0.0,
) -> Array:
    """Temperature of the gas a stage delivers, from its work.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    suction_enthalpy_j_kg : array_like
        Enthalpy at suction. [J/kg]
    power_w : array_like
        Indicated power. [W]
    flow_kg_s : array_like
        Mass flow. [kg/s]
    discharge_pressure_pa : array_like
        Discharge pressure, absolute. [Pa]
    heat_loss : float
        Share of the power lost to the jacket. [-]

    Returns
    -------
    ndarray
        Temperature. [K]

    References
    ----------
    First law for a steady open system.
    """
    rise = np.asarray(power_w) * (1 - heat_loss) / np.asarray(flow_kg_s)
    return gas.temperature_from_enthalpy(np.asarray(suction_enthalpy_j_kg) + rise, discharge_pressure_pa)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class StageState:
    """What is measured around a stage, (frames,), every number usable."""

    suction_pressure_pa: Array
    discharge_pressure_pa: Array
    suction_temperature_k: Array
    speed_rad_s: Array
    load_step: NDArray[np.intp]

    def part(self, rows: slice) -> "StageState":
        """A run of frames."""
        return StageState(
            suction_pressure_pa=self.suction_pressure_pa[rows],
            discharge_pressure_pa=self.discharge_pressure_pa[rows],
            suction_temperature_k=self.suction_temperature_k[rows],
            speed_rad_s=self.speed_rad_s[rows],
            load_step=self.load_step[rows],
        )


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class StageRun:
    """A stage evaluated, (frames,); NaN where the gas leaves its domain."""

    flow_kg_s: Array
    swept_mass_kg_s: Array  # swept volume of the loaded ends at suction density
    power_w: Array
    discharge_temperature_k: Array
    passes_gas: NDArray[np.bool_]
    throws: dict[int, Throw]  # by cylinder number


def stage_frame(
    unit: Unit, gas: GasSurface, corrections: Corrections, state: StageState
) -> tuple[Frame, Array]:
    """What the throws of a stage share, and the suction enthalpy (frames,)."""
    path, enthalpy = gas_path(
        gas, state.suction_temperature_k, state.suction_pressure_pa, state.discharge_pressure_pa,
        corrections.preheat,
    )  # fmt: skip
    frame = Frame(
        path=path, speed_rad_s=state.speed_rad_s[:, None], stroke_m=unit.stroke_m,
        rod_m=unit.connecting_rod_m, ambient_pressure_pa=unit.ambient_pressure_pa, corrections=corrections,
    )  # fmt: skip
    return frame, enthalpy


def run_stage(
    unit: Unit,
    stage: Stage,
    gas: GasSurface,
    corrections: Corrections,
    state: StageState,
    *,
    angles: int = ANGLES,
) -> StageRun:
    """Evaluate a stage over frames; cylinders that are the same in every way are evaluated once.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    stage : Stage
        Which stage of it.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    state : StageState
        What is measured around it.
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    StageRun
        Flow, power, temperature, and each throw. [SI]

    Notes
    -----
    Cylinders side by side mix: the temperature is that of all their work over all their flow.

    References
    ----------
    See `gas_path`, `discharge_temperature` and `model.throw`.
    """
    frame, enthalpy = stage_frame(unit, gas, corrections, state)
    seen: dict[tuple[object, ...], Throw] = {}
    throws = {}
    for cylinder in stage.cylinders:
        key = _likeness(unit, cylinder, held_open(unit, cylinder, state.load_step))
        if key not in seen:
            seen[key] = run_cylinder(unit, cylinder, frame, state.load_step, angles)
        throws[cylinder.number] = seen[key]
    runs = tuple(throws.values())
    flow, power = sum((t.flow_kg_s for t in runs), 0.0), sum((t.power_w for t in runs), 0.0)
    full = sum((t.full_flow_kg_s for t in runs), 0.0)
    swept = sum((t.swept_m3_s for t in runs), 0.0)
    flow, power = np.asarray(flow), np.asarray(power)
    passes = np.asarray((flow > 0) & (flow >= THROUGH_FLOW_SHARE * full))
    temperature = discharge_temperature(
        gas, enthalpy, power, np.where(passes, flow, np.nan), state.discharge_pressure_pa,
        heat_loss=corrections.heat_loss,
    )  # fmt: skip
    return StageRun(
        flow_kg_s=flow,
        swept_mass_kg_s=swept * frame.path.suction_density_kg_m3[:, 0],
        power_w=power,
        discharge_temperature_k=temperature,
        passes_gas=passes | np.isnan(flow),
        throws=throws,
    )


def _likeness(unit: Unit, cylinder: Cylinder, open_ends: dict[Side, NDArray[np.bool_]]) -> tuple[object, ...]:
    """What two cylinders have in common that are the same in all but their number."""
    return (
        replace(cylinder, number=0),
        *(made.ends for made in makes(unit, cylinder)),
        *(open_ends[side].tobytes() for side in Side),
    )
