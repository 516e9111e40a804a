# ruff: noqa: PLR0917 - compiled functions take plain positional arguments
"""Flow through one opening and the motion of one valve plate, compiled."""

import math
from typing import Final

from simulator.compiled import compiled

RESTITUTION: Final = 0.2  # speed kept after a plate strikes its stop or seat (invented plant)
DAMPING: Final = 0.2  # of critical (invented plant)
LINEAR_BELOW: Final = 2e-4  # share of the upstream pressure below which flow is taken as laminar

# Largest share of a pressure difference that one step may remove. Where the gas on one side is small, a
# step would overshoot and ring; the flow is then held back. Mass and energy stay exact: only a flow changes.
LARGEST_STEP: Final = 1.5
_STIFFNESS: Final = 1.35  # polytropic stiffness of the gas, taken a little high


@compiled
def flow_function(pressure_ratio: float, critical_ratio: float, choked_squared: float) -> float:
    """Dimensionless mass flow of a nozzle, mass flow / (A sqrt(P rho)), no powers taken.

    Parameters
    ----------
    pressure_ratio : float
        Downstream / upstream pressure, 0 to 1 [-].
    critical_ratio : float
        Critical pressure ratio r* [-].
    choked_squared : float
        Square of the critical-flow constant C* [-].

    Notes
    -----
    An ellipse through the choked point, its axis blended so that the limit of small differences is exact
    as well: sqrt(2 (1 - r)). Within 0.4 % of the nozzle equation everywhere for k from 1.1 to 1.67 (tested).
    """
    span = 1.0 - critical_ratio
    if 1.0 - pressure_ratio < LINEAR_BELOW:
        return math.sqrt(2.0 / LINEAR_BELOW) * (1.0 - pressure_ratio)
    z = (pressure_ratio - critical_ratio) / span
    if z <= 0.0:
        return math.sqrt(choked_squared)
    return math.sqrt((choked_squared + (span - choked_squared) * z) * (1.0 - z * z))


@compiled
def molar_flow(
    area_m2: float,
    upstream_pa: float,
    downstream_pa: float,
    concentration_mol_m3: float,
    molar_mass_kg_mol: float,
    critical_ratio: float,
    choked_squared: float,
) -> float:
    """Molar flow through an effective area from the higher to the lower pressure [mol/s].

    Parameters
    ----------
    area_m2 : float
        Effective area, discharge coefficient included [m2].
    upstream_pa, downstream_pa : float
        Pressures, the upstream one not below the other [Pa].
    concentration_mol_m3 : float
        Upstream molar density [mol/m3].
    molar_mass_kg_mol : float
        Molar mass [kg/mol].
    critical_ratio : float
        Critical pressure ratio r* [-].
    choked_squared : float
        Square of the critical-flow constant C* [-].
    """
    psi = flow_function(downstream_pa / upstream_pa, critical_ratio, choked_squared)
    return area_m2 * math.sqrt(upstream_pa * concentration_mol_m3 / molar_mass_kg_mol) * psi


@compiled
def held_back(
    flow_mol_s: float, difference_pa: float, pressure_pa: float, per_mole: float, step_s: float
) -> tuple[float, float]:
    """The flow that one explicit step can bear [mol/s], and 1.0 if that is less than asked.

    Parameters
    ----------
    flow_mol_s : float
        Flow asked for [mol/s].
    difference_pa : float
        Pressure difference that drives it [Pa].
    pressure_pa : float
        Pressure of the smaller volume [Pa].
    per_mole : float
        Sum of 1/n over the volumes it joins [1/mol].
    step_s : float
        Time step [s].
    """
    removed = step_s * _STIFFNESS * pressure_pa * abs(flow_mol_s) * per_mole
    allowed = LARGEST_STEP * abs(difference_pa)
    if removed > allowed:
        return flow_mol_s * allowed / removed, 1.0
    return flow_mol_s, 0.0


@compiled
def plate_step(
    lift: float,
    speed: float,
    difference_pa: float,
    preload_pa: float,
    full_lift_pa: float,
    frequency_rad_s: float,
    step_s: float,
) -> tuple[float, float]:
    """Move a plate of a valve on by one step: a damped spring between seat (0) and stop (1).

    Parameters
    ----------
    lift : float
        Lift as share of full lift [-].
    speed : float
        Its rate [1/s].
    difference_pa : float
        Pressure difference that opens it [Pa].
    preload_pa : float
        Difference that just lifts it [Pa].
    full_lift_pa : float
        Difference that holds it at full lift, at rest [Pa].
    frequency_rad_s : float
        Natural frequency on its springs [rad/s].
    step_s : float
        Time step [s].

    Returns
    -------
    lift [-], speed [1/s]: implicit in the spring and the damping, so that no step length makes it ring.
    """  # fmt: skip
    w = frequency_rad_s * step_s
    drive = (difference_pa - preload_pa) / (full_lift_pa - preload_pa) - lift
    speed = (speed + frequency_rad_s * w * drive) / (1.0 + 2.0 * DAMPING * w + w * w)
    lift += step_s * speed
    if lift < 0.0:
        return 0.0, (-RESTITUTION * speed if speed < 0.0 else speed)
    if lift > 1.0:
        return 1.0, (-RESTITUTION * speed if speed > 0.0 else speed)
    return lift, speed
