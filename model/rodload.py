"""Loads on a piston rod and at its crosshead pin, and whether the load reverses.

Tension is positive. Pressures are absolute, so the atmosphere on the outside of the rod is counted.
"""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

NO_LOAD_SHARE: Final = 0.002
"""Loads under this share of the peak count as none: they press neither side of the bushing."""


def gas_load(
    head_pressure_pa: ArrayLike,
    crank_pressure_pa: ArrayLike,
    *,
    head_area_m2: float,
    crank_area_m2: float,
    ambient_pressure_pa: float,
) -> Array:
    """Force of the gas on the piston, as the rod feels it.

    Parameters
    ----------
    head_pressure_pa : array_like
        Pressure in the head end, absolute. [Pa]
    crank_pressure_pa : array_like
        Pressure in the crank end, absolute. [Pa]
    head_area_m2 : float
        Piston area of the head end. [m2]
    crank_area_m2 : float
        Piston area of the crank end, less the rod. [m2]
    ambient_pressure_pa : float
        Pressure on the outside of the rod, absolute. [Pa]

    Returns
    -------
    ndarray
        Force, tension positive. [N]

    References
    ----------
    H. P. Bloch, J. J. Hoefner, *Reciprocating Compressors: Operation and Maintenance*, Gulf, 1996, p. 85
    (without the atmosphere on the rod).
    """
    head, crank = np.asarray(head_pressure_pa), np.asarray(crank_pressure_pa)
    outside = ambient_pressure_pa * (head_area_m2 - crank_area_m2)
    return np.asarray(crank * crank_area_m2 - head * head_area_m2 + outside)


def inertia_load(
    reciprocating_mass_kg: float, speed_rad_s: ArrayLike, travel_curvature_m_rad2: ArrayLike
) -> Array:
    """Force that the moving masses outboard of the pin put on it.

    Parameters
    ----------
    reciprocating_mass_kg : float
        Piston, rod, crosshead and what moves with them. [kg]
    speed_rad_s : array_like
        Speed of the crankshaft. [rad/s]
    travel_curvature_m_rad2 : array_like
        Second derivative of the piston travel by crank angle. [m/rad2]

    Returns
    -------
    ndarray
        Force, tension positive: at the head-end dead centre the masses pull. [N]

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15.
    """
    return np.asarray(
        reciprocating_mass_kg * np.asarray(speed_rad_s) ** 2 * np.asarray(travel_curvature_m_rad2)
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Reversal:
    """Reversal of the load at the pin; arrays over frames."""

    duration_rad: Array
    share: Array  # the smaller peak / the larger
    tension_is_minor: NDArray[np.bool_]  # the sign that lasts for less of the turn
    crossings: Array  # changes of sign in a turn


def reversal(load_n: Array, tension_n: Array, compression_n: Array) -> Reversal:
    """How long and how strongly the load at the pin reverses.

    Parameters
    ----------
    load_n : ndarray
        (frames, angles) load at equal steps over one turn, tension positive. [N]
    tension_n : ndarray
        (frames,) largest tension, 0 if there is none. [N]
    compression_n : ndarray
        (frames,) largest compression as a positive number, 0 if there is none. [N]

    Returns
    -------
    Reversal
        Longest contiguous run of the sign that lasts for less of the turn [rad], and the smaller peak over
        the larger [-]. Both are 0 where the load never changes sign. And how often it does in a turn: twice
        the number of runs of the sign that has fewer.

    Notes
    -----
    Zero crossings are placed by straight lines between the steps, runs go on through angle zero, and a load
    under 0.2 % of the peak belongs to neither sign.

    References
    ----------
    The two measures are those of API Standard 618, 5th edition, section 6.6.4 (wording not reproduced).
    """
    peak = np.maximum(tension_n, compression_n)
    dead = (NO_LOAD_SHARE * peak)[:, None]
    step = 2 * np.pi / load_n.shape[1]
    pull, pull_longest, pulls = _positive_runs(load_n - dead)
    push, push_longest, pushes = _positive_runs(-load_n - dead)
    minor = pull < push
    reverses = (pull > 0) & (push > 0)
    duration = np.where(reverses, np.where(minor, pull_longest, push_longest) * step, 0.0)
    share = np.where(reverses, np.minimum(tension_n, compression_n) / np.where(peak > 0, peak, 1.0), 0.0)
    unknown = np.isnan(peak)
    return Reversal(
        duration_rad=np.where(unknown, np.nan, duration),
        share=np.where(unknown, np.nan, share),
        tension_is_minor=minor,
        crossings=np.where(unknown, np.nan, 2.0 * np.minimum(pulls, pushes)),
    )


def positive_intervals(load_n: Array, angle_rad: Array, dead_n: float) -> tuple[tuple[float, float], ...]:
    """Where one closed trace is above a dead load, as intervals of angle.

    Parameters
    ----------
    load_n : ndarray
        (n,) load over one turn, first and last point the same angle a turn apart. [N]
    angle_rad : ndarray
        (n,) rising angles. [rad]
    dead_n : float
        Load that counts as none. [N]

    Returns
    -------
    tuple of tuple
        Start and end of each interval, cut at the ends of the trace. [rad]

    References
    ----------
    Straight lines between points; no source needed.
    """
    g = load_n - dead_n
    inside = g > 0
    edges = np.flatnonzero(inside[:-1] != inside[1:])
    crossings = angle_rad[edges] + (angle_rad[edges + 1] - angle_rad[edges]) * g[edges] / (
        g[edges] - g[edges + 1]
    )
    bounds = [float(c) for c in crossings]
    if inside[0]:
        bounds.insert(0, float(angle_rad[0]))
    if inside[-1]:
        bounds.append(float(angle_rad[-1]))
    return tuple(zip(bounds[::2], bounds[1::2], strict=True))


def _positive_runs(g: Array) -> tuple[Array, Array, NDArray[np.intp]]:
    """Total and longest length, in steps, of runs in which a closed row is positive, and their number."""
    after = np.concatenate([g[:, 1:], g[:, :1]], axis=1)
    here = g > 0
    low, high = np.minimum(g, after), np.maximum(g, after)
    rise = np.where(high > low, high - low, 1.0)
    part = np.where(low > 0, 1.0, np.where(high > 0, high / rise, 0.0))
    total = part.sum(axis=1)
    twice, starts = np.concatenate([part, part], axis=1), ~np.concatenate([here, here], axis=1)
    end = np.cumsum(twice, axis=1)
    base = np.maximum.accumulate(np.where(starts, end - twice, 0.0), axis=1)
    longest = np.minimum((end - base).max(axis=1), g.shape[1])
    return total, longest, np.count_nonzero(~here & (after > 0), axis=1)
