"""The law of propagation of uncertainty, for any function of uncertain numbers."""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

Array = NDArray[np.float64]

_SQRT2: Final = math.sqrt(2.0)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Propagated:
    """Results of a function of uncertain inputs."""

    value: Array  # (results,)
    standard: Array  # (results,)
    correlation: Array  # (results, results)
    contributions: Array  # (inputs, results), change of a result for one standard uncertainty of an input


def propagate(
    function: Callable[[Array], Array],
    value: ArrayLike,
    standard: ArrayLike,
    correlation: ArrayLike | None = None,
) -> Propagated:
    """Propagate standard uncertainties through a function, to first order.

    Parameters
    ----------
    function : callable
        From points (n, inputs) to results (n, results).
    value : array_like
        (inputs,) the best estimate of each input. [own unit]
    standard : array_like
        (inputs,) standard uncertainty of each. [own unit]
    correlation : array_like or None
        (inputs, inputs) coefficients of correlation; None for independent inputs. [-]

    Returns
    -------
    Propagated
        Values, standard uncertainties and how the results go together.

    Notes
    -----
    Central differences with a step of one standard uncertainty: all points in one call.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.2, 5.1.3 note 2, 5.2.2.
    """
    x, u = np.asarray(value, np.float64), np.asarray(standard, np.float64)
    steps = np.diag(u)
    found = function(np.concatenate([x[None, :], x + steps, x - steps]))
    above, below = found[1 : 1 + x.size], found[1 + x.size :]
    slopes = central(found[:1], above, below)
    r = np.eye(x.size) if correlation is None else np.asarray(correlation, np.float64)
    covariance = (slopes[:, None, :, None] * r[:, :, None, None] * slopes[None, :, None, :]).sum(axis=(0, 1))
    spread = np.sqrt(np.diagonal(covariance))
    known = np.where(spread > 0, spread, np.nan)
    return Propagated(
        value=found[0], standard=spread, contributions=slopes,
        correlation=covariance / np.outer(known, known),
    )  # fmt: skip


def central(nominal: Array, above: Array, below: Array) -> Array:
    """Half the way from below to above; where one side is lost, the way from the other.

    Parameters
    ----------
    nominal : ndarray
        Results in the middle; broadcasts. [any]
    above : ndarray
        Results a step above. [any]
    below : ndarray
        Results a step below. [any]

    Returns
    -------
    ndarray
        Change for one step; NaN where both sides are lost. [any]

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.3 note 2.
    """
    rise, fall = above - nominal, nominal - below
    return np.where(np.isnan(rise), fall, np.where(np.isnan(fall), rise, (rise + fall) / 2))


_erfc = np.frompyfunc(math.erfc, 1, 1)


def limit_passed(margin: ArrayLike, standard: ArrayLike) -> Array:
    """Probability that a limit is passed, given what is left of it by estimate.

    Parameters
    ----------
    margin : array_like
        What is left. [any]
    standard : array_like
        Its standard uncertainty. [same]

    Returns
    -------
    ndarray
        1/2 at the limit; 0 or 1 where nothing is uncertain; NaN where the margin is. [-]

    References
    ----------
    JCGM 106:2012, 7.3 (normal distribution).
    """
    left, u = np.asarray(margin, np.float64), np.asarray(standard, np.float64)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(u > 0, left / u, np.where(left == 0, 0.0, np.copysign(np.inf, left)))
    share = np.where(np.isnan(left), np.nan, share)
    return np.asarray(_erfc(share / _SQRT2) / 2, np.float64)
