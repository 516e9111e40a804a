"""Volumetric efficiency of a compression end, in the three forms that say the same of a real gas.

With densities there is no exponent in it; with the exponent of pressure against volume no compressibility;
with compressibility the exponent must be that of temperature along the isentrope, never the ratio of heat
capacities.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

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
    heat capacities, however the books print it, it lies 0.8 to 1.5 points too high on natural gas.

    References
    ----------
    The bare clearance term of the handbook form; without its allowances in percent.
    """
    r = np.asarray(pressure_ratio)
    power = 1 - np.log(temperature_ratio) / np.log(r)
    return np.asarray(
        1 - np.asarray(clearance) * (np.asarray(suction_z) / np.asarray(discharge_z) * r**power - 1)
    )


def volumetric_efficiency_from_densities(clearance: ArrayLike, density_rise: ArrayLike) -> Array:
    """The same, from the densities at both ends of the re-expansion.

    Parameters
    ----------
    clearance : array_like
        Clearance volume over swept volume. [-]
    density_rise : array_like
        Density at discharge pressure and the entropy of suction over density at suction. [-]

    Returns
    -------
    ndarray
        ``1 + c - c rho2/rho1``. [-]

    References
    ----------
    Conservation of the mass in the clearance while it re-expands.
    """
    c = np.asarray(clearance)
    return np.asarray(1 + c - c * np.asarray(density_rise))
