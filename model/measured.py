"""What the plant measured: frames of one unit's inputs, in SI."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.machine import Unit

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Measured:
    """Frames of inputs, one array (frames,) each, NaN where missing.

    A unit without a speed input runs at its rated speed, and one with a single load step is always on it;
    a speed or step that is an input but has no usable number is missing.
    """

    names: tuple[str, ...]
    values: Array  # (frames, inputs)
    assumed: Mapping[str, float]  # inputs that the unit does not have, and what stands for them

    @classmethod
    def from_inputs(cls, unit: Unit, names: Sequence[str], values: ArrayLike) -> "Measured":
        """Take the inputs of a unit as they come.

        Parameters
        ----------
        unit : Unit
            The unit.
        names : sequence of str
            Series name of each input, e.g. ``stage1.suction_pressure``.
        values : array_like
            (frames, inputs), NaN where missing; a load step is its index in the truth table. [SI]

        Returns
        -------
        Measured
            The frames.

        Raises
        ------
        ValueError
            The shape does not fit the names.
        """
        table = np.array(values, np.float64, ndmin=2)
        if table.ndim != 2 or table.shape[1] != len(names):
            raise ValueError(f"values of shape {table.shape} for {len(names)} inputs")
        assumed = {}
        if "unit.speed" not in names:
            assumed["unit.speed"] = unit.rated_speed_rad_s
        if "unit.load_step" not in names and len(unit.load_steps) == 1:
            assumed["unit.load_step"] = 0.0
        return cls(names=tuple(names), values=table, assumed=MappingProxyType(assumed))

    def like(self, values: Array) -> "Measured":
        """Other frames (frames, inputs) of the same inputs. [SI]"""
        return Measured(names=self.names, values=values, assumed=self.assumed)

    @property
    def frames(self) -> int:
        """How many frames there are."""
        return int(self.values.shape[0])

    def column(self, name: str) -> Array:
        """One input (frames,), NaN throughout where the unit has no such input. [SI]"""
        if name in self.names:
            return self.values[:, self.names.index(name)]
        return np.full(self.frames, self.assumed.get(name, np.nan))
