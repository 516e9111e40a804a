"""The cycle of one compression end: volumetric efficiency, valve loss, pressure over the turn.

Volumes are written per swept volume of the end: clearance plus the share of the stroke. A stroke is followed
by ``l``, the natural logarithm of the volume change since its dead centre, so that every line of compression
or re-expansion is one exponential.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.efficiency import volumetric_efficiency
from model.kinematics import angle_of_travel, piston_travel, piston_travel_rate
from model.machine import End, Side
from model.valves import full_lift_loss, plate_loss

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class EndGeometry:
    """One end at a set of crank angles, the shape of which is free."""

    expansion: Array  # ln(V / V at the start of the suction stroke)
    compression: Array  # ln(V at the start of the discharge stroke / V)
    travel_rate_m_rad: Array  # magnitude
    volume_slope: Array  # d(volume per swept volume) / d(angle)
    volume: Array  # per swept volume
    suction_stroke: NDArray[np.bool_]


def end_geometry(angle_rad: Array, end: End, stroke_m: float, rod_m: float) -> EndGeometry:
    """Volumes and rates of an end.

    Parameters
    ----------
    angle_rad : ndarray
        Crank angles from the head-end dead centre. [rad]
    end : End
        The end.
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]

    Returns
    -------
    EndGeometry
        Of the shape of the angles.

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15.
    """
    travel = piston_travel(angle_rad, stroke_m, rod_m) / stroke_m
    rate = piston_travel_rate(angle_rad, stroke_m, rod_m)
    outgoing = np.mod(angle_rad, 2 * np.pi) < np.pi
    is_head = end.side is Side.HEAD
    volume = end.clearance + (travel if is_head else 1 - travel)
    return EndGeometry(
        expansion=np.log(volume / end.clearance),
        compression=np.log((1 + end.clearance) / volume),
        travel_rate_m_rad=np.abs(rate),
        volume_slope=(rate if is_head else -rate) / stroke_m,
        volume=volume,
        suction_stroke=outgoing if is_head else ~outgoing,
    )


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class EndCycle:
    """What the pressure of one end needs, each (frames, 1)."""

    suction_pressure_pa: Array
    discharge_pressure_pa: Array
    expansion_exponent: Array
    compression_exponent: Array
    suction_loss: Array  # full-lift loss per square of travel rate
    discharge_loss: Array
    suction_overshoot_pa: Array
    discharge_overshoot_pa: Array
    suction_opening: Array  # l at which the pressure meets the line
    discharge_opening: Array
    span: float  # ln of the largest over the smallest volume
    closing: float  # l at which suction valves that close late let compression begin; 0 as a rule
    dead: NDArray[np.bool_]  # neither valve opens: clearance gas to and fro
    held_open: NDArray[np.bool_]
    preload: float
    full_lift: float
    decay: float


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class GasPath:
    """Gas on its way through a stage, each (frames, 1)."""

    suction_pressure_pa: Array
    discharge_pressure_pa: Array
    suction_density_kg_m3: Array
    cylinder_density_kg_m3: Array  # after preheat, at the end of suction
    discharge_density_kg_m3: Array
    exponent: Array  # of pressure against volume


def end_cycle(
    end: End,
    path: GasPath,
    speed_rad_s: Array,
    held_open: NDArray[np.bool_],
    corrections: Corrections,
    *,
    stroke_m: float,
    rod_m: float,
    natural_frequency_hz: float,
) -> tuple[EndCycle, Array]:
    """Set up the cycle of an end, and the volumetric efficiency it has when it is loaded.

    Parameters
    ----------
    end : End
        The end.
    path : GasPath
        States of the gas, each part (frames, 1).
    speed_rad_s : ndarray
        (frames, 1) speed of the crankshaft. [rad/s]
    held_open : ndarray of bool
        (frames, 1) whether its suction valves are held open.
    corrections : Corrections
        How a real end departs from the ideal cycle.
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]
    natural_frequency_hz : float
        Natural frequency of the valve plates on their springs. [Hz]

    Returns
    -------
    tuple
        The cycle, and the efficiency (frames, 1), 0 where the clearance gas fills the stroke. [-]

    Notes
    -----
    A plate starts late by about the time of its own period, in which the pressure runs past the line by
    ``(w / wn) n (dlnV/dtheta) P``; from the opening on that dies away with the logarithm of the volume.

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14 (the ideal cycle); the overshoot is derived.
    """
    ps, pd = path.suction_pressure_pa, path.discharge_pressure_pa
    log_ratio = np.log(pd / ps)
    n_exp = corrections.expansion_exponent * path.exponent
    n_comp = corrections.compression_exponent * path.exponent
    density_ratio = path.cylinder_density_kg_m3 / path.suction_density_kg_m3
    efficiency = (
        volumetric_efficiency(end.clearance, pd / ps, n_exp, density_ratio) - corrections.volumetric_deficit
    )
    closing, pushed_back = late_closing(end, stroke_m, rod_m)
    if closing > 0:
        efficiency = efficiency - density_ratio * pushed_back
    dead = (efficiency <= 0) & ~held_open
    lateness = corrections.opening_overshoot * speed_rad_s / (2 * np.pi * natural_frequency_hz)
    suction_opening, discharge_opening = log_ratio / n_exp, closing + log_ratio / n_comp
    resistance = corrections.valve_loss
    cycle = EndCycle(
        suction_pressure_pa=ps,
        discharge_pressure_pa=pd,
        expansion_exponent=n_exp,
        compression_exponent=n_comp,
        suction_loss=resistance
        * full_lift_loss(path.suction_density_kg_m3, speed_rad_s, end.suction_area_ratio),
        discharge_loss=resistance
        * full_lift_loss(path.discharge_density_kg_m3, speed_rad_s, end.discharge_area_ratio),
        suction_overshoot_pa=lateness
        * n_exp
        * ps
        * _slope_at(end, end.clearance * np.exp(suction_opening), stroke_m, rod_m),
        discharge_overshoot_pa=lateness
        * n_comp
        * pd
        * _slope_at(end, (1 + end.clearance) * np.exp(-discharge_opening), stroke_m, rod_m),
        suction_opening=suction_opening,
        discharge_opening=discharge_opening,
        span=float(np.log((1 + end.clearance) / end.clearance)),
        closing=closing,
        dead=dead,
        held_open=held_open,
        preload=corrections.valve_preload,
        full_lift=corrections.valve_full_lift,
        decay=corrections.opening_decay,
    )
    return cycle, np.maximum(efficiency, 0.0)


def late_closing(end: End, stroke_m: float, rod_m: float) -> tuple[float, float]:
    """Where an end begins to compress whose suction valves are held open past its dead centre.

    Parameters
    ----------
    end : End
        The end, with its closing angle.
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]

    Returns
    -------
    tuple of float
        Logarithm of the largest volume over that at closing, and the share of the swept volume pushed back
        until then; both 0 for valves that close by themselves. [-]

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15 (the travel).
    """
    if end.valve_closing_rad <= 0:
        return 0.0, 0.0
    angle = end.valve_closing_rad + (np.pi if end.side is Side.HEAD else 0.0)
    travel = float(piston_travel(angle, stroke_m, rod_m)) / stroke_m
    pushed = 1 - travel if end.side is Side.HEAD else travel
    return float(-np.log1p(-pushed / (1 + end.clearance))), pushed


def _slope_at(end: End, volume: Array, stroke_m: float, rod_m: float) -> Array:
    """Magnitude of d(ln V)/d(angle) where an end has a given volume (per swept volume)."""
    share = np.clip(volume - end.clearance, 0.0, 1.0)
    travel = share if end.side is Side.HEAD else 1 - share
    rate = piston_travel_rate(angle_of_travel(travel * stroke_m, stroke_m, rod_m), stroke_m, rod_m)
    return np.asarray(np.abs(rate) / stroke_m / volume)


def suction_stroke(cycle: EndCycle, log_volume: Array, travel_rate_m_rad: Array) -> tuple[Array, Array]:
    """Pressure of an end while its volume grows.

    Parameters
    ----------
    cycle : EndCycle
        The cycle, each part (frames, 1).
    log_volume : ndarray
        Natural logarithm of the volume over that at the start of the stroke. [-]
    travel_rate_m_rad : ndarray
        Magnitude of the travel rate of the piston. [m/rad]

    Returns
    -------
    tuple of ndarray
        Pressure, and open line less re-expansion, which turns positive where the valve opens. [Pa]

    Notes
    -----
    The larger of re-expansion and open line holds. An end held open breathes through its suction valves.
    One that closes so late that it never reaches the discharge line expands from as far as it came.

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14 (the ideal cycle).
    """
    expansion = _reached_pressure(cycle) * np.exp(-cycle.expansion_exponent * log_volume)
    flow = cycle.suction_loss * travel_rate_m_rad**2
    loss = plate_loss(flow, cycle.suction_pressure_pa, cycle.preload, cycle.full_lift)
    late = np.exp(-np.maximum(log_volume - cycle.suction_opening, 0.0) / cycle.decay)
    line = cycle.suction_pressure_pa - loss - cycle.suction_overshoot_pa * late
    pressure = np.maximum(expansion, line)
    if cycle.dead.any() and not cycle.closing:
        pressure = np.where(cycle.dead, expansion, pressure)
    if cycle.held_open.any():
        pressure = np.where(cycle.held_open, cycle.suction_pressure_pa - flow, pressure)
    return pressure, line - expansion


def discharge_stroke(cycle: EndCycle, log_volume: Array, travel_rate_m_rad: Array) -> tuple[Array, Array]:
    """Pressure of an end while its volume shrinks.

    Parameters
    ----------
    cycle : EndCycle
        The cycle, each part (frames, 1).
    log_volume : ndarray
        Natural logarithm of the volume at the start of the stroke over the present one. [-]
    travel_rate_m_rad : ndarray
        Magnitude of the travel rate of the piston. [m/rad]

    Returns
    -------
    tuple of ndarray
        Pressure, and compression less open line, which turns positive where the valve opens. [Pa]

    Notes
    -----
    The smaller of compression and open line holds. An end held open pushes its gas back through the suction
    valves, which the unloader holds at full lift; one that closes late does so until then, and compresses
    from suction pressure.

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14 (the ideal cycle).
    """
    compression = cycle.suction_pressure_pa * np.exp(
        cycle.compression_exponent * (log_volume - cycle.closing if cycle.closing else log_volume)
    )
    if cycle.closing:
        back = cycle.suction_loss * travel_rate_m_rad**2
        compression = np.where(log_volume < cycle.closing, cycle.suction_pressure_pa + back, compression)
    flow = cycle.discharge_loss * travel_rate_m_rad**2
    loss = plate_loss(flow, cycle.discharge_pressure_pa, cycle.preload, cycle.full_lift)
    late = np.exp(-np.maximum(log_volume - cycle.discharge_opening, 0.0) / cycle.decay)
    line = cycle.discharge_pressure_pa + loss + cycle.discharge_overshoot_pa * late
    pressure = np.minimum(compression, line)
    if cycle.dead.any() and not cycle.closing:
        trapped = cycle.discharge_pressure_pa * np.exp(-cycle.expansion_exponent * (cycle.span - log_volume))
        pressure = np.where(cycle.dead, trapped, pressure)
    if cycle.held_open.any():
        back = cycle.suction_loss * travel_rate_m_rad**2
        pressure = np.where(cycle.held_open, cycle.suction_pressure_pa + back, pressure)
    return pressure, compression - line


def _reached_pressure(cycle: EndCycle) -> Array:
    """Pressure from which an end re-expands: the discharge line, or what late closing leaves of it."""
    if not cycle.closing:
        return cycle.discharge_pressure_pa
    reached = cycle.suction_pressure_pa * np.exp(cycle.compression_exponent * (cycle.span - cycle.closing))
    return np.asarray(
        np.where(cycle.dead, np.minimum(reached, cycle.discharge_pressure_pa), cycle.discharge_pressure_pa)
    )


def end_pressure(cycle: EndCycle, geometry: EndGeometry) -> Array:
    """Pressure of an end at any set of angles.

    Parameters
    ----------
    cycle : EndCycle
        The cycle.
    geometry : EndGeometry
        The angles.

    Returns
    -------
    ndarray
        Pressure. [Pa]

    References
    ----------
    See `suction_stroke` and `discharge_stroke`.
    """
    suction, _ = suction_stroke(cycle, geometry.expansion, geometry.travel_rate_m_rad)
    discharge, _ = discharge_stroke(cycle, geometry.compression, geometry.travel_rate_m_rad)
    return np.asarray(np.where(geometry.suction_stroke, suction, discharge))
