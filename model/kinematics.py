"""Where the piston is: the exact slider-crank.

Angle zero is the head-end dead centre, the piston farthest from the crank. Travel is counted from there,
towards the crank.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]


def piston_travel(angle_rad: ArrayLike, stroke_m: float, rod_m: float) -> Array:
    """Travel of the piston from its head-end dead centre.

    Parameters
    ----------
    angle_rad : array_like
        Crank angle from the head-end dead centre. [rad]
    stroke_m : float
        Stroke, twice the crank radius. [m]
    rod_m : float
        Length of the connecting rod, centre to centre. [m]

    Returns
    -------
    ndarray
        Travel towards the crank, 0 to the stroke. [m]

    Notes
    -----
    ``r (1 - cos) + l (1 - q)`` with ``q = sqrt(1 - (r/l)^2 sin^2)``; exact for an in-line crank.

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15 (there cut off after the second harmonic).
    """
    radius = stroke_m / 2
    sine, cosine, q = _parts(angle_rad, radius / rod_m)
    del sine
    return np.asarray(radius * (1 - cosine) + rod_m * (1 - q))


def piston_travel_rate(angle_rad: ArrayLike, stroke_m: float, rod_m: float) -> Array:
    """First derivative of the travel by crank angle; times the speed it is the piston velocity.

    Parameters
    ----------
    angle_rad : array_like
        Crank angle from the head-end dead centre. [rad]
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]

    Returns
    -------
    ndarray
        Derivative, positive towards the crank. [m/rad]

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15.
    """
    radius = stroke_m / 2
    ratio = radius / rod_m
    sine, cosine, q = _parts(angle_rad, ratio)
    return np.asarray(radius * (sine + ratio * sine * cosine / q))


def piston_travel_curvature(angle_rad: ArrayLike, stroke_m: float, rod_m: float) -> Array:
    """Second derivative of the travel by crank angle; times the speed squared it is the acceleration.

    Parameters
    ----------
    angle_rad : array_like
        Crank angle from the head-end dead centre. [rad]
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]

    Returns
    -------
    ndarray
        Second derivative, positive towards the crank, so positive at the head-end dead centre. [m/rad2]

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15.
    """
    radius = stroke_m / 2
    ratio = radius / rod_m
    sine, cosine, q = _parts(angle_rad, ratio)
    obliquity = ratio * (cosine**2 - sine**2) / q + ratio**3 * sine**2 * cosine**2 / q**3
    return np.asarray(radius * (cosine + obliquity))


def angle_of_travel(travel_m: ArrayLike, stroke_m: float, rod_m: float) -> Array:
    """Crank angle of the outgoing half turn at which the piston has a given travel.

    Parameters
    ----------
    travel_m : array_like
        Travel from the head-end dead centre; held between 0 and the stroke. [m]
    stroke_m : float
        Stroke. [m]
    rod_m : float
        Length of the connecting rod. [m]

    Returns
    -------
    ndarray
        Angle between 0 and pi. On the way back the same travel lies at 2 pi less this angle. [rad]

    Notes
    -----
    Law of cosines in the triangle of crank, rod and line of stroke.

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15 (the triangle; the inverse is derived).
    """
    radius = stroke_m / 2
    pin = radius + rod_m - np.clip(travel_m, 0.0, stroke_m)
    cosine = (pin**2 + radius**2 - rod_m**2) / (2 * pin * radius)
    return np.asarray(np.arccos(np.clip(cosine, -1.0, 1.0)))


def mean_piston_speed(speed_rad_s: ArrayLike, stroke_m: float) -> Array:
    """Mean speed of the piston over a revolution.

    Parameters
    ----------
    speed_rad_s : array_like
        Speed of the crankshaft. [rad/s]
    stroke_m : float
        Stroke. [m]

    Returns
    -------
    ndarray
        Two strokes a revolution. [m/s]

    References
    ----------
    R. S. Khurmi, J. K. Gupta, *Theory of Machines*, chapter 15.
    """
    return np.asarray(np.asarray(speed_rad_s) * stroke_m / np.pi)


def _parts(angle_rad: ArrayLike, ratio: float) -> tuple[Array, Array, Array]:
    sine, cosine = np.sin(angle_rad), np.cos(angle_rad)
    return sine, cosine, np.sqrt(1 - (ratio * sine) ** 2)
