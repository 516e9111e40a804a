"""What is left before an entered limit."""

import math
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.quantities import LOWER_LIMITS, UPPER_LIMITS

Array = NDArray[np.float64]

FULL_REVERSAL: Final = {"reversal_degrees": math.pi, "reversal_percent": 1.0}
"""The most a load can reverse: half a turn, and as hard one way as the other."""


def margin(quantity_key: str, value: ArrayLike, limit: ArrayLike) -> Array:
    """What is left between a value and its limit; below zero once the limit is passed.

    Parameters
    ----------
    quantity_key : str
        Key of a quantity that may have a limit.
    value : array_like
        Present value. [SI]
    limit : array_like
        Limit entered. [SI]

    Returns
    -------
    ndarray
        Limit less value for an upper limit, value less limit for a lower one. [SI]

    Raises
    ------
    KeyError
        The quantity takes no limit.
    """
    difference = np.asarray(limit, np.float64) - np.asarray(value, np.float64)
    return np.asarray(_sign(quantity_key) * difference)


def share_left(quantity_key: str, value: ArrayLike, limit: ArrayLike, rest: ArrayLike | None = None) -> Array:
    """What is left, as a share of the way from rest to the limit; it ranks margins of different kinds.

    Parameters
    ----------
    quantity_key : str
        Key of a quantity that may have a limit.
    value : array_like
        Present value. [SI]
    limit : array_like
        Limit entered. [SI]
    rest : array_like or None
        Value far from trouble: the suction temperature for a discharge temperature. None stands for no load
        (loads) and for full reversal. [SI]

    Returns
    -------
    ndarray
        1 at rest, 0 at the limit, below zero past it; NaN where rest lies on the wrong side of the limit. [-]

    Raises
    ------
    KeyError
        The quantity takes no limit, or needs a rest value and has none.
    """
    if rest is None:
        rest = FULL_REVERSAL[quantity_key] if quantity_key in LOWER_LIMITS else _no_load(quantity_key)
    whole = margin(quantity_key, rest, limit)
    return np.asarray(margin(quantity_key, value, limit) / np.where(whole > 0, whole, np.nan))


def _sign(quantity_key: str) -> int:
    if quantity_key in UPPER_LIMITS:
        return 1
    if quantity_key in LOWER_LIMITS:
        return -1
    raise KeyError(quantity_key)


def _no_load(quantity_key: str) -> float:
    if quantity_key.endswith(("_tension", "_compression")):
        return 0.0
    raise KeyError(quantity_key)
