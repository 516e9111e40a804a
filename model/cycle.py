"""The cycle of one compression end: volumetric efficiency, valve loss, pressure over the turn.

Volumes are written per swept volume of the end: clearance plus the share of the stroke. A stroke is followed
by ``l``, the natural logarithm of the volume change since its dead centre, so that every line of compression
or re-expansion is one exponential.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.corrections import Corrections
from model.kinematics import angle_of_travel, piston_travel, piston_travel_rate
from model.machine import End, Side
from model.valves import full_lift_loss, plate_loss

Array = NDArray[np.float64]


def volumetric_efficiency(
    clearance: ArrayLike, pressure_ratio: ArrayLike, exponent: ArrayLike, density_ratio: ArrayLike = 1.0
) -> Array:
    """Gas drawn in by an end, as a share of its swept volume at suction conditions.

    Parameters
    ----------
    clearance : array_like
        Clearance volume over swept volume. [-]
    pressure_ratio : array_like
        Discharge pressure over suction pressure. [-]
    exponent : array_like
        Exponent of pressure against volume of the re-expansion. [-]
    density_ratio : array_like
        Density in the cylinder at the end of suction over that in the suction line (preheat). [-]

    Returns
    -------
    ndarray
        ``density_ratio (1 + c - c r^(1/n))``; below zero where the clearance gas never expands far enough.
        [-]

    Notes
    -----
    With the exponent of pressure against volume there is no compressibility in it. See
    `volumetric_efficiency_from_temperatures` for the other form.

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14.
    """
    c, r = np.asarray(clearance), np.asarray(pressure_ratio)
    return np.asarray(np.asarray(density_ratio) * (1 + c - c * r ** (1 / np.asarray(exponent))))


def volumetric_efficiency_from_temperatures(
    clearance: ArrayLike,
    pressure_ratio: ArrayLike,
    suction_z: ArrayLike,
    discharge_z: ArrayLike,
    temperature_ratio: ArrayLike,
) -> Array:
    """The same, from compressibility factors and the isentropic temperatures.

    Parameters
    ----------
    clearance : array_like
        Clearance volume over swept volume. [-]
    pressure_ratio : array_like
        Discharge pressure over suction pressure. [-]
    suction_z : array_like
        Compressibility factor at suction. [-]
    discharge_z : array_like
        Compressibility factor at discharge pressure and isentropic discharge temperature. [-]
    temperature_ratio : array_like
        Isentropic discharge temperature over suction temperature. [-]

    Returns
    -------
    ndarray
        ``1 - c ((Zs/Zd) r^(1/k) - 1)`` with ``1/k = 1 - ln(T2/T1)/ln(r)``. [-]

    Notes
    -----
    Only with k from the temperatures does this equal the form without compressibility. With the ratio of
    heat capacities it lies a point too high on natural gas.

    References
    ----------
    The bare clearance term of the handbook form; without its allowances in percent.
    """
    r = np.asarray(pressure_ratio)
    power = 1 - np.log(temperature_ratio) / np.log(r)
    return np.asarray(
        1 - np.asarray(clearance) * (np.asarray(suction_z) / np.asarray(discharge_z) * r**power - 1)
    )


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
    dead = (efficiency <= 0) & ~held_open
    lateness = corrections.opening_overshoot * speed_rad_s / (2 * np.pi * natural_frequency_hz)
    suction_opening, discharge_opening = log_ratio / n_exp, log_ratio / n_comp
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
        dead=dead,
        held_open=held_open,
        preload=corrections.valve_preload,
        full_lift=corrections.valve_full_lift,
        decay=corrections.opening_decay,
    )
    return cycle, np.maximum(efficiency, 0.0)


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

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14 (the ideal cycle).
    """
    expansion = cycle.discharge_pressure_pa * np.exp(-cycle.expansion_exponent * log_volume)
    flow = cycle.suction_loss * travel_rate_m_rad**2
    loss = plate_loss(flow, cycle.suction_pressure_pa, cycle.preload, cycle.full_lift)
    late = np.exp(-np.maximum(log_volume - cycle.suction_opening, 0.0) / cycle.decay)
    line = cycle.suction_pressure_pa - loss - cycle.suction_overshoot_pa * late
    pressure = np.maximum(expansion, line)
    if cycle.dead.any():
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
    valves, which the unloader holds at full lift.

    References
    ----------
    R. Joel, *Basic Engineering Thermodynamics*, chapter 14 (the ideal cycle).
    """
    compression = cycle.suction_pressure_pa * np.exp(cycle.compression_exponent * log_volume)
    flow = cycle.discharge_loss * travel_rate_m_rad**2
    loss = plate_loss(flow, cycle.discharge_pressure_pa, cycle.preload, cycle.full_lift)
    late = np.exp(-np.maximum(log_volume - cycle.discharge_opening, 0.0) / cycle.decay)
    line = cycle.discharge_pressure_pa + loss + cycle.discharge_overshoot_pa * late
    pressure = np.minimum(compression, line)
    if cycle.dead.any():
        trapped = cycle.discharge_pressure_pa * np.exp(-cycle.expansion_exponent * (cycle.span - log_volume))
        pressure = np.where(cycle.dead, trapped, pressure)
    if cycle.held_open.any():
        back = cycle.suction_loss * travel_rate_m_rad**2
        pressure = np.where(cycle.held_open, cycle.suction_pressure_pa + back, pressure)
    return pressure, compression - line


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
