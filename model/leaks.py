"""What a leak of one cylinder changes at given pressures: flow in, flow out, power and temperature.

The leak runs along the trace of the healthy cylinder. What passes the wrong way in the wrong half of the
turn is lost; what passes in the other half comes back. The mass that has leaked also bends the lines of
compression and re-expansion, and with them the work.
"""

from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.corrections import Corrections
from model.leak_trace import Along, EndTrace, along_of, bent_power, traces_of
from model.machine import Cylinder, OtherSide, Side, Stage, Unit
from model.rows import joined
from model.stage import StageState, discharge_temperature, run_stage, stage_frame
from model.steps import by_make, frame_rows, held_open
from model.surface import GasSurface
from model.throw import ANGLES

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

CRITICAL_RATIO: Final = 0.546
"""Downstream over upstream pressure below which a leak no longer heeds what is downstream."""


class LeakKind(StrEnum):
    SUCTION_VALVE = "suction valve leak"
    DISCHARGE_VALVE = "discharge valve leak"
    RING = "piston ring leak"
    PACKING = "packing leak"


@dataclass(frozen=True, slots=True, kw_only=True)
class Leak:
    """Where a leak is; how big it is comes apart."""

    kind: LeakKind
    cylinder: int
    side: Side | None = None  # of valves

    def __post_init__(self) -> None:
        of_end = self.kind in (LeakKind.SUCTION_VALVE, LeakKind.DISCHARGE_VALVE)
        if of_end != (self.side is not None):
            raise ValueError(f"a {self.kind} {'names its end' if of_end else 'belongs to no end alone'}")


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class LeakEffect:
    """Changes from the healthy machine at the same pressures, (frames,)."""

    area_m2: float
    flow_in_kg_s: Array  # at the suction flange
    flow_out_kg_s: Array  # at the discharge flange
    power_w: Array
    cylinder_temperature_k: Array  # of what the cylinder delivers
    discharge_temperature_k: Array  # of what its stage delivers
    leak_kg_s: Array  # through the leak, both ways, whether it costs anything or not

    def per_area(self) -> "LeakEffect":
        """The same per square metre of effective area."""
        changed = {name: getattr(self, name) / self.area_m2 for name in _CHANGES}
        return LeakEffect(area_m2=1.0, **changed)


_CHANGES: Final = (
    "flow_in_kg_s", "flow_out_kg_s", "power_w", "cylinder_temperature_k", "discharge_temperature_k",
    "leak_kg_s",
)  # fmt: skip


def leak_flux(
    upstream_pressure_pa: ArrayLike, upstream_density_kg_m3: ArrayLike, downstream_pressure_pa: ArrayLike
) -> Array:
    """Mass flux through a leak.

    Parameters
    ----------
    upstream_pressure_pa : array_like
        Pressure the gas comes from, absolute. [Pa]
    upstream_density_kg_m3 : array_like
        Density there. [kg/m3]
    downstream_pressure_pa : array_like
        Pressure it goes to, absolute. [Pa]

    Returns
    -------
    ndarray
        Flux per effective area; 0 where nothing drives it. [kg/(m2 s)]

    Notes
    -----
    ``sqrt(P rho) sqrt((1 - b)(1 - z^2))`` with ``z = (P2/P1 - b)/(1 - b)``, b = 0.546: the ellipse that
    stands for the nozzle of a perfect gas, within one per cent for exponents about 1.3.

    References
    ----------
    The elliptic approximation of ISO 6358 for pneumatic restrictions.
    """
    up, rho = np.asarray(upstream_pressure_pa, np.float64), np.asarray(upstream_density_kg_m3, np.float64)
    b = CRITICAL_RATIO
    z = np.clip((np.asarray(downstream_pressure_pa) / up - b) / (1 - b), 0.0, 1.0)
    return np.asarray(np.sqrt(up * rho * (1 - b) * (1 - z**2)))


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class _Outside:
    gas: GasSurface
    vent_pa: float
    ambient_pa: float


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class _Change:
    """Changes of one throw, (frames,)."""

    flow_in: Array
    flow_out: Array
    power: Array
    vented_heat: Array  # enthalpy above that of suction carried to the vent, W
    leak: Array


def leak_effect(
    unit: Unit,
    stage: Stage,
    gas: GasSurface,
    corrections: Corrections,
    state: StageState,
    *,
    leak: Leak,
    area_m2: float,
    angles: int = ANGLES,
) -> LeakEffect:
    """What a leak changes at the pressures around its stage.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    stage : Stage
        The stage the leaking cylinder belongs to.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    state : StageState
        What is around the stage.
    leak : Leak
        Where it leaks.
    area_m2 : float
        Effective area of the leak. [m2]
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    LeakEffect
        Changes of flow in and out, power and temperatures. [SI]

    Raises
    ------
    KeyError
        The stage has no such cylinder.

    Notes
    -----
    Rules of what is lost, each in the half turn in which an end compresses and delivers, or re-expands and
    draws:

    - suction valve: what passes back while its end compresses and delivers;
    - discharge valve: what passes back while its end re-expands and draws;
    - rings, once for the throw: what passes out of the end that compresses, less what passes the other way in
      the same half turn, which frees clearance gas and is delivered;
    - packing: what leaves in re-expansion and suction is drawn in besides, what leaves in compression and
      discharge is not delivered.

    Gas that comes back is hot and takes the place of more than its mass of fresh gas: but for the packing
    each loss counts by its temperature over that at suction, once it has re-expanded if it came before. One
    corrector pass adds the leaked mass, times the temperature it brings over the one it finds, to the gas
    between shut valves, spares open valves what it carries, and integrates the work anew.

    A single-acting piston leaks past its rings to what is on its other side.

    References
    ----------
    Conservation of mass and energy of a cylinder with leaks, to first order along the healthy trace; derived.
    """
    cylinder = next((c for c in stage.cylinders if c.number == leak.cylinder), None)
    if cylinder is None:
        raise KeyError(leak.cylinder)
    frame, enthalpy = stage_frame(unit, gas, corrections, state)
    along = along_of(gas, frame, state)
    turns = state.speed_rad_s / (2 * np.pi)
    air = unit.ambient_pressure_pa
    vent = air if unit.packing_vent_pa is None else unit.packing_vent_pa
    outside = _Outside(gas=gas, vent_pa=vent, ambient_pa=air)
    pieces = []
    for made, rows in by_make(unit, cylinder, state.load_step):
        at = np.arange(turns.size) if rows is None else rows
        part = Along(
            frame=frame_rows(frame, rows), suction_k=along.suction_k[at], inside_k=along.inside_k[at],
            hot_k=along.hot_k[at], power=along.power[at],
        )  # fmt: skip
        traces = traces_of(made, part, held_open(unit, cylinder, state.load_step[at]), angles)
        pieces.append((at, _changed(leak, made, part, traces, area_m2=area_m2, outside=outside)))
    change: _Change = joined(turns.size, pieces)
    healthy = run_stage(unit, stage, gas, corrections, state, angles=angles)
    throw = healthy.throws[leak.cylinder]
    flow_out = np.maximum(change.flow_out, -throw.flow_kg_s)

    def warmer(flow: Array, power: Array) -> Array:
        def hot(passed: Array, work: Array) -> Array:
            passed = np.where(passed > 0, passed, np.nan)
            return discharge_temperature(gas, enthalpy, work, passed, state.discharge_pressure_pa)

        kept = 1 - corrections.heat_loss
        leaking = (power + change.power) * kept - change.vented_heat
        return hot(flow + flow_out, leaking) - hot(flow, power * kept)

    return LeakEffect(
        area_m2=area_m2, flow_in_kg_s=np.maximum(change.flow_in, -throw.flow_kg_s), flow_out_kg_s=flow_out,
        power_w=change.power, cylinder_temperature_k=warmer(throw.flow_kg_s, throw.power_w),
        discharge_temperature_k=warmer(healthy.flow_kg_s, healthy.power_w), leak_kg_s=change.leak,
    )  # fmt: skip


def _changed(
    leak: Leak, cylinder: Cylinder, along: Along, traces: dict[Side, EndTrace], *, area_m2: float,
    outside: _Outside,
) -> _Change:  # fmt: skip
    if leak.kind is LeakKind.RING:
        if len(traces) == len(Side):
            return _past_rings(along, traces, area_m2)
        (only,) = traces.values()
        if cylinder.other_side is OtherSide.SUCTION:
            return _through_valve(along, only, area_m2, suction=True)
        return _to_air(along, only, area_m2, outside, outside.ambient_pa)
    end = traces.get(Side.CRANK if leak.side is None else leak.side)
    if end is None:  # no gas of ours behind this packing, no valve on this side
        none = np.zeros(along.suction_k.shape[0])
        return _Change(flow_in=none, flow_out=none, power=none, vented_heat=none, leak=none)
    if leak.kind is LeakKind.PACKING:
        return _to_air(along, end, area_m2, outside, outside.vent_pa)
    return _through_valve(along, end, area_m2, suction=leak.kind is LeakKind.SUCTION_VALVE)


def _to_air(along: Along, end: EndTrace, area_m2: float, outside: _Outside, pressure_pa: float) -> _Change:
    flux = leak_flux(end.pressure, along.density(end.pressure), pressure_pa)
    lost = area_m2 * flux * (end.pressure > pressure_pa)
    over = outside.gas.enthalpy(end.temperature, end.pressure) - outside.gas.enthalpy(
        along.suction_k, along.frame.path.suction_pressure_pa
    )
    drawn = end.draws | (end.loaded == 0)  # an end that delivers nothing has it all from the suction line
    return _Change(
        flow_in=(lost * drawn).mean(axis=1), flow_out=-(lost * ~drawn).mean(axis=1),
        power=bent_power(along, end, -lost, end.temperature),
        vented_heat=(lost * over).mean(axis=1) * end.loaded[:, 0], leak=lost.mean(axis=1),
    )  # fmt: skip


def _through_valve(along: Along, end: EndTrace, area_m2: float, *, suction: bool) -> _Change:
    path = along.frame.path
    line, line_k, line_density = (
        (path.suction_pressure_pa, along.suction_k, path.suction_density_kg_m3)
        if suction
        else (path.discharge_pressure_pa, along.hot_k, path.discharge_density_kg_m3)
    )
    comes = end.pressure < line
    into = area_m2 * np.where(
        comes,
        leak_flux(line, line_density, end.pressure),
        -leak_flux(end.pressure, along.density(end.pressure), line),
    )
    brings = np.where(comes, line_k, end.temperature)
    if suction:
        back = np.maximum(-into, 0) * ~end.draws * end.loaded * brings
    else:  # an end that delivers nothing hands on to the suction line whatever is let in
        back = np.maximum(into, 0) * (end.draws | (end.loaded == 0)) * along.expanded(brings, end.pressure)
    lost = (back / along.suction_k).mean(axis=1)
    return _Change(
        flow_in=-lost, flow_out=-lost, power=bent_power(along, end, into, brings),
        vented_heat=np.zeros_like(lost), leak=np.abs(into).mean(axis=1),
    )  # fmt: skip


def _past_rings(along: Along, traces: dict[Side, EndTrace], area_m2: float) -> _Change:
    head, crank = traces[Side.HEAD], traces[Side.CRANK]
    inward = head.pressure < crank.pressure  # into the head end
    to_head = area_m2 * np.where(
        inward,
        leak_flux(crank.pressure, along.density(crank.pressure), head.pressure),
        -leak_flux(head.pressure, along.density(head.pressure), crank.pressure),
    )
    brings = np.where(inward, crank.temperature, head.temperature)
    # The head end re-expands while the crank end compresses; what goes to the end that re-expands is lost.
    to_expanding = np.where(head.draws, to_head, -to_head)
    compresses = np.where(head.draws, crank.loaded, head.loaded)
    counted = np.where(to_expanding > 0, to_expanding, to_expanding * compresses)
    expanding = np.where(head.draws, head.pressure, crank.pressure)
    lost = (counted * along.expanded(brings, expanding) / along.suction_k).mean(axis=1)
    return _Change(
        flow_in=-lost, flow_out=-lost,
        power=bent_power(along, head, to_head, brings)
        + bent_power(along, crank, -to_head, brings),
        vented_heat=np.zeros_like(lost), leak=np.abs(to_head).mean(axis=1),
    )  # fmt: skip
