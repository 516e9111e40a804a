"""Water in the plant's gas: how much a gas can hold, and what a knock-out takes away.

Sources
-------
Saturation pressure: W. Wagner, A. Pruss, J. Phys. Chem. Ref. Data 22 (1993) 783 (IAPWS release of 1992).
Enhancement: the truncated virial equation with cross second virial coefficients near 310 K of water with
each gas, rounded, from memory of published measurements; of the order of 10 % of the enhancement.
"""

import math
from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

from simulator.gas_data import GAS_CONSTANT, GASES, WATER, mixture

_CRITICAL_K: Final = 647.096
_CRITICAL_PA: Final = 22.064e6
_COEFFICIENTS: Final = (
    (1.0, -7.85951783),
    (1.5, 1.84408259),
    (3.0, -11.7866497),
    (3.5, 22.6807411),
    (4.0, -15.9618719),
    (7.5, 1.80122502),
)
_LIQUID_VOLUME: Final = 18.1e-6  # m3/mol
EVAPORATION_HEAT_J_MOL: Final = 43.5e3  # near 310 K

# second virial coefficient of water with the gas, m3/mol
_CROSS_VIRIAL: Final = MappingProxyType(
    {
        "hydrogen": -14e-6, "helium": 15e-6, "nitrogen": -35e-6, "argon": -32e-6, "oxygen": -32e-6,
        "carbon monoxide": -40e-6, "methane": -57e-6, "ethane": -125e-6, "ethylene": -135e-6,
        "propane": -170e-6, "n-butane": -220e-6, "isobutane": -210e-6, "n-pentane": -260e-6,
        "isopentane": -250e-6, "carbon dioxide": -190e-6, "hydrogen sulfide": -300e-6,
    }
)  # fmt: skip


def saturation_pressure(temperature_k: float) -> float:
    """Vapour pressure of pure water [Pa].

    Parameters
    ----------
    temperature_k : float
        Temperature, 273.16 to 647 K [K].

    References
    ----------
    Wagner and Pruss 1993, as cited above.
    """
    tau = 1.0 - temperature_k / _CRITICAL_K
    exponent = sum(a * tau**power for power, a in _COEFFICIENTS)
    return _CRITICAL_PA * math.exp(_CRITICAL_K / temperature_k * exponent)


def enhancement(dry: Mapping[str, float], temperature_k: float, pressure_pa: float) -> float:
    """Enhancement factor: water held by the gas / water held by empty space [-].

    Parameters
    ----------
    dry : Mapping[str, float]
        Component -> mole fraction, without water.
    temperature_k : float
        Temperature, near 310 K [K].
    pressure_pa : float
        Pressure, below some 200 bar, absolute [Pa].

    Notes
    -----
    ln f = [(v_liquid + B_gas - 2 B_water-gas) P - v_liquid P_sat] / (R T), for little water in much gas. B of
    the dry gas comes from the equation of state: b - a/(R T).
    """
    gas = mixture(dry)
    a0, a1, a2 = gas.attraction
    attraction = a0 + a1 * math.sqrt(temperature_k) + a2 * temperature_k
    rt = GAS_CONSTANT * temperature_k
    total = math.fsum(x for name, x in dry.items() if name != WATER)
    own = gas.covolume_m3_mol - attraction / rt
    cross = sum(x / total * _CROSS_VIRIAL[name] for name, x in dry.items() if name != WATER)
    swell = (_LIQUID_VOLUME + own - 2.0 * cross) * pressure_pa
    return math.exp((swell - _LIQUID_VOLUME * saturation_pressure(temperature_k)) / rt)


def water_held(dry: Mapping[str, float], temperature_k: float, pressure_pa: float) -> float:
    """Mole fraction of water in a gas saturated with it [-].

    Parameters
    ----------
    dry : Mapping[str, float]
        Component -> mole fraction, without water.
    temperature_k : float
        Temperature [K].
    pressure_pa : float
        Pressure, absolute [Pa].
    """
    factor = enhancement(dry, temperature_k, pressure_pa)
    return min(0.9, factor * saturation_pressure(temperature_k) / pressure_pa)


def wetted(dry: Mapping[str, float], water_fraction: float) -> dict[str, float]:
    """Composition of the moist gas.

    Parameters
    ----------
    dry : Mapping[str, float]
        Component -> mole fraction; water in it is left out.
    water_fraction : float
        Mole fraction of water in the moist gas [-].
    """
    base = {name: x for name, x in dry.items() if name != WATER}
    total = math.fsum(base.values())
    moist = {name: x / total * (1.0 - water_fraction) for name, x in base.items()}
    if water_fraction > 0.0:
        moist[WATER] = water_fraction
    return moist


assert _CROSS_VIRIAL.keys() | {WATER} == GASES.keys(), "every gas needs a cross virial coefficient"
