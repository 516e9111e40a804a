"""The plant's gas law: Soave-Redlich-Kwong with closed-form departures, per mole, compiled.

A gas is a row of constants (`gas_row`): three of the attraction, the covolume, five of the heat capacity,
an enthalpy offset, the molar mass and two constants of orifice flow.
"""

import math
from typing import Final

import numpy as np

from simulator.compiled import compiled
from simulator.gas_data import GAS_CONSTANT, REFERENCE_TEMPERATURE_K, Floats, Mixture

A0: Final = 0
A1: Final = 1
A2: Final = 2
COVOLUME: Final = 3
CP0: Final = 4  # and four more
OFFSET: Final = 9
MOLAR_MASS: Final = 10
CRITICAL_RATIO: Final = 11
CHOKED_SQUARED: Final = 12  # square of the critical-flow constant
COLUMNS: Final = 13

_R: Final = GAS_CONSTANT


def critical_flow(isentropic_exponent: float) -> tuple[float, float]:
    """Critical pressure ratio and critical-flow constant of a nozzle.

    Parameters
    ----------
    isentropic_exponent : float
        K of the gas, dimensionless [-].

    Returns
    -------
    critical pressure ratio [-], critical-flow constant C* [-], mass flow = C* A P / sqrt(R T).

    References
    ----------
    One-dimensional gas dynamics, any textbook: r* = (2/(k+1))^(k/(k-1)), C*^2 = k (2/(k+1))^((k+1)/(k-1)).
    """
    k = isentropic_exponent
    base = 2.0 / (k + 1.0)
    return base ** (k / (k - 1.0)), math.sqrt(k * base ** ((k + 1.0) / (k - 1.0)))


def gas_row(gas: Mixture, isentropic_exponent: float | None = None) -> Floats:
    """Lay the constants of a gas out for the compiled functions.

    Parameters
    ----------
    gas : Mixture
        The mixture.
    isentropic_exponent : float | None
        K for orifice flow; cp/cv of the ideal gas at 350 K if not given [-].
    """
    row = np.zeros(COLUMNS)
    row[A0 : A2 + 1] = gas.attraction
    row[COVOLUME] = gas.covolume_m3_mol
    row[CP0 : CP0 + 5] = gas.heat_capacity
    row[OFFSET] = _R * sum(
        c / (i + 1) * REFERENCE_TEMPERATURE_K ** (i + 1) for i, c in enumerate(gas.heat_capacity)
    )
    row[MOLAR_MASS] = gas.molar_mass_kg_mol
    if isentropic_exponent is None:
        cp = gas.ideal_heat_capacity(350.0)
        isentropic_exponent = cp / (cp - _R)
    ratio, constant = critical_flow(isentropic_exponent)
    row[CRITICAL_RATIO] = ratio
    row[CHOKED_SQUARED] = constant**2
    return row


@compiled
def gas_state(temperature_k: float, volume_m3_mol: float, gas: Floats) -> tuple[float, float, float, float]:
    """Pressure [Pa], its slope with temperature at fixed volume [Pa/K], enthalpy [J/mol], cv [J/(mol K)].

    Parameters
    ----------
    temperature_k : float
        Temperature [K].
    volume_m3_mol : float
        Molar volume [m3/mol].
    gas : Floats
        Row of constants.

    References
    ----------
    Soave 1972; the departures follow by integrating P(v) at constant T.
    """
    t = temperature_k
    v = volume_m3_mol
    b = gas[COVOLUME]
    root = math.sqrt(t)
    a = gas[A0] + gas[A1] * root + gas[A2] * t
    slope = 0.5 * gas[A1] / root + gas[A2]
    curvature = -0.25 * gas[A1] / (root * t)
    free = 1.0 / (v - b)
    pull = 1.0 / (v * (v + b))
    pressure = _R * t * free - a * pull
    pressure_slope = _R * free - slope * pull
    log_term = math.log1p(b / v) / b if b > 0.0 else 1.0 / v
    c0, c1, c2, c3, c4 = gas[CP0], gas[CP0 + 1], gas[CP0 + 2], gas[CP0 + 3], gas[CP0 + 4]
    cp = c0 + t * (c1 + t * (c2 + t * (c3 + t * c4)))
    ideal = _R * t * (c0 + t * (c1 / 2 + t * (c2 / 3 + t * (c3 / 4 + t * c4 / 5)))) - gas[OFFSET]
    enthalpy = ideal - _R * t + pressure * v + (t * slope - a) * log_term
    return pressure, pressure_slope, enthalpy, _R * (cp - 1.0) + t * curvature * log_term


@compiled
def gas_volume(temperature_k: float, pressure_pa: float, gas: Floats) -> float:
    """Molar volume of the gas phase [m3/mol]: the largest root, by Newton steps from above.

    Parameters
    ----------
    temperature_k : float
        Temperature [K].
    pressure_pa : float
        Pressure, absolute [Pa].
    gas : Floats
        Row of constants.
    """
    t = temperature_k
    b = gas[COVOLUME]
    a = gas[A0] + gas[A1] * math.sqrt(t) + gas[A2] * t
    ideal = _R * t / pressure_pa
    # cubic in v: v^3 - ideal v^2 + (a/P - b ideal - b^2) v - a b/P
    linear = a / pressure_pa - b * ideal - b * b
    last = -a * b / pressure_pa
    v: float = ideal + b  # above the largest root
    for _ in range(60):
        value = ((v - ideal) * v + linear) * v + last
        derivative = (3.0 * v - 2.0 * ideal) * v + linear
        step = value / derivative
        v -= step
        if abs(step) < 1e-14 * v:
            break
    return v


@compiled
def gas_temperature(enthalpy_j_mol: float, pressure_pa: float, guess_k: float, gas: Floats) -> float:
    """Temperature of the gas phase from enthalpy and pressure [K].

    Parameters
    ----------
    enthalpy_j_mol : float
        Molar enthalpy [J/mol].
    pressure_pa : float
        Pressure, absolute [Pa].
    guess_k : float
        Where to start [K].
    gas : Floats
        Row of constants.
    """
    t = guess_k
    for _ in range(50):
        v = gas_volume(t, pressure_pa, gas)
        _, pt, h, cv = gas_state(t, v, gas)
        p_up, _, _, _ = gas_state(t, v * 1.0001, gas)
        p_down, _, _, _ = gas_state(t, v * 0.9999, gas)
        cp = cv - t * pt * pt / ((p_up - p_down) / (0.0002 * v))
        step = (h - enthalpy_j_mol) / cp
        t -= step
        if abs(step) < 1e-9 * t:
            break
    return t


@compiled
def gas_enthalpy(temperature_k: float, pressure_pa: float, gas: Floats) -> float:
    """Molar enthalpy of the gas phase, zero for the ideal gas at 298.15 K [J/mol].

    Parameters
    ----------
    temperature_k : float
        Temperature [K].
    pressure_pa : float
        Pressure, absolute [Pa].
    gas : Floats
        Row of constants.
    """
    _, _, enthalpy, _ = gas_state(temperature_k, gas_volume(temperature_k, pressure_pa, gas), gas)
    return enthalpy
