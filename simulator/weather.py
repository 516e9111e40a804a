"""The weather over the invented site: season, day and a slow random part.

Every value is a pure function of the instant and the seed, so that a live plant and a history of years agree
on any minute and none of them has to remember anything.
"""

import math
from typing import Final, overload

import numpy as np

from simulator.gas_data import Floats

DAY_S: Final = 86_400.0
YEAR_S: Final = 365.25 * DAY_S

# Air of a mild coastal climate (invented site).
_MEAN_K: Final = 282.5
_SEASON_K: Final = 8.5
_WARMEST_DAY: Final = 205.0  # of the year
_DAY_K: Final = 2.6  # mean over the year; half as much again in summer, half as much in winter
_WARMEST_HOUR_S: Final = 14.0 * 3600.0  # UTC
_WANDER_K: Final = 3.0  # standard deviation
_WAVES: Final = 11
_SHORTEST_S: Final = 1.5 * DAY_S
_LONGEST_S: Final = 40.0 * DAY_S

# What follows the air with a lag: share of the air's swing that arrives at once-a-year speed, mean, lag.
_WATER_MEAN_K: Final = 298.0
_WATER_SHARE: Final = 0.55
_WATER_LAG_S: Final = 6.0 * 3600.0  # basin of the cooling tower
_GROUND_MEAN_K: Final = 283.0
_GROUND_SHARE: Final = 0.85
_GROUND_LAG_S: Final = 30.0 * DAY_S  # soil around a buried line


class Weather:
    """The weather of one seed.

    Parameters
    ----------
    seed : int
        Of the random part alone; season and day are the same for all.
    """

    def __init__(self, seed: int) -> None:
        chance = np.random.default_rng([seed, 0x5EA50])
        steps = (np.arange(_WAVES) + chance.uniform(0.0, 1.0, _WAVES)) / _WAVES
        period = _SHORTEST_S * (_LONGEST_S / _SHORTEST_S) ** steps
        self._pace = 2.0 * math.pi / period
        self._phase = chance.uniform(0.0, 2.0 * math.pi, _WAVES)

    @overload
    def ambient_k(self, unix_s: float) -> float: ...
    @overload
    def ambient_k(self, unix_s: Floats) -> Floats: ...
    def ambient_k(self, unix_s: float | Floats) -> float | Floats:
        """Temperature of the air in the shade.

        Parameters
        ----------
        unix_s : float or Floats
            Instant, UTC [s].

        Returns
        -------
        float or Floats
            Temperature [K].
        """
        return _like(unix_s, _MEAN_K + self._swing(unix_s, 0.0))

    @overload
    def cooling_water_k(self, unix_s: float) -> float: ...
    @overload
    def cooling_water_k(self, unix_s: Floats) -> Floats: ...
    def cooling_water_k(self, unix_s: float | Floats) -> float | Floats:
        """Temperature of the cooling water as it reaches the coolers.

        Parameters
        ----------
        unix_s : float or Floats
            Instant, UTC [s].

        Returns
        -------
        float or Floats
            Temperature [K].
        """
        return _like(unix_s, _WATER_MEAN_K + _WATER_SHARE * self._swing(unix_s, _WATER_LAG_S))

    @overload
    def ground_k(self, unix_s: float) -> float: ...
    @overload
    def ground_k(self, unix_s: Floats) -> Floats: ...
    def ground_k(self, unix_s: float | Floats) -> float | Floats:
        """Temperature of the soil around a buried gas line.

        Parameters
        ----------
        unix_s : float or Floats
            Instant, UTC [s].

        Returns
        -------
        float or Floats
            Temperature [K].
        """
        return _like(unix_s, _GROUND_MEAN_K + _GROUND_SHARE * self._swing(unix_s, _GROUND_LAG_S))

    def _swing(self, unix_s: float | Floats, lag_s: float) -> Floats:
        """The air's departure from its mean [K], behind a first-order lag: each wave weaker and later."""
        at = np.asarray(unix_s, dtype=float)
        warmth = _wave(2.0 * math.pi / YEAR_S, at - _WARMEST_DAY * DAY_S, lag_s)
        day = _wave(2.0 * math.pi / DAY_S, at - _WARMEST_HOUR_S, lag_s)
        wander = np.zeros_like(at)
        for pace, phase in zip(self._pace, self._phase, strict=True):
            wander += _wave(float(pace), at + phase / pace, lag_s)
        wander *= _WANDER_K * math.sqrt(2.0 / _WAVES)
        return np.asarray(_SEASON_K * warmth + _DAY_K * (1.0 + 0.5 * warmth) * day + wander)


def _wave(pace_rad_s: float, since_top_s: Floats, lag_s: float) -> Floats:
    """A cosine of unit height as it looks behind a first-order lag."""
    turned = pace_rad_s * lag_s
    return np.asarray(np.cos(pace_rad_s * since_top_s - math.atan(turned)) / math.sqrt(1.0 + turned**2))


def _like(asked: float | Floats, answer: Floats) -> float | Floats:
    return answer if isinstance(asked, np.ndarray) else float(answer)
