"""What is not known exactly beside the inputs: the gas, and the learned corrections."""

from collections.abc import Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.calibration import CORRECTIONS, Calibration, corrections_from
from model.corrections import Corrections
from model.errors import CompositionError
from model.evaluate import evaluate
from model.evaluation import Column, Evaluation
from model.gas import load_or_build, normalised
from model.machine import GasDomain, Unit
from model.measured import Measured
from model.surface import GasSurface
from model.uncertainty import Nuisance, Runner

Array = NDArray[np.float64]

GAS: Final = "gas composition"
CALIBRATION: Final = "calibration"
GAS_STEP: Final = 0.01
"""Shift of the composition by which its slope is taken: one mole per hundred."""


def calibrated(
    unit: Unit, gas: GasSurface, calibration: Calibration | None, *, direction: int = 0, by: float = 0.0
) -> Runner:
    """The evaluation of a unit with its calibration, one set of corrections a load step.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    calibration : Calibration or None
        The one in force; None for a machine nobody has calibrated.
    direction : int
        Which independent direction of the calibration to move along. [-]
    by : float
        How far, in standard uncertainties. [-]

    Returns
    -------
    callable
        From frames to results; frames of any load steps together.

    References
    ----------
    `model.evaluate`.
    """
    if calibration is None:
        return lambda measured: evaluate(unit, gas, Corrections.nominal(), measured)
    sets: dict[int, Corrections] = {}
    for entry in unit.load_steps:
        corrections = calibration.corrections_of(entry.index)
        if by:
            root = np.linalg.cholesky(calibration.covariance_of(entry.index))
            values = np.array([getattr(corrections, name) for name in CORRECTIONS])
            corrections = corrections_from(values + by * root[:, direction])
        sets[entry.index] = corrections

    def run(measured: Measured) -> Evaluation:
        return _by_step(unit, gas, sets, measured)

    return run


def _by_step(unit: Unit, gas: GasSurface, sets: Mapping[int, Corrections], measured: Measured) -> Evaluation:
    """Frames of each set of corrections in one call; a load step without any is evaluated all the same."""
    step = measured.column("unit.load_step")
    usual = next(iter(sets.values()))
    groups: dict[Corrections, Array] = {}
    for value in np.unique(step):
        corrections = sets.get(int(value), usual) if np.isfinite(value) and value == int(value) else usual
        rows = np.isnan(step) if np.isnan(value) else step == value
        groups[corrections] = groups.get(corrections, np.zeros(step.size, np.bool_)) | rows
    if len(groups) == 1:
        return evaluate(unit, gas, next(iter(groups)), measured)
    columns: dict[str, Column] = {}
    for corrections, rows in groups.items():
        part = evaluate(unit, gas, corrections, measured.like(measured.values[rows]))
        for name, column in part.columns.items():
            if name not in columns:
                columns[name] = Column(
                    values=np.full(step.size, np.nan), verdicts=np.zeros(step.size, np.uint8)
                )
            columns[name].values[rows] = column.values
            columns[name].verdicts[rows] = column.verdicts
    return Evaluation(frames=measured.frames, columns=columns)


def calibration_nuisances(unit: Unit, gas: GasSurface, calibration: Calibration) -> tuple[Nuisance, ...]:
    """The uncertainty a calibration leaves, as independent directions.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    calibration : Calibration
        The calibration.

    Returns
    -------
    tuple of Nuisance
        One for each correction, all of one name: a budget shows them as one line.

    References
    ----------
    JCGM 100:2008 (GUM), 5.2.2 (correlated inputs), by the triangular root of their covariance.
    """
    return tuple(
        Nuisance(
            name=CALIBRATION,
            above=calibrated(unit, gas, calibration, direction=k, by=1.0),
            below=calibrated(unit, gas, calibration, direction=k, by=-1.0),
        )
        for k in range(len(CORRECTIONS))
    )


def shifted_composition(composition: Mapping[str, float], shift: float) -> Mapping[str, float]:
    """A gas in which the largest component gave way to all others in proportion.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component. [-]
    shift : float
        Mole fraction taken from the largest; below zero it gains. [-]

    Returns
    -------
    mapping
        Mole fractions that sum to one. [-]

    Raises
    ------
    CompositionError
        The gas has one component, or the shift would leave a fraction outside 0 to 1.

    Notes
    -----
    Along this line a hydrogen loses purity and a natural gas gets heavier: the direction in which molar mass
    and temperature rise move most for one mole per hundred.

    References
    ----------
    Own choice of one number for a composition nobody has measured since.
    """
    fractions = normalised(composition)
    largest = max(fractions, key=lambda word: fractions[word])
    rest = 1 - fractions[largest]
    if rest <= 0 or not 0 < fractions[largest] - shift < 1:
        raise CompositionError(f"a composition that cannot shift by {shift:g}: {largest} {1 - rest:g}")
    return MappingProxyType(
        {
            word: value - shift if word == largest else value * (1 + shift / rest)
            for word, value in fractions.items()
        }
    )


def gas_nuisance(
    unit: Unit,
    calibration: Calibration | None,
    above: GasSurface,
    below: GasSurface,
    *,
    step: float = GAS_STEP,
    standard: float,
) -> Nuisance:
    """The gas as something that may have shifted.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    calibration : Calibration or None
        The calibration in force.
    above : GasSurface
        The gas shifted by a step.
    below : GasSurface
        The gas shifted by as much the other way.
    step : float
        The shift. [-]
    standard : float
        Standard uncertainty of the shift while the analysis is fresh. [-]

    Returns
    -------
    Nuisance
        Its standard uncertainty at each frame is `gas_standard`.

    References
    ----------
    `shifted_composition`.
    """
    return Nuisance(
        name=GAS, above=calibrated(unit, above, calibration), below=calibrated(unit, below, calibration),
        step=step, standard=standard,
    )  # fmt: skip


def shifted_gases(
    composition: Mapping[str, float],
    domain: GasDomain,
    cache_dir: Path | None = None,
    *,
    step: float = GAS_STEP,
) -> tuple[GasSurface, GasSurface]:
    """The gas a step above and a step below.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component. [-]
    domain : GasDomain
        Range of temperature and pressure to tabulate. [K, Pa]
    cache_dir : Path or None
        Folder of the cache.
    step : float
        The shift; less where the gas has no more of the others to lose. [-]

    Returns
    -------
    tuple of GasSurface
        Above and below.

    Raises
    ------
    CompositionError
        As of `shifted_composition`.

    References
    ----------
    `shifted_composition`.
    """
    up, down = (shifted_composition(composition, sign * step) for sign in (1, -1))
    return load_or_build(up, domain, cache_dir), load_or_build(down, domain, cache_dir)


def gas_standard(age_s: ArrayLike, *, fresh: float, growth_per_hour: float) -> Array:
    """Standard uncertainty of the composition, growing with the age of its analysis.

    Parameters
    ----------
    age_s : array_like
        Age of the analysis; counts as nothing where it is below zero. [s]
    fresh : float
        Standard uncertainty of a fresh one. [-]
    growth_per_hour : float
        What each hour adds. [1/h]

    Returns
    -------
    ndarray
        Standard uncertainty of the shift. [-]

    References
    ----------
    Common practice: a band that widens evenly with age; both numbers are the site's.
    """
    return np.asarray(fresh + growth_per_hour * np.maximum(np.asarray(age_s, np.float64), 0.0) / 3600)
