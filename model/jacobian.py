"""Uncertainty at the price of one evaluation: slopes are taken once for all frames that lie close together.

The plane of inputs is laid out in cells: a step of one part in fifty for pressures and speed, of four kelvin
for temperatures, one cell for each load step. All frames of a cell use the slopes of its middle, unless its
sides and corners show that the slopes change within it: then each frame stands for itself. So the uncertainty
of a frame follows from the frame and nothing else: live, in replay, late or in any batch it is the same
number, and what is remembered here only saves work.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.evaluation import Evaluation
from model.measured import Measured
from model.monte_carlo import DRAWS, FEW_DEGREES, SMALL_SHARE, Drawn, drawn
from model.propagation import limit_passed
from model.quantities import split_series
from model.uncertainty import (
    InputAccuracy,
    Nuisance,
    Runner,
    Slopes,
    attach,
    model_variance,
    slopes,
    table,
    uncertain_results,
)
from model.verdicts import Verdict

Array = NDArray[np.float64]

RELATIVE_WIDTH: Final[Mapping[str, float]] = {
    "pressure": 0.02, "rotation": 0.02, "molar_flow": 0.05, "power": 0.05,
}  # fmt: skip
"""Width of a cell as a share of the value, by dimension."""
ABSOLUTE_WIDTH: Final[Mapping[str, float]] = {"temperature": 4.0}
"""Width of a cell in SI, by dimension; any other input has cells of four times its uncertainty."""
_OWN: Final[Mapping[str, float]] = {"discharge_temperature": 40.0}  # enters residuals by a straight line
KEPT: Final = 256
"""Cells remembered; a machine that stands still moves between a handful."""
_AT_ONCE: Final = 32  # cells evaluated in one call
EVEN: Final = 0.03
"""A cell is even if every uncertainty stays within this share as its slopes are taken towards each side."""


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class _Cell:
    variance: Array  # (results,) from the inputs
    nuisances: Array  # (nuisances, results) change for their step
    drawn: Mapping[str, Drawn]
    even: bool = True


CORNER: Final = 0.02
"""And if no corner lies farther off the plane of the slopes than this share of the way, in uncertainties."""

_Evenness = Callable[[Measured, Slopes, Array, Sequence[Mapping[str, Drawn]]], NDArray[np.bool_]]


class JacobianKeeper:
    """Evaluates frames of one unit with their uncertainty; remembers slopes.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results, of one unit with one gas and one set of corrections. When
        either is replaced, make a new keeper.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    nuisances : sequence of Nuisance
        What else is not known exactly.
    draws : int
        Random draws where a load hardly reverses. [-]
    """

    def __init__(
        self, run: Runner, accuracy: InputAccuracy, nuisances: Sequence[Nuisance] = (), *, draws: int = DRAWS
    ) -> None:
        if draws < 100:
            raise ValueError(f"{draws} draws tell nothing")
        self._run = run
        self._accuracy = accuracy
        self._nuisances = tuple(nuisances)
        self._draws = draws
        self.reset()

    def reset(self) -> None:
        """Forget all slopes; no number changes by it."""
        self._cells: dict[bytes, _Cell] = {}
        self.refreshed = 0  # cells evaluated so far, and frames that had to stand for themselves

    def update(self, measured: Measured, standards: Mapping[str, ArrayLike] | None = None) -> Evaluation:
        """Evaluate frames with their uncertainty.

        Parameters
        ----------
        measured : Measured
            The frames.
        standards : mapping or None
            Standard uncertainty (frames,) of nuisances by name where it is not the usual one, as that of a
            gas that ages.

        Returns
        -------
        Evaluation
            As of `model.uncertainty.with_uncertainty`, within a twentieth of each uncertainty.

        References
        ----------
        JCGM 100:2008 (GUM), 5.1; JCGM 101:2008 where a load hardly reverses.
        """
        evaluation = self._run(measured)
        results = uncertain_results(evaluation)
        good = np.stack([evaluation.columns[n].verdicts == Verdict.GOOD for n in results], axis=1)
        cells = self._of_frames(measured, results, good)
        inputs = np.stack([c.variance for c in cells])
        rest = self._nuisance_variance(cells, measured.frames, standards)
        rest = rest + model_variance(results, evaluation.columns, measured.frames)
        return attach(
            evaluation, results, inputs + rest, self._drawn_probabilities(evaluation, results, cells, rest)
        )

    # -- cells

    def _of_frames(self, measured: Measured, results: Sequence[str], good: NDArray[np.bool_]) -> list[_Cell]:
        middles = cell_middles(measured, self._accuracy)
        keys = [row.tobytes() for row in middles]
        judged = np.asarray(good.any(axis=1)).tolist()
        wanted = dict.fromkeys(key for key, any_good in zip(keys, judged, strict=True) if any_good)
        here = {key: self._cells[key] for key in wanted if key in self._cells}
        missing = [key for key in wanted if key not in here]
        for start in range(0, len(missing), _AT_ONCE):
            part = missing[start : start + _AT_ONCE]
            points = measured.like(np.stack([np.frombuffer(key, np.float64) for key in part]))
            here |= dict(zip(part, self._make(points, even=self._even), strict=True))
        self._remember(here)
        blank = _blank(len(results), len(self._nuisances))
        cells = [here.get(key, blank) for key in keys]
        # A frame stands for itself where slopes change within its cell, or the middle leaves the range.
        lost = [
            k
            for k, c in enumerate(cells)
            if good[k].any() and not (c.even and np.isfinite(_everything(c)[:, good[k]]).all())
        ]
        if lost:
            own = self._make(measured.like(measured.values[lost]), spread=[cells[k].drawn for k in lost])
            for k, cell in zip(lost, own, strict=True):
                cells[k] = cell
        return cells

    def _make(
        self,
        points: Measured,
        even: _Evenness | None = None,
        spread: Sequence[Mapping[str, Drawn]] | None = None,
    ) -> list[_Cell]:
        """Cells about points; draws, which cost most, are always those of the middle of a cell."""
        self.refreshed += points.frames
        evaluation, found = slopes(self._run, points, self._accuracy, self._nuisances)
        split = len(found.sources) - len(self._nuisances)
        squares = (found.change[:split] ** 2).sum(axis=0)
        if spread is None:
            spread = [self._drawn(points, found, k) for k in range(points.frames)]
        fixed = model_variance(found.results, evaluation.columns, points.frames)
        flat = np.ones(points.frames, np.bool_) if even is None else even(points, found, fixed, spread)
        cells = []
        for k in range(points.frames):
            for place, name in enumerate(found.results):
                known = spread[k].get(name.removesuffix("_margin"))
                if known is not None and np.isfinite(squares[k, place]):
                    squares[k, place] = known.standard**2
            cells.append(
                _Cell(
                    variance=squares[k], nuisances=found.change[split:, k], drawn=spread[k],
                    even=bool(flat[k]),
                )
            )  # fmt: skip
        return cells

    def _drawn(self, points: Measured, found: Slopes, k: int) -> dict[str, Drawn]:
        names = bending(found.results, found.nominal[k])
        one = points.like(points.values[k : k + 1])
        return drawn(self._run, one, self._accuracy, names, self._draws) if names else {}

    def _even(
        self, points: Measured, found: Slopes, fixed: Array, spread: Sequence[Mapping[str, Drawn]]
    ) -> NDArray[np.bool_]:
        """Whether slopes from the middle of each cell towards its sides give the same uncertainties."""
        sources, frames = self._accuracy.sources(points.names), points.frames
        if not sources:
            return np.ones(frames, np.bool_)
        count = len(sources)
        halves = np.stack(
            [cell_half_width(points.names[s.places[0]], points.values[:, s.places[0]], s.standard[0])
             / s.standard[0] for s in sources]
        )  # fmt: skip
        signs = np.concatenate([np.repeat(np.eye(count), 2, axis=0), _corners(count)])
        signs[1 : 2 * count : 2] *= -1
        sheets = []
        for row in signs:
            sheet = points.values
            for source, sign, half in zip(sources, row, halves, strict=True):
                sheet = source.moved(sheet, sign * half) if sign else sheet
            sheets.append(sheet)
        around = table(self._run(points.like(np.concatenate(sheets))), found.results)
        around = around.reshape(len(sheets), frames, len(found.results)) - found.nominal
        squares = found.change[:count] ** 2
        whole = squares.sum(axis=0) + fixed
        whole = np.where(whole > 0, whole, np.finfo(np.float64).tiny)
        towards = around[: 2 * count] / np.repeat(halves, 2, axis=0)[:, :, None]
        changed = np.abs(towards**2 - np.repeat(squares, 2, axis=0)) / whole
        sides = _known(changed).reshape(count, 2, frames, -1).max(axis=1).sum(axis=0)
        # A corner that a plane through the middle does not meet: off by a share of the way there.
        straight = (signs[2 * count :, :, None, None] * (halves[:, :, None] * found.change[:count])).sum(
            axis=1
        )
        way = np.sqrt((halves**2).sum(axis=0))[:, None]
        corners = _known(np.abs(around[2 * count :] - straight) / (np.sqrt(whole) * way)).max(axis=0)
        for k, known in enumerate(spread):  # draws take care of these
            for place, name in enumerate(found.results):
                if name.removesuffix("_margin") in known:
                    sides[k, place] = corners[k, place] = 0.0
        return np.asarray((sides.max(axis=1) <= 2 * EVEN) & (corners.max(axis=1) <= CORNER))

    def _remember(self, used: Mapping[bytes, _Cell]) -> None:
        for key, cell in used.items():
            self._cells.pop(key, None)
            self._cells[key] = cell
        while len(self._cells) > KEPT:
            del self._cells[next(iter(self._cells))]

    # -- frames

    def _nuisance_variance(
        self, cells: Sequence[_Cell], frames: int, standards: Mapping[str, ArrayLike] | None
    ) -> Array:
        if not self._nuisances:
            return np.zeros((frames, cells[0].variance.size))
        given = standards or {}
        scale = np.stack(
            [
                np.broadcast_to(np.asarray(given.get(n.name, n.standard), np.float64), (frames,)) / n.step
                for n in self._nuisances
            ],
            axis=1,
        )
        change = np.stack([c.nuisances for c in cells]) * scale[:, :, None]
        return np.asarray((change**2).sum(axis=1))

    def _drawn_probabilities(
        self, evaluation: Evaluation, results: Sequence[str], cells: Sequence[_Cell], rest: Array
    ) -> dict[str, Array]:
        known: dict[str, Array] = {}
        for base in sorted({name for cell in cells for name in cell.drawn}):
            name = f"{base}_margin"
            place = results.index(name)
            left, other = evaluation.columns[name].values, np.sqrt(rest[:, place])
            p = limit_passed(left, np.sqrt(rest[:, place] + [c.variance[place] for c in cells]))
            for k, cell in enumerate(cells):
                if base in cell.drawn and np.isfinite(left[k]):
                    p[k] = limit_passed(left[k] + cell.drawn[base].deviations, other[k]).mean()
            known[name] = p
        return known


def cell_middles(measured: Measured, accuracy: InputAccuracy) -> Array:
    """Middle of the cell each frame lies in.

    Parameters
    ----------
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input; one that has none is its own middle. [SI]

    Returns
    -------
    ndarray
        (frames, inputs), NaN where an input is missing. [SI]

    References
    ----------
    Own rule: cells even in the logarithm of pressure, speed, flow and power, else even in the value.
    """
    middles = np.empty_like(measured.values)
    for place, name in enumerate(measured.names):
        value, u = measured.values[:, place], accuracy.standard.get(name, 0.0)
        middles[:, place] = _middle(name, value, u) if u > 0 else value
    return np.where(np.isnan(middles), np.nan, middles + 0.0)


def cell_half_width(name: str, value: ArrayLike, standard: float) -> Array:
    """Half the width of the cell about its middle.

    Parameters
    ----------
    name : str
        Series name of the input.
    value : array_like
        The middle. [SI]
    standard : float
        Standard uncertainty of the input. [SI]

    Returns
    -------
    ndarray
        Half the width. [SI]

    References
    ----------
    Own rule: as of `cell_middles`.
    """
    relative, width = _widths(name, standard)
    return np.asarray(np.abs(value) * relative / 2 if relative else np.full(np.shape(value), width / 2))


def _widths(name: str, standard: float) -> tuple[float, float]:
    quantity = split_series(name)[1]
    relative = RELATIVE_WIDTH.get(quantity.dimension, 0.0)
    return relative, _OWN.get(quantity.key) or ABSOLUTE_WIDTH.get(quantity.dimension, 4 * standard)


def _middle(name: str, value: Array, standard: float) -> Array:
    relative, width = _widths(name, standard)
    if not relative:
        return np.asarray((np.floor(value / width) + 0.5) * width)
    width = float(np.log1p(relative))
    positive = value > 0
    index = np.floor(np.log(np.where(positive, value, 1.0)) / width)
    return np.where(positive, np.exp((index + 0.5) * width), value)


def bending(results: Sequence[str], values: Array) -> tuple[str, ...]:
    """Which results of a point bend too much for slopes: both measures of a load that hardly reverses.

    Parameters
    ----------
    results : sequence of str
        Series names.
    values : ndarray
        (results,) their values. [SI]

    Returns
    -------
    tuple of str
        Names among ``results``.

    References
    ----------
    Own rule: under 25 degrees or 6 %, where differences and draws part.
    """
    found: list[str] = []
    for place, name in enumerate(results):
        subject, _, key = name.partition(".")
        if key != "reversal_degrees":
            continue
        share = f"{subject}.reversal_percent"
        if values[place] < FEW_DEGREES or values[results.index(share)] < SMALL_SHARE:
            found += [name, share]
    return tuple(found)


def _known(values: Array) -> Array:
    """Sides and corners outside the range of the model say nothing."""
    return np.where(np.isfinite(values), values, 0.0)


def _corners(count: int) -> Array:
    """Eight corners of a cell of so many sources, each pair of sources in every mixture of signs."""
    rows, columns = np.arange(8)[:, None], np.arange(count)[None, :] % 7 + 1
    bits = sum(((rows & columns) >> k) & 1 for k in range(3))
    return np.asarray(1.0 - 2.0 * (bits % 2))


def _blank(results: int, nuisances: int) -> _Cell:
    return _Cell(variance=np.full(results, np.nan), nuisances=np.full((nuisances, results), np.nan), drawn={})


def _everything(cell: _Cell) -> Array:
    return np.concatenate([cell.variance[None, :], cell.nuisances])
