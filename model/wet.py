"""Water in a gas: how much it can hold, and what a knock-out drum takes out of it."""

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.surface import GAS_CONSTANT, GasSurface

Array = NDArray[np.float64]

WATER: Final = "water"
LIQUID_VOLUME_M3_MOL: Final = 18.1e-6
MOST_HELD: Final = 0.5
"""A gas that would hold more water than this is steam; nothing here was made for it."""

_REFERENCE_K: Final = 300.0
_STEEPNESS: Final = 2.7  # of the cross coefficients over 1/T: that of air between 273 and 373 K
_OWN_M3_MOL: Final = -1150e-6  # second virial coefficient of water vapour there
_OWN_STEEPNESS: Final = 4.2

# Second virial coefficient of water with each gas at 300 K, m3/mol; from memory of published measurements.
# For the paraffins above butane, in proportion to the chain.
CROSS_VIRIALS: Final[Mapping[str, float]] = MappingProxyType(
    {
        "methane": -60e-6, "ethane": -137e-6, "propane": -188e-6, "n-butane": -240e-6, "isobutane": -230e-6,
        "n-pentane": -290e-6, "isopentane": -280e-6, "n-hexane": -340e-6, "n-heptane": -390e-6,
        "n-octane": -440e-6, "n-nonane": -490e-6, "n-decane": -540e-6, "nitrogen": -31e-6,
        "carbon dioxide": -205e-6, "hydrogen": -15e-6, "hydrogen sulfide": -330e-6, "carbon monoxide": -38e-6,
        "oxygen": -27e-6, "helium": 14e-6, "argon": -31e-6,
    }
)  # fmt: skip


def water_vapour_pressure(temperature_k: ArrayLike) -> Array:
    """Pressure of water vapour over its liquid.

    Parameters
    ----------
    temperature_k : array_like
        Temperature, 273 to 473 K. [K]

    Returns
    -------
    ndarray
        Saturation pressure. [Pa]

    References
    ----------
    R. W. Hyland, A. Wexler, *ASHRAE Transactions* 89 (2A) (1983) 500, equation 17.
    """
    t = np.asarray(temperature_k, np.float64)
    polynomial = 1.3914993 - 4.8640239e-2 * t + 4.1764768e-5 * t**2 - 1.4452093e-8 * t**3
    return np.asarray(np.exp(-5.8002206e3 / t + polynomial + 6.5459673 * np.log(t)))


def cross_virial(composition: Mapping[str, float], temperature_k: ArrayLike) -> Array:
    """Second virial coefficient of water with a gas.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component by its word; water in it is left out. [-]
    temperature_k : array_like
        Temperature, near 310 K. [K]

    Returns
    -------
    ndarray
        Coefficient, 0 for a gas without named components. [m3/mol]

    References
    ----------
    Each pair at 300 K from memory, over 1/T as Hyland and Wexler's table of air has it.
    """
    dry = {word: share for word, share in composition.items() if word != WATER}
    whole = sum(dry.values())
    mean = sum(share * CROSS_VIRIALS[word] for word, share in dry.items()) / whole if whole > 0 else 0.0
    return np.asarray(mean * (_REFERENCE_K / np.asarray(temperature_k, np.float64)) ** _STEEPNESS)


def enhancement_factor(
    gas: GasSurface, composition: Mapping[str, float], temperature_k: ArrayLike, pressure_pa: ArrayLike
) -> Array:
    """Water that a gas holds, over what empty space would hold.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    composition : mapping
        Mole fraction of each of its components. [-]
    temperature_k : array_like
        Temperature, near 310 K. [K]
    pressure_pa : array_like
        Pressure, absolute. [Pa]

    Returns
    -------
    ndarray
        Factor on ``Psat / P``. [-]

    Notes
    -----
    Equal fugacity of water in both phases, gas by the virial equation cut after the second coefficients:
    ``RT ln f = v (P - Psat) + a (B_gas - 2 B_cross) P - (P - Psat - a P) B_water`` with ``a = (1 - y)^2``.
    ``B_gas P`` is ``RT (Z - 1)`` of the surface.

    References
    ----------
    R. W. Hyland, A. Wexler, *ASHRAE Transactions* 89 (2A) (1983) 520; leading terms.
    """
    t, p = np.asarray(temperature_k, np.float64), np.asarray(pressure_pa, np.float64)
    rt, vapour = GAS_CONSTANT * t, water_vapour_pressure(t)
    others = (1 - np.minimum(vapour / p, MOST_HELD)) ** 2
    swell = LIQUID_VOLUME_M3_MOL * (p - vapour)
    swell = swell + others * (rt * (gas.z(t, p) - 1) - 2 * cross_virial(composition, t) * p)
    own = _OWN_M3_MOL * (_REFERENCE_K / t) ** _OWN_STEEPNESS
    return np.asarray(np.exp((swell - (p - vapour - others * p) * own) / rt))


def water_held(
    gas: GasSurface, composition: Mapping[str, float], temperature_k: ArrayLike, pressure_pa: ArrayLike
) -> Array:
    """Mole fraction of water in a gas saturated with it.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    composition : mapping
        Mole fraction of each of its components. [-]
    temperature_k : array_like
        Temperature, near 310 K. [K]
    pressure_pa : array_like
        Pressure, absolute. [Pa]

    Returns
    -------
    ndarray
        ``f Psat / P``, at most one half. [-]

    References
    ----------
    Definition of the enhancement factor; see `enhancement_factor`.
    """
    factor = enhancement_factor(gas, composition, temperature_k, pressure_pa)
    held = factor * water_vapour_pressure(temperature_k) / np.asarray(pressure_pa, np.float64)
    return np.asarray(np.minimum(held, MOST_HELD))


def per_dry(fraction: ArrayLike) -> Array:
    """Moles of water carried by a mole of dry gas.

    Parameters
    ----------
    fraction : array_like
        Mole fraction of water in the moist gas. [-]

    Returns
    -------
    ndarray
        ``y / (1 - y)``. [-]

    References
    ----------
    Definition.
    """
    y = np.asarray(fraction, np.float64)
    return np.asarray(y / (1 - y))
