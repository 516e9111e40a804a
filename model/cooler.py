"""An intercooler and the line around it: how far it cools at another flow, and what pressure it costs."""

from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

LEAST_LOAD: Final = 0.02
"""Below this share of design flow a cooler is as good as it gets: the power law was made for running ones."""
UNITS_POWER: Final = 0.4
"""Heat-transfer units fall with this power of flow where the gas side decides."""


def transfer_units(effectiveness: ArrayLike) -> Array:
    """Number of heat-transfer units of a cooler against much water.

    Parameters
    ----------
    effectiveness : array_like
        Cooling of the gas over the most it could be cooled. [-]

    Returns
    -------
    ndarray
        ``NTU = -ln(1 - eps)``. [-]

    References
    ----------
    W. M. Kays, A. L. London, *Compact Heat Exchangers*, for a capacity ratio of zero.
    """
    with np.errstate(divide="ignore"):  # a perfect cooler has no end of them
        return np.asarray(-np.log1p(-np.asarray(effectiveness, np.float64)))


def effectiveness_at(design_effectiveness: ArrayLike, load: ArrayLike) -> Array:
    """Effectiveness of a cooler at another flow.

    Parameters
    ----------
    design_effectiveness : array_like
        Effectiveness at design flow. [-]
    load : array_like
        Flow over design flow. [-]

    Returns
    -------
    ndarray
        ``1 - exp(-NTU)`` with ``NTU ~ load^-0.4``. [-]

    Notes
    -----
    The film on the gas side grows with flow to the power 0.6 about a bundle, the heat to be moved with
    flow: their quotient falls with flow to the power 0.4. Without this every turn-down looks like a cooler
    just cleaned.

    References
    ----------
    W. M. Kays, A. L. London, *Compact Heat Exchangers*; flow about tube banks, exponent 0.6.
    """
    share = np.maximum(np.asarray(load, np.float64), LEAST_LOAD)
    return np.asarray(-np.expm1(-transfer_units(design_effectiveness) * share**-UNITS_POWER))


def cooled_temperature(
    hot_temperature_k: ArrayLike, water_temperature_k: ArrayLike, effectiveness: ArrayLike
) -> Array:
    """Temperature of the gas behind a cooler.

    Parameters
    ----------
    hot_temperature_k : array_like
        Temperature before it. [K]
    water_temperature_k : array_like
        Temperature of its cooling water or air. [K]
    effectiveness : array_like
        Effectiveness. [-]

    Returns
    -------
    ndarray
        ``Tw + (1 - eps) (Th - Tw)``. [K]

    References
    ----------
    Definition of the effectiveness.
    """
    water = np.asarray(water_temperature_k, np.float64)
    return np.asarray(water + (1 - np.asarray(effectiveness)) * (np.asarray(hot_temperature_k) - water))


def flow_drop(design_share: ArrayLike, load: ArrayLike) -> Array:
    """Share of the pressure that a line or cooler costs at another flow.

    Parameters
    ----------
    design_share : array_like
        Share of the upstream pressure lost at design flow. [-]
    load : array_like
        Flow over design flow. [-]

    Returns
    -------
    ndarray
        ``share load^2``, at most one half. [-]

    References
    ----------
    Turbulent flow through fixed passages; any text on fluid mechanics.
    """
    load = np.asarray(load, np.float64)
    return np.asarray(np.minimum(np.asarray(design_share) * load * np.abs(load), 0.5))
