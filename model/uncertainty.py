"""Standard uncertainty of the estimates, from the instruments and from the model itself."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.evaluation import Column, Evaluation
from model.measured import Measured
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, split_series
from model.verdicts import Verdict

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class InputAccuracy:
    """Standard uncertainty of each input by its series name. [SI]"""

    standard: Mapping[str, float]

    @classmethod
    def from_limits(cls, names: Sequence[str], limits: Sequence[float]) -> "InputAccuracy":
        """Take limits of error as half widths of a uniform distribution: u = limit / sqrt(3).

        Parameters
        ----------
        names : sequence of str
            Series names of the inputs.
        limits : sequence of float
            Limit of error of each; 0 where it has none. [SI]

        Returns
        -------
        InputAccuracy
            The standard uncertainties.

        References
        ----------
        JCGM 100:2008 (GUM), 4.3.7.
        """
        pairs = zip(names, limits, strict=True)
        return cls(standard=MappingProxyType({name: limit / 3**0.5 for name, limit in pairs if limit > 0}))


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelError:
    """Standard uncertainty of an estimate that no instrument explains."""

    absolute: float = 0.0  # in the unit of the quantity
    relative: float = 0.0  # of its value
    reason: str


_SPREAD = "spread of the fast cycle about a crank-angle model with plate dynamics, healthy cylinders"
_LOADS = "steady pressures stand for pulsating ones (2 to 7 % peak to peak at the flange), and valve plates"

MODEL_ERRORS: Final[Mapping[str, ModelError]] = MappingProxyType(
    {
        "isentropic_discharge_temperature": ModelError(absolute=0.02, reason="fit of the gas surfaces"),
        "expected_discharge_temperature": ModelError(absolute=0.6, reason=_SPREAD),
        "discharge_temperature_residual": ModelError(absolute=0.6, reason=_SPREAD),
        "volumetric_efficiency": ModelError(absolute=0.005, reason=_SPREAD),
        "stage_capacity": ModelError(relative=0.006, reason="0.5 points of volumetric efficiency near 83 %"),
        "capacity": ModelError(relative=0.006, reason="0.5 points of volumetric efficiency near 83 %"),
        "mass_flow": ModelError(relative=0.006, reason="0.5 points of volumetric efficiency near 83 %"),
        "capacity_residual": ModelError(absolute=0.006, reason="as of the capacity"),
        "stage_power": ModelError(relative=0.01, reason=_SPREAD),
        "power": ModelError(relative=0.01, reason=_SPREAD),
        "gas_load_tension": ModelError(relative=0.02, reason=_LOADS),
        "gas_load_compression": ModelError(relative=0.02, reason=_LOADS),
        "pin_load_tension": ModelError(relative=0.02, reason=_LOADS),
        "pin_load_compression": ModelError(relative=0.02, reason=_LOADS),
        "reversal_degrees": ModelError(absolute=np.pi / 180, reason=_SPREAD),
        "reversal_percent": ModelError(absolute=0.01, reason=_SPREAD),
    }
)
"""Error of the model, added in quadrature: no published uncertainty is smaller than these."""


def with_uncertainty(
    run: Callable[[Measured], Evaluation], measured: Measured, accuracy: InputAccuracy
) -> Evaluation:
    """Evaluate frames and propagate the uncertainty of their inputs.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results.
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]

    Returns
    -------
    Evaluation
        Results, and beside each estimate its standard uncertainty. [SI]

    Notes
    -----
    Central differences with a step of one standard uncertainty, all steps as frames of one call; one-sided
    where the other side leaves the range of the model. Inputs count as independent: a transmitter shared by
    several cylinders moves them together, which no single number of theirs shows. The error of the model is
    added in quadrature (`MODEL_ERRORS`).

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.2 and 5.1.3 note 2.
    """
    inputs = [
        (place, accuracy.standard[name])
        for place, name in enumerate(measured.names)
        if name in accuracy.standard
    ]
    sheets = [measured.values]
    for place, u in inputs:
        for sign in (1.0, -1.0):
            sheet = measured.values.copy()
            sheet[:, place] += sign * u
            sheets.append(sheet)
    stacked = Measured(names=measured.names, values=np.concatenate(sheets), assumed=measured.assumed)
    evaluation = run(stacked)
    frames = measured.frames
    columns: dict[str, Column] = {}
    for name, column in evaluation.columns.items():
        values = column.values.reshape(1 + 2 * len(inputs), frames)
        nominal = Column(values=values[0], verdicts=column.verdicts[:frames])
        columns[name] = nominal
        quantity = split_series(name)[1]
        if QUANTITIES[quantity.key].has_uncertainty:
            columns[name + UNCERTAINTY_SUFFIX] = _uncertainty(
                quantity.key, nominal, values[1::2], values[2::2]
            )
    return Evaluation(frames=frames, columns=columns)


def _uncertainty(key: str, nominal: Column, above: Array, below: Array) -> Column:
    """Standard uncertainty of one estimate from its values (inputs, frames) a step above and below."""
    rise, fall = above - nominal.values, nominal.values - below
    slope = np.where(np.isnan(rise), fall, np.where(np.isnan(fall), rise, (rise + fall) / 2))
    error = MODEL_ERRORS.get(key)
    square = (slope**2).sum(axis=0)
    if error is not None:
        square = square + error.absolute**2 + (error.relative * nominal.values) ** 2
    u = np.sqrt(square)
    lost = (nominal.verdicts == Verdict.GOOD) & ~np.isfinite(u)
    return Column(values=u, verdicts=np.where(lost, np.uint8(Verdict.OUT_OF_MODEL), nominal.verdicts))
