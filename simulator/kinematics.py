"""Slider-crank of the plant and the load at its crosshead pin, in a throw's own crank angle."""

import math
from dataclasses import dataclass

import numpy as np

from simulator.gas_data import Floats


@dataclass(frozen=True, slots=True, kw_only=True)
class Motion:
    """Piston motion over one turn: angle zero is the head-end dead centre, x grows towards the crank."""

    angle_rad: Floats  # (n,)
    position_m: Floats
    per_radian_m: Floats  # dx/dtheta
    per_radian_squared_m: Floats  # d2x/dtheta2


def motion(stroke_m: float, connecting_rod_m: float, steps: int) -> Motion:
    """Exact slider-crank motion at equal angles.

    Parameters
    ----------
    stroke_m : float
        Stroke [m].
    connecting_rod_m : float
        Length between the pins of the connecting rod [m].
    steps : int
        Angles per turn [-].

    Notes
    -----
    The distance crank centre to crosshead pin is r cos + sqrt(L^2 - r^2 sin^2); differentiated twice.

    References
    ----------
    Any theory-of-machines textbook, e.g. Khurmi and Gupta, Theory of Machines, chapter 15.
    """
    r, rod = 0.5 * stroke_m, connecting_rod_m
    angle = np.linspace(0.0, 2.0 * math.pi, steps, endpoint=False)
    sin, cos = np.sin(angle), np.cos(angle)
    reach = np.sqrt(rod**2 - (r * sin) ** 2)
    swing = r**2 * sin * cos / reach
    return Motion(
        angle_rad=angle,
        position_m=r + rod - r * cos - reach,
        per_radian_m=r * sin + swing,
        per_radian_squared_m=r * cos + (r**2 * (cos**2 - sin**2) + swing**2) / reach,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Reversal:
    """How the load at the pin changes sign: the longest unbroken stretch of the rarer sign, and its peak."""

    angle_rad: float
    share: float  # lesser peak / greater peak
    crossings: int


def _longest_run(excess: Floats) -> float:
    """Longest circular stretch of positive values, in samples, ends interpolated."""
    above = excess > 0.0
    if above.all():
        return float(len(excess))
    if not above.any():
        return 0.0
    start = int(np.argmin(above))  # a value not above: runs do not wrap from here
    values = np.append(np.roll(excess, -start), excess[start])
    positive = values > 0.0
    rises = np.flatnonzero(~positive[:-1] & positive[1:])
    falls = np.flatnonzero(positive[:-1] & ~positive[1:])
    begin = rises + values[rises] / (values[rises] - values[rises + 1])
    end = falls + values[falls] / (values[falls] - values[falls + 1])
    return float((end - begin).max())


def reversal(load_n: Floats) -> Reversal:
    """Reversal of a load over one turn.

    Parameters
    ----------
    load_n : Floats
        Load at equal angles, tension positive [N], shape (n,).

    Notes
    -----
    A load below 0.2 % of the greater peak counts as none.
    """
    peak_tension, peak_compression = max(0.0, float(load_n.max())), max(0.0, float(-load_n.min()))
    greater = max(peak_tension, peak_compression)
    if greater == 0.0:
        return Reversal(angle_rad=0.0, share=0.0, crossings=0)
    threshold = 0.002 * greater
    tension, compression = load_n - threshold, -load_n - threshold
    minor = tension if np.count_nonzero(tension > 0.0) < np.count_nonzero(compression > 0.0) else compression
    samples = _longest_run(minor)
    signs = np.sign(np.where(np.abs(load_n) > threshold, load_n, 0.0))
    signs = signs[signs != 0.0]
    return Reversal(
        angle_rad=samples * 2.0 * math.pi / len(load_n) if samples < len(load_n) else 0.0,
        share=min(peak_tension, peak_compression) / greater,
        crossings=int(np.count_nonzero(signs != np.roll(signs, 1))),
    )
