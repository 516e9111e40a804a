"""The driver of a machine: electrical power from indicated power and back, and speed from slip."""

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

_PASSES: Final = 12  # of Newton on the inverse; the curve is all but straight


@dataclass(frozen=True, slots=True, kw_only=True)
class DriverCurve:
    """What stands between the feeder and the gas, as entered or as usual of such machines.

    ``factor`` is the one number that is learned of a unit: all that the rest has wrong in proportion.
    """

    rated_power_w: float  # at the shaft
    mechanical_efficiency: float = 0.94  # common practice: indicated power over what running gear takes
    friction_w: float = 0.0  # fixed, beside that
    motor_loads: tuple[float, ...] = (0.25, 0.5, 0.75, 1.0)  # of rated shaft power
    motor_efficiencies: tuple[float, ...] = (0.90, 0.94, 0.955, 0.96)  # common practice: large motors
    factor: float = 1.0
    synchronous_speed_rad_s: float = 0.0  # of an induction motor; 0 for one that does not slip
    full_load_slip: float = 0.0


def motor_losses(driver: DriverCurve, load: ArrayLike) -> Array:
    """Losses of the motor over its rated power.

    Parameters
    ----------
    driver : DriverCurve
        The driver.
    load : array_like
        Shaft power over rated shaft power. [-]

    Returns
    -------
    ndarray
        ``a + b load^2``, fitted to the efficiencies entered. [-]

    Notes
    -----
    Losses and not efficiencies are joined between the points entered: they stay finite at no load, where the
    efficiency is zero.

    References
    ----------
    Constant and square-law losses of electrical machines; any text on them.
    """
    points = np.asarray(driver.motor_loads, np.float64)
    losses = points / np.asarray(driver.motor_efficiencies, np.float64) - points
    squares = points**2
    if points.size == 1:
        return np.asarray(losses[0] * np.ones_like(np.asarray(load, np.float64)))
    spread = squares - squares.mean()
    slope = float((spread * (losses - losses.mean())).sum() / (spread**2).sum())
    return np.asarray(losses.mean() - slope * squares.mean() + slope * np.asarray(load, np.float64) ** 2)


def electrical_power(driver: DriverCurve, indicated_w: ArrayLike) -> Array:
    """Power at the feeder.

    Parameters
    ----------
    driver : DriverCurve
        The driver.
    indicated_w : array_like
        Indicated power of all ends. [W]

    Returns
    -------
    ndarray
        ``factor (W / (eta_m eta_motor(load)) + friction)``, the friction through the motor as well. [W]

    References
    ----------
    First law; definitions of the two efficiencies.
    """
    shaft = np.asarray(indicated_w, np.float64) / driver.mechanical_efficiency + driver.friction_w
    losses = motor_losses(driver, shaft / driver.rated_power_w) * driver.rated_power_w
    return np.asarray(driver.factor * (shaft + losses))


def indicated_power(driver: DriverCurve, electrical_w: ArrayLike) -> Array:
    """Indicated power behind a power at the feeder: the inverse of `electrical_power`.

    Parameters
    ----------
    driver : DriverCurve
        The driver.
    electrical_w : array_like
        Power at the feeder. [W]

    Returns
    -------
    ndarray
        Indicated power; NaN where the feeder gives less than the losses of a machine that does nothing. [W]

    References
    ----------
    Newton's method.
    """
    target = np.asarray(electrical_w, np.float64)
    step = 1e-4 * driver.rated_power_w
    guess = np.asarray(target * driver.mechanical_efficiency * 0.95)
    for _ in range(_PASSES):
        slope = (electrical_power(driver, guess + step) - electrical_power(driver, guess - step)) / (2 * step)
        guess = guess - (electrical_power(driver, guess) - target) / slope
    return np.asarray(np.where(target >= electrical_power(driver, 0.0), guess, np.nan))


def learned_factor(driver: DriverCurve, indicated_w: ArrayLike, electrical_w: ArrayLike) -> float:
    """The one factor of a unit, from healthy frames.

    Parameters
    ----------
    driver : DriverCurve
        The driver; its own factor does not count.
    indicated_w : array_like
        Indicated power expected. [W]
    electrical_w : array_like
        Power measured at the feeder. [W]

    Returns
    -------
    float
        Median of measured over expected, over the frames that have both; NaN without any. [-]

    References
    ----------
    The median: half of the frames may be wrong.
    """
    ratio = np.asarray(electrical_w) / (electrical_power(driver, indicated_w) / driver.factor)
    usable = ratio[np.isfinite(ratio)]
    return float(np.median(usable)) if usable.size else float("nan")


def slipping_speed(driver: DriverCurve, indicated_w: ArrayLike) -> Array:
    """Speed of an induction motor, where nobody measures it.

    Parameters
    ----------
    driver : DriverCurve
        The driver, with its synchronous speed.
    indicated_w : array_like
        Indicated power. [W]

    Returns
    -------
    ndarray
        ``synchronous (1 - slip load)``. [rad/s]

    References
    ----------
    Slip in proportion to torque near full load; any text on induction machines.
    """
    shaft = np.asarray(indicated_w, np.float64) / driver.mechanical_efficiency + driver.friction_w
    slip = driver.full_load_slip * shaft / driver.rated_power_w
    return np.asarray(driver.synchronous_speed_rad_s * (1 - slip))
