"""Which stage draws less than the others say: relative capacities, without any flow meter.

Without side streams the same dry gas passes every stage. Each stage tells by its own pressures and
temperature how much that is; their weighted mean is the flow of the machine, and a stage that departs from it
leaks, slips or has lost an end. All of them together say nothing: what is common to all needs a flow meter.
"""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.surface import GasSurface
from model.wet import water_held

Array = NDArray[np.float64]

DEFAULT_UNCERTAINTY: Final = 0.01
"""Relative standard uncertainty of what a stage draws, where nobody gives a better one."""


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class RelativeCapacity:
    """Stages against each other, (frames,) or (frames, stages)."""

    flow_mol_s: Array  # dry flow at the suction header that the stages agree on
    deviation: Array  # what a stage could draw at its own pressures over what passes it, less one
    deviation_u: Array  # standard uncertainty of that; the mean shares in the stage, and is allowed for
    worst_stage: NDArray[np.intp]  # index of the stage that departs most from the others; -1 for none

    def significant(self, factor: float = 3.0) -> NDArray[np.bool_]:
        """Whether the worst stage departs by more than its uncertainty."""
        score = np.abs(self.deviation) / np.where(self.deviation_u > 0, self.deviation_u, np.inf)
        return np.asarray(np.nan_to_num(score).max(axis=1) > factor)


def relative_capacity(
    dry_capacity_mol_s: ArrayLike,
    passed_share: ArrayLike = 1.0,
    uncertainty: ArrayLike | Callable[[Array], Array] = DEFAULT_UNCERTAINTY,
) -> RelativeCapacity:
    """Compare the stages of one service.

    Parameters
    ----------
    dry_capacity_mol_s : array_like
        (frames, stages) dry gas that each stage draws at its own measured pressures and temperature, as the
        healthy model says; NaN where it cannot be told. [mol/s]
    passed_share : array_like
        (stages,) or (frames, stages) dry gas that passes a stage over that from the header: above one where a
        recycle joins, below one behind a loss. [-]
    uncertainty : array_like or callable
        Relative standard uncertainty of each capacity, or what makes it of the capacities. [-]

    Returns
    -------
    RelativeCapacity
        Flow and deviations. A stage that leaks could draw more, if it were healthy, than passes it: its
        deviation is positive.

    Notes
    -----
    Weights are one over the square of the uncertainty; logarithms are averaged. With the uncertainty s of a
    stage and S of the mean, that of the deviation is ``sqrt(s^2 - S^2)``: the stage is part of the mean. The
    worst stage is the one whose removal lets the rest agree best, which is the one of the largest
    ``|deviation| / uncertainty``. Several services on one frame are separate trains: compare each alone.

    References
    ----------
    JCGM 100:2008 (GUM), weighted mean; largest normalised residual for the outlier.
    """
    capacity = np.atleast_2d(np.asarray(dry_capacity_mol_s, np.float64))
    flows = capacity / np.broadcast_to(np.asarray(passed_share, np.float64), capacity.shape)
    given = uncertainty(capacity) if callable(uncertainty) else uncertainty
    spread = np.broadcast_to(np.asarray(given, np.float64), capacity.shape)
    usable = np.isfinite(flows) & (flows > 0) & np.isfinite(spread) & (spread > 0)
    logs = np.log(np.where(usable, flows, 1.0))
    weights = np.where(usable, 1 / np.where(usable, spread, 1.0) ** 2, 0.0)
    whole = weights.sum(axis=1)
    enough = usable.sum(axis=1) >= 1
    total = np.where(enough, whole, np.nan)
    mean = (weights * logs).sum(axis=1) / total
    apart = np.where(usable, logs - mean[:, None], np.nan)
    left = np.sqrt(np.maximum(spread**2 - 1 / total[:, None], 0.0))
    several = usable.sum(axis=1) >= 2
    score = np.where(
        usable & (left > 0) & several[:, None], np.abs(apart) / np.where(left > 0, left, 1), -1.0
    )
    return RelativeCapacity(
        flow_mol_s=np.exp(mean), deviation=np.expm1(apart), deviation_u=np.where(usable, left, np.nan),
        worst_stage=np.where(several, score.argmax(axis=1), -1),
    )  # fmt: skip


def dry_capacities(
    gas: GasSurface,
    composition: Mapping[str, float],
    capacity_mol_s: ArrayLike,
    suction_temperature_k: ArrayLike,
    suction_pressure_pa: ArrayLike,
    *,
    saturation: ArrayLike = 0.0,
) -> Array:
    """Dry gas that each stage draws, from the moist gas it draws.

    Parameters
    ----------
    gas : GasSurface
        The gas.
    composition : mapping
        Mole fraction of each of its components. [-]
    capacity_mol_s : array_like
        (frames, stages) moist gas, as the expected capacity of each stage is. [mol/s]
    suction_temperature_k : array_like
        (frames, stages) measured. [K]
    suction_pressure_pa : array_like
        (frames, stages) measured, absolute. [Pa]
    saturation : array_like
        Water at the first suction over what the gas could hold there; 0 for dry gas. [-]

    Returns
    -------
    ndarray
        (frames, stages) dry gas. [mol/s]

    Notes
    -----
    Behind each cooler the gas is saturated, or as dry as it came.

    References
    ----------
    See `model.wet`.
    """
    capacity = np.atleast_2d(np.asarray(capacity_mol_s, np.float64))
    share = np.asarray(saturation, np.float64)
    if not share.any():
        return capacity
    held = water_held(gas, composition, suction_temperature_k, suction_pressure_pa)
    held = np.atleast_2d(held).copy()
    held[:, 0] *= share
    return np.asarray(capacity * (1 - np.minimum.accumulate(held, axis=1)))
