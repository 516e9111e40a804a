"""Standard uncertainty of the estimates: from instruments, gas, what was learned, and the model itself."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.evaluation import Column, Evaluation
from model.measured import Measured
from model.propagation import central, limit_passed
from model.quantities import PROBABILITY_SUFFIX, UNCERTAINTY_SUFFIX, Kind, split_series
from model.verdicts import Verdict

Array = NDArray[np.float64]
Runner = Callable[[Measured], Evaluation]


@dataclass(frozen=True, slots=True, kw_only=True)
class InputAccuracy:
    """Standard uncertainty of each input by its series name. [SI]

    Inputs of one group of ``shared`` are read from one transmitter: its error moves them together.
    """

    standard: Mapping[str, float]
    shared: tuple[tuple[str, ...], ...] = ()

    @classmethod
    def from_limits(
        cls, names: Sequence[str], limits: Sequence[float], transmitters: Sequence[str] | None = None
    ) -> "InputAccuracy":
        """Take limits of error as half widths of a uniform distribution: u = limit / sqrt(3).

        Parameters
        ----------
        names : sequence of str
            Series names of the inputs.
        limits : sequence of float
            Limit of error of each; 0 where it has none. [SI]
        transmitters : sequence of str or None
            Which transmitter each is read from; the same word twice is one transmitter that serves two
            inputs. None: each has its own.

        Returns
        -------
        InputAccuracy
            The standard uncertainties.

        References
        ----------
        JCGM 100:2008 (GUM), 4.3.7; 5.2.2 note 1 (full correlation of a shared instrument).
        """
        pairs = zip(names, limits, strict=True)
        groups: dict[str, list[str]] = {}
        for name, transmitter in zip(names, transmitters or names, strict=True):
            groups.setdefault(transmitter, []).append(name)
        return cls(
            standard=MappingProxyType({name: limit / 3**0.5 for name, limit in pairs if limit > 0}),
            shared=tuple(tuple(group) for group in groups.values() if len(group) > 1),
        )

    def sources(self, names: Sequence[str]) -> "tuple[InputSource, ...]":
        """What may be wrong among these inputs: one entry a transmitter, in the order of the inputs."""
        partners = {name: group for group in self.shared for name in group}
        found, taken = [], set[str]()
        for name in names:
            if name not in self.standard or name in taken:
                continue
            group = tuple(n for n in partners.get(name, (name,)) if n in self.standard and n in names)
            taken |= set(group)
            found.append(
                InputSource(
                    name=" and ".join(group),
                    places=tuple(names.index(n) for n in group),
                    standard=tuple(self.standard[n] for n in group),
                )
            )
        return tuple(found)


@dataclass(frozen=True, slots=True, kw_only=True)
class InputSource:
    """One transmitter and the inputs it serves."""

    name: str
    places: tuple[int, ...]
    standard: tuple[float, ...]  # of each, SI

    def moved(self, values: Array, by: ArrayLike) -> Array:
        """Frames (frames, inputs) with its inputs moved by a number of standard uncertainties."""
        sheet = values.copy()
        for place, u in zip(self.places, self.standard, strict=True):
            sheet[:, place] += np.asarray(by) * u
        return sheet


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Nuisance:
    """Something other than an input that is not known exactly: the gas, a learned correction.

    ``above`` and ``below`` evaluate frames with it moved up and down by ``step``.
    """

    name: str
    above: Runner
    below: Runner
    step: float = 1.0
    standard: float = 1.0  # its standard uncertainty, in the unit of ``step``


@dataclass(frozen=True, slots=True, kw_only=True)
class ModelError:
    """Standard uncertainty of an estimate that no instrument explains."""

    absolute: float = 0.0  # in the unit of the quantity
    relative: float = 0.0  # of its value
    reason: str


_SPREAD = "spread of the fast cycle about a crank-angle model with plate dynamics, healthy cylinders"
_LOADS = "steady pressures stand for pulsating ones (2 to 7 % peak to peak at the flange), and valve plates"
_EFFICIENCY = "0.5 points of volumetric efficiency near 83 %"

MODEL_ERRORS: Final[Mapping[str, ModelError]] = MappingProxyType(
    {
        "isentropic_discharge_temperature": ModelError(absolute=0.02, reason="fit of the gas surfaces"),
        "expected_discharge_temperature": ModelError(absolute=0.6, reason=_SPREAD),
        "discharge_temperature_residual": ModelError(absolute=0.6, reason=_SPREAD),
        "volumetric_efficiency": ModelError(absolute=0.005, reason=_SPREAD),
        "stage_capacity": ModelError(relative=0.006, reason=_EFFICIENCY),
        "capacity": ModelError(relative=0.006, reason=_EFFICIENCY),
        "mass_flow": ModelError(relative=0.006, reason=_EFFICIENCY),
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

NO_ERROR: Final = ModelError(reason="none known")


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Slopes:
    """Change of each result for one standard uncertainty of each source, at points (frames)."""

    results: tuple[str, ...]
    sources: tuple[str, ...]
    nominal: Array  # (frames, results)
    change: Array  # (sources, frames, results); that of a nuisance for its ``step``


def uncertain_results(evaluation: Evaluation) -> tuple[str, ...]:
    """Names of the results that have an uncertainty: estimates of the glossary, and margins."""
    found = []
    for name in evaluation.columns:
        quantity = split_series(name)[1]
        if quantity.has_uncertainty or quantity.kind is Kind.MARGIN:
            found.append(name)
    return tuple(found)


def slopes(
    run: Runner, measured: Measured, accuracy: InputAccuracy, nuisances: Sequence[Nuisance] = ()
) -> tuple[Evaluation, Slopes]:
    """Evaluate frames, and again a step of each source up and down.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results.
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    nuisances : sequence of Nuisance
        What else is not known exactly.

    Returns
    -------
    tuple
        The evaluation, and how its results move.

    Notes
    -----
    Central differences with a step of one standard uncertainty, all steps of the inputs as frames of one
    call; one-sided where the other side leaves the range of the model.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.3 note 2.
    """
    inputs, frames = accuracy.sources(measured.names), measured.frames
    sheets = [measured.values]
    for source in inputs:
        sheets += [source.moved(measured.values, 1.0), source.moved(measured.values, -1.0)]
    stacked = run(measured.like(np.concatenate(sheets)))
    columns = {
        name: Column(values=c.values[:frames], verdicts=c.verdicts[:frames])
        for name, c in stacked.columns.items()
    }
    nominal = Evaluation(frames=frames, columns=columns)
    names = uncertain_results(nominal)
    sheet = table(stacked, names).reshape(len(sheets), frames, len(names))
    change = [central(sheet[0], sheet[1 + 2 * k], sheet[2 + 2 * k]) for k in range(len(inputs))]
    for nuisance in nuisances:
        above, below = (table(r(measured), names) for r in (nuisance.above, nuisance.below))
        change.append(central(sheet[0], above, below))
    return nominal, Slopes(
        results=names,
        sources=(*(s.name for s in inputs), *(n.name for n in nuisances)),
        nominal=sheet[0],
        change=np.stack(change) if change else np.zeros((0, frames, len(names))),
    )


def model_variance(results: Sequence[str], values: Mapping[str, Column], frames: int) -> Array:
    """Square of the model's own error of each result. [SI]

    Parameters
    ----------
    results : sequence of str
        Series names; a margin has the error of what it is the margin of.
    values : mapping
        The results of the frames.
    frames : int
        How many there are. [-]

    Returns
    -------
    ndarray
        (frames, results) [SI squared]

    References
    ----------
    `MODEL_ERRORS`, each with its reason.
    """
    variance = np.zeros((frames, len(results)))
    for place, name in enumerate(results):
        base = name.removesuffix("_margin")
        error = MODEL_ERRORS.get(base.partition(".")[2], NO_ERROR)
        if error.absolute or error.relative:
            value = values[base].values if base in values else np.zeros(frames)
            variance[:, place] = error.absolute**2 + (error.relative * value) ** 2
    return variance


def attach(
    evaluation: Evaluation, results: Sequence[str], variance: Array, passed: Mapping[str, Array] | None = None
) -> Evaluation:
    """Put standard uncertainties beside results, and beside margins the probability that they are used up.

    Parameters
    ----------
    evaluation : Evaluation
        The results.
    results : sequence of str
        Which have an uncertainty.
    variance : ndarray
        (frames, results) squares of it. [SI squared]
    passed : mapping or None
        Probabilities (frames,) by margin where they are known better than by a normal distribution.

    Returns
    -------
    Evaluation
        With ``.u`` beside estimates and margins, ``.p`` beside margins.

    References
    ----------
    JCGM 106:2012, 7.3 (probability of conformity, normal distribution).
    """
    columns = dict(evaluation.columns)
    standard = np.sqrt(variance)
    for place, name in enumerate(results):
        nominal, u = evaluation.columns[name], standard[:, place]
        lost = (nominal.verdicts == Verdict.GOOD) & ~np.isfinite(u)
        verdicts = np.where(lost, np.uint8(Verdict.OUT_OF_MODEL), nominal.verdicts)
        good = verdicts == Verdict.GOOD
        columns[name + UNCERTAINTY_SUFFIX] = Column(values=np.where(good, u, np.nan), verdicts=verdicts)
        if split_series(name)[1].kind is Kind.MARGIN:
            known = None if passed is None else passed.get(name)
            p = limit_passed(nominal.values, u) if known is None else known
            columns[name + PROBABILITY_SUFFIX] = Column(values=np.where(good, p, np.nan), verdicts=verdicts)
    return Evaluation(frames=evaluation.frames, columns=columns)


def with_uncertainty(
    run: Runner, measured: Measured, accuracy: InputAccuracy, nuisances: Sequence[Nuisance] = ()
) -> Evaluation:
    """Evaluate frames and propagate the uncertainty of their inputs, each frame by itself.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results.
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    nuisances : sequence of Nuisance
        What else is not known exactly.

    Returns
    -------
    Evaluation
        Results, and beside each estimate its standard uncertainty. [SI]

    Notes
    -----
    The reference for `model.jacobian`, which does the same at a fraction of the work. The error of the model
    is added in quadrature (`MODEL_ERRORS`).

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.2 and 5.1.3 note 2.
    """
    evaluation, found = slopes(run, measured, accuracy, nuisances)
    inputs = len(found.sources) - len(nuisances)
    scale = np.array([1.0] * inputs + [n.standard / n.step for n in nuisances])
    variance = ((found.change * scale[:, None, None]) ** 2).sum(axis=0)
    variance = variance + model_variance(found.results, evaluation.columns, measured.frames)
    return attach(evaluation, found.results, variance)


def table(evaluation: Evaluation, names: Sequence[str]) -> Array:
    """Values of results side by side, (frames, results). [SI]"""
    return np.stack([evaluation.column(name).values for name in names], axis=1)
