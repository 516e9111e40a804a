"""What holds a machine from outside, and what it does then: the two ends of `model.train`."""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.errors import OutOfRange
from model.evaluation import Codes
from model.train_sketch import Sketch
from model.train_streams import LEAST_LEFT
from model.verdicts import Verdict

Array = NDArray[np.float64]

RESIDUAL: Final = 1e-9
"""Largest logarithm left of any balance."""


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class TrainBoundary:
    """What holds a machine from outside, frame by frame: (frames,) arrays or plain numbers, in SI.

    Pressures are those of the headers. A recycle is a flow of dry gas, or a share of what the stage before
    its tap delivers, or both together; the first one is taken behind the first cooler, the final one behind
    the last.
    """

    suction_pressure_pa: ArrayLike
    suction_temperature_k: ArrayLike
    discharge_pressure_pa: ArrayLike
    speed_rad_s: ArrayLike
    load_step: ArrayLike = 0
    cooling_k: ArrayLike = 303.15  # of water or air; (frames, stages) where coolers differ
    water_saturation: ArrayLike = 0.0  # water at the suction header over what the gas could hold there
    first_recycle_mol_s: ArrayLike = 0.0
    first_recycle_share: ArrayLike = 0.0
    final_recycle_mol_s: ArrayLike = 0.0
    final_recycle_share: ArrayLike = 0.0
    packing_mol_s: ArrayLike = 0.0  # dry gas lost to the vents; (frames, stages) where known by stage
    stage_suction_k: ArrayLike = np.nan  # (frames, stages): measured, in place of the cooler's; NaN: not

    @property
    def frames(self) -> int:
        """How many frames there are."""
        return max(np.size(getattr(self, f.name)) for f in fields(self) if f.name not in BY_STAGE)


BY_STAGE: Final = frozenset({"cooling_k", "packing_mol_s", "stage_suction_k"})


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class TrainSolution:
    """The machine solved: (frames,) or (frames, stages) arrays, NaN where ``codes`` says why not."""

    codes: Codes  # of model.verdicts
    residual: Array  # largest logarithm left of any balance
    iterations: NDArray[np.intp]  # full evaluations of all stages
    suction_pressure_pa: Array  # in the suction bottles
    discharge_pressure_pa: Array  # in the discharge bottles
    suction_temperature_k: Array
    discharge_temperature_k: Array
    cooled_temperature_k: Array
    suction_flow_mol_s: Array  # moist gas at the suction flanges
    dry_flow_mol_s: Array  # dry gas at the suction flanges
    water_fraction: Array  # of the gas drawn in
    condensate_mol_s: Array  # drained behind each cooler
    power_w: Array  # indicated
    inlet_dry_mol_s: Array  # from the suction header
    export_dry_mol_s: Array  # to the discharge header
    inlet_flow_mol_s: Array  # moist
    export_flow_mol_s: Array  # moist
    first_recycle_mol_s: Array  # dry
    final_recycle_mol_s: Array  # dry
    first_left: Array  # share of the gas at each tap that its recycle leaves, as asked for
    final_left: Array
    unknowns: Array  # (frames, stages + 1), and the sketch there: where another solution may start from
    sketch: Sketch

    @property
    def unit_power_w(self) -> Array:
        """Indicated power of the machine. [W]"""
        return np.asarray(self.power_w.sum(axis=1))

    def require(self) -> "TrainSolution":
        """The solution, if every frame has one.

        Returns
        -------
        TrainSolution
            Itself.

        Raises
        ------
        OutOfRange
            A recycle takes more gas than there is, or a state leaves the range of the model.

        References
        ----------
        Plumbing; no formula.
        """
        for name in ("first_left", "final_left"):
            left = getattr(self, name)
            if (left < LEAST_LEFT).any():
                raise OutOfRange(name, float(np.nanmin(left)), LEAST_LEFT, 1.0)
        if (self.codes != Verdict.GOOD).any():
            raise OutOfRange("residual", float(np.nanmax(self.residual, initial=0.0)), 0.0, RESIDUAL)
        return self
