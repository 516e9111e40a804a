"""Slider-crank and rod examples, through our kinematics and loads."""

import math
from collections.abc import Mapping

import numpy as np

from model.kinematics import piston_travel_curvature, piston_travel_rate
from model.rodload import gas_load, inertia_load, reversal

Inputs = Mapping[str, float]
GRAVITY = 9.81  # as the books take it


def velocity(x: Inputs) -> float:
    """[m/s]"""
    return float(x["speed"] * piston_travel_rate(x["angle"], x["stroke"], x["rod"]))


def acceleration(x: Inputs) -> float:
    """[m/s2]"""
    return float(x["speed"] ** 2 * piston_travel_curvature(x["angle"], x["stroke"], x["rod"]))


def inertia(x: Inputs) -> float:
    """Force of the moving masses, tension positive [N]."""
    return float(
        inertia_load(x["mass"], x["speed"], piston_travel_curvature(x["angle"], x["stroke"], x["rod"]))
    )


def gas_push(x: Inputs) -> float:
    """Gas force from the cover towards the crank, as the books count it; pressures are above ambient [N]."""
    area = math.pi / 4 * x["bore"] ** 2
    rod_area = math.pi / 4 * x.get("rod_diameter", 0.0) ** 2
    gas = gas_load(
        x["cover_pressure"], x.get("crank_pressure", 0.0), head_area_m2=area, crank_area_m2=area - rod_area,
        ambient_pressure_pa=0.0,
    )  # fmt: skip
    return -float(gas)


def push(x: Inputs) -> float:
    """Net force from the cover towards the crank [N]."""
    return gas_push(x) - inertia(x)


def vertical_push(x: Inputs) -> float:
    """The same with the crank below, where the weight helps [N]."""
    return push(x) + x["mass"] * GRAVITY


def inertia_only_reversal(x: Inputs) -> float:
    """Duration of the shorter sign of the load where there is no gas in the cylinder [deg]."""
    angle = np.arange(3600) * (2 * math.pi / 3600)
    load = inertia_load(100.0, 1.0, piston_travel_curvature(angle, x["stroke"], x["rod"]))
    peaks = np.array([load.max()]), np.array([-load.min()])
    return math.degrees(float(reversal(load[None, :], *peaks).duration_rad[0]))
