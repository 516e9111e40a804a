"""What the plant's gas is made of: published constants of pure gases and their mixing, in SI and per mole.

Sources
-------
Heat capacities: B. J. McBride, S. Gordon, M. A. Reno, Coefficients for Calculating Thermodynamic and
Transport Properties of Individual Species, NASA TM-4513 (1993), low range, cp/R = c0 + c1 T + ... + c4 T^4.
Critical constants, acentric factors and Lennard-Jones parameters: B. E. Poling, J. M. Prausnitz,
J. P. O'Connell, The Properties of Gases and Liquids, 5th ed. (2001), appendices A and B (from memory).
Equation of state: G. Soave, Chem. Eng. Sci. 27 (1972) 1197, all interaction parameters zero.
Viscosity: Chapman-Enskog with the collision integral of P. D. Neufeld, A. R. Janzen, R. A. Aziz,
J. Chem. Phys. 57 (1972) 1100; mixtures after F. Herning, L. Zipperer (1936). Conductivity: A. Eucken (1913).
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
import numpy.typing as npt

GAS_CONSTANT: Final = 8.314462618  # J/(mol K)
REFERENCE_TEMPERATURE_K: Final = 298.15  # every gas has enthalpy zero here as an ideal gas
WATER: Final = "water"

Floats = npt.NDArray[np.float64]


class UnknownGasError(ValueError):
    def __init__(self, name: str) -> None:
        super().__init__(f"no constants for the gas {name!r}; known are {', '.join(sorted(GASES))}")
        self.name = name


@dataclass(frozen=True, slots=True, kw_only=True)
class PureGas:
    molar_mass_kg_mol: float
    critical_temperature_k: float
    critical_pressure_pa: float
    acentric_factor: float
    heat_capacity: tuple[float, float, float, float, float]  # cp/R, powers of T in kelvin
    collision_diameter_angstrom: float
    well_depth_k: float


def _gas(
    molar_mass_g_mol: float, critical: tuple[float, float, float], well: tuple[float, float], *cp: float
) -> PureGas:
    tc, pc_bar, omega = critical
    sigma, eps = well
    c0, c1, c2, c3, c4 = cp
    return PureGas(
        molar_mass_kg_mol=molar_mass_g_mol * 1e-3, critical_temperature_k=tc,
        critical_pressure_pa=pc_bar * 1e5, acentric_factor=omega,
        heat_capacity=(c0, c1, c2, c3, c4), collision_diameter_angstrom=sigma, well_depth_k=eps,
    )  # fmt: skip


# fmt: off
GASES: Final[Mapping[str, PureGas]] = MappingProxyType({
    "hydrogen": _gas(2.01588, (32.98, 12.93, -0.217), (2.827, 59.7),
        2.34433112, 0.00798052075, -1.9478151e-05, 2.01572094e-08, -7.37611761e-12),
    "methane": _gas(16.0425, (190.56, 45.99, 0.011), (3.758, 148.6),
        5.14987613, -0.0136709788, 4.91800599e-05, -4.84743026e-08, 1.66693956e-11),
    "ethane": _gas(30.0690, (305.32, 48.72, 0.099), (4.443, 215.7),
        4.29142492, -0.0055015427, 5.99438288e-05, -7.08466285e-08, 2.68685771e-11),
    "propane": _gas(44.0956, (369.83, 42.48, 0.152), (5.118, 237.1),
        4.2110262, 0.00171599803, 7.06183472e-05, -9.19594116e-08, 3.64421372e-11),
    "n-butane": _gas(58.1222, (425.12, 37.96, 0.200), (4.687, 531.4),
        6.14746806, 0.000155947389, 9.67913517e-05, -1.2548391e-07, 4.97816555e-11),
    "isobutane": _gas(58.1222, (407.85, 36.40, 0.186), (5.278, 330.1),
        4.45479276, 0.00826057985, 8.29886664e-05, -1.14647642e-07, 4.64570101e-11),
    "n-pentane": _gas(72.1488, (469.70, 33.70, 0.252), (5.784, 341.1),
        1.8983679, 0.041203037, 1.2312175e-05, -3.6589501e-08, 1.5042509e-11),
    "isopentane": _gas(72.1488, (460.39, 33.81, 0.229), (5.784, 341.1),
        1.0832882, 0.044571076, 8.2389934e-06, -3.5258047e-08, 1.5785762e-11),
    "ethylene": _gas(28.0532, (282.34, 50.41, 0.087), (4.163, 224.7),
        3.95920148, -0.00757052247, 5.70990292e-05, -6.91588753e-08, 2.69884373e-11),
    "nitrogen": _gas(28.0134, (126.20, 33.98, 0.037), (3.798, 71.4),
        3.53100528, -0.000123660987, -5.02999437e-07, 2.43530612e-09, -1.40881235e-12),
    "oxygen": _gas(31.9988, (154.58, 50.43, 0.022), (3.467, 106.7),
        3.78245636, -0.00299673415, 9.847302e-06, -9.68129508e-09, 3.24372836e-12),
    "carbon dioxide": _gas(44.0095, (304.12, 73.74, 0.225), (3.941, 195.2),
        2.35677352, 0.00898459677, -7.12356269e-06, 2.45919022e-09, -1.43699548e-13),
    "carbon monoxide": _gas(28.0101, (132.85, 34.94, 0.045), (3.690, 91.7),
        3.57953347, -0.00061035368, 1.01681433e-06, 9.07005884e-10, -9.04424499e-13),
    "hydrogen sulfide": _gas(34.0809, (373.40, 89.63, 0.090), (3.623, 301.1),
        3.9323476, -0.00050260905, 4.5928473e-06, -3.1807214e-09, 6.6497561e-13),
    "water": _gas(18.01528, (647.14, 220.64, 0.344), (2.641, 809.1),
        4.19864056, -0.0020364341, 6.52040211e-06, -5.48797062e-09, 1.77197817e-12),
    "helium": _gas(4.002602, (5.19, 2.27, -0.390), (2.551, 10.22), 2.5, 0.0, 0.0, 0.0, 0.0),
    "argon": _gas(39.948, (150.86, 48.98, -0.002), (3.542, 93.3), 2.5, 0.0, 0.0, 0.0, 0.0),
})
# fmt: on


@dataclass(frozen=True, slots=True, kw_only=True)
class Mixture:
    """A gas of fixed composition: the constants its equation of state needs.

    With every interaction parameter zero the attraction is a(T) = a0 + a1 sqrt(T) + a2 T, exactly.
    """

    molar_mass_kg_mol: float
    attraction: tuple[float, float, float]  # Pa m6/mol2, and per sqrt(K), per K
    covolume_m3_mol: float
    heat_capacity: tuple[float, ...]  # cp/R of the ideal gas, powers of T

    def ideal_heat_capacity(self, temperature_k: float) -> float:
        """Ideal-gas molar heat capacity at constant pressure [J/(mol K)]."""
        return GAS_CONSTANT * sum(c * temperature_k**i for i, c in enumerate(self.heat_capacity))

    def ideal_enthalpy(self, temperature_k: float) -> float:
        """Ideal-gas molar enthalpy, zero at 298.15 K [J/mol]."""
        t0 = REFERENCE_TEMPERATURE_K
        powers = (
            c / (i + 1) * (temperature_k ** (i + 1) - t0 ** (i + 1)) for i, c in enumerate(self.heat_capacity)
        )
        return GAS_CONSTANT * sum(powers)


def mixture(composition: Mapping[str, float]) -> Mixture:
    """Mix pure gases.

    Parameters
    ----------
    composition : Mapping[str, float]
        Component name -> mole fraction; the fractions are normalised to one.

    Raises
    ------
    UnknownGasError
        A component is not in the table.

    Notes
    -----
    The quadratic mixing rule with a_ij = sqrt(a_i a_j) is a perfect square, and the square root of each
    a_i is linear in sqrt(T); hence three constants hold the whole temperature dependence. Valid for
    200 K to 1000 K.

    References
    ----------
    Soave 1972, as cited above.
    """
    total = math.fsum(composition.values())
    constant = slope = covolume = mass = 0.0
    heat_capacity = np.zeros(5)
    for name, amount in composition.items():
        gas = GASES.get(name)
        if gas is None:
            raise UnknownGasError(name)
        x = amount / total
        tc, pc, w = gas.critical_temperature_k, gas.critical_pressure_pa, gas.acentric_factor
        root = math.sqrt(0.42747 * (GAS_CONSTANT * tc) ** 2 / pc)
        m = 0.480 + 1.574 * w - 0.176 * w**2
        constant += x * root * (1.0 + m)
        slope += x * root * m / math.sqrt(tc)
        covolume += x * 0.08664 * GAS_CONSTANT * tc / pc
        mass += x * gas.molar_mass_kg_mol
        heat_capacity += x * np.asarray(gas.heat_capacity)
    return Mixture(
        molar_mass_kg_mol=mass,
        attraction=(constant**2, -2.0 * constant * slope, slope**2),
        covolume_m3_mol=covolume,
        heat_capacity=tuple(float(c) for c in heat_capacity),
    )


def _pure_viscosity(gas: PureGas, temperature_k: float) -> float:
    t = temperature_k / gas.well_depth_k
    collision = 1.16145 * t**-0.14874 + 0.52487 * math.exp(-0.77320 * t) + 2.16178 * math.exp(-2.43787 * t)
    root = math.sqrt(gas.molar_mass_kg_mol * 1e3 * temperature_k)
    return float(2.6693e-6 * root / (gas.collision_diameter_angstrom**2 * collision))


def transport(composition: Mapping[str, float], temperature_k: float) -> tuple[float, float]:
    """Viscosity [Pa s] and thermal conductivity [W/(m K)] of a dilute gas mixture.

    Parameters
    ----------
    composition : Mapping[str, float]
        Component name -> mole fraction.
    temperature_k : float
        Temperature [K].

    Returns
    -------
    viscosity [Pa s], thermal conductivity [W/(m K)].

    Notes
    -----
    Good to some 10 %: it feeds a wall-heat correlation that is no better known than that.

    References
    ----------
    Neufeld et al. 1972; Herning and Zipperer 1936; Eucken 1913, as cited above.
    """
    weight_sum = viscosity = conductivity = 0.0
    for name, x in composition.items():
        gas = GASES[name]
        mu = _pure_viscosity(gas, temperature_k)
        cv = GAS_CONSTANT * (sum(c * temperature_k**i for i, c in enumerate(gas.heat_capacity)) - 1.0)
        weight = x * math.sqrt(gas.molar_mass_kg_mol)
        weight_sum += weight
        viscosity += weight * mu
        conductivity += weight * mu / gas.molar_mass_kg_mol * (cv + 2.25 * GAS_CONSTANT)
    return viscosity / weight_sum, conductivity / weight_sum
