"""The results of an evaluation: values with a verdict each."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from model.quantities import split_series
from model.verdicts import Verdict

Array = NDArray[np.float64]
Codes = NDArray[np.uint8]


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Column:
    """One result over frames: NaN wherever the verdict is not GOOD."""

    values: Array  # (frames,) SI
    verdicts: Codes  # (frames,)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Evaluation:
    """Everything the model says about one unit, over frames."""

    frames: int
    columns: Mapping[str, Column]  # by series name

    def column(self, name: str) -> Column:
        """One result; NaN and INPUT_MISSING for what the model does not compute.

        Raises
        ------
        KeyError
            The name holds no known quantity.
        """
        if name in self.columns:
            return self.columns[name]
        split_series(name)
        return Column(
            values=np.full(self.frames, np.nan),
            verdicts=np.full(self.frames, Verdict.INPUT_MISSING, np.uint8),
        )

    def table(self, names: Sequence[str]) -> tuple[Array, Codes]:
        """Results side by side, in the order asked for.

        Parameters
        ----------
        names : sequence of str
            Series names.

        Returns
        -------
        tuple of ndarray
            Values (frames, names) [SI] and verdicts (frames, names), numbered as the agent's qualities.

        Raises
        ------
        KeyError
            A name holds no known quantity.
        """
        values = np.empty((self.frames, len(names)))
        verdicts = np.empty((self.frames, len(names)), np.uint8)
        for place, name in enumerate(names):
            column = self.column(name)
            values[:, place], verdicts[:, place] = column.values, column.verdicts
        return values, verdicts
