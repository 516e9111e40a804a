"""Pressure lost in the valves of a compression end, quasi-steady."""

from functools import lru_cache
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

_TAPER: Final = 50.0  # preload dies away below 1/50 of full-lift flow, so that strokes join at dead centre
_PLATE_POINTS: Final = 2049


def full_lift_loss(density_kg_m3: ArrayLike, speed_rad_s: ArrayLike, area_ratio: float) -> Array:
    """Pressure loss of fully open valves, per square of the travel rate.

    Parameters
    ----------
    density_kg_m3 : array_like
        Density of the gas that passes. [kg/m3]
    speed_rad_s : array_like
        Speed of the crankshaft. [rad/s]
    area_ratio : float
        Effective flow area of the valves over piston area of the end. [-]

    Returns
    -------
    ndarray
        ``rho w^2 / (2 f^2)``; times the travel rate squared it is the loss. [Pa rad2/m2]

    References
    ----------
    Quasi-steady incompressible flow through an orifice; any text on fluid mechanics.
    """
    return np.asarray(np.asarray(density_kg_m3) * np.asarray(speed_rad_s) ** 2 / (2 * area_ratio**2))


def plate_loss(full_lift_loss_pa: Array, line_pressure_pa: Array, preload: float, full_lift: float) -> Array:
    """Pressure loss of spring-loaded valve plates that lift no farther than the flow holds them.

    Parameters
    ----------
    full_lift_loss_pa : ndarray
        Loss the flow would have through fully open valves. [Pa]
    line_pressure_pa : ndarray
        Pressure in the line; broadcasts. [Pa]
    preload : float
        Pressure difference that just lifts a plate, over line pressure. [-]
    full_lift : float
        Pressure difference that lifts it fully, over line pressure; 0 for plates without springs. [-]

    Returns
    -------
    ndarray
        Loss. [Pa]

    Notes
    -----
    At lift y (0 to 1) the springs hold ``P (p0 + (p1 - p0) y)`` and the flow needs ``full lift loss / y^2``.
    Both are equal at the lift that solves ``y^2 (p0/p1 + (1 - p0/p1) y) = full lift loss / (p1 P)``. Inertia
    of the plate is left out here; the opening is treated apart. Within a few degrees of dead centre, below
    1/50 of the full-lift flow, the preload is tapered to nothing, so that one stroke joins the next.

    References
    ----------
    Static balance of plate and springs; derived.
    """
    if full_lift <= 0:
        return full_lift_loss_pa
    x = full_lift_loss_pa / (full_lift * line_pressure_pa)
    share = min(preload / full_lift, 1.0)
    roots, lifts = _plate_table(share)
    lift = np.interp(np.sqrt(np.minimum(x, 1.0)), roots, lifts)
    held = line_pressure_pa * (preload * np.minimum(1.0, _TAPER * x) + (full_lift - preload) * lift)
    return np.asarray(np.where(x >= 1, full_lift_loss_pa, held))


@lru_cache(maxsize=64)
def _plate_table(share: float) -> tuple[Array, Array]:
    """Lift against the square root of the flow number: nearly straight, so 2 049 points give 1e-6."""
    lift = np.linspace(0.0, 1.0, _PLATE_POINTS)
    return np.sqrt(lift**2 * (share + (1 - share) * lift)), lift
