"""Random draws, for results that bend too much for a slope: a load that hardly reverses."""

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.measured import Measured
from model.uncertainty import InputAccuracy, Runner

Array = NDArray[np.float64]

DRAWS: Final = 1000
"""Draws on a live machine: the spread of that many is known to 2 %."""
FEW_DEGREES: Final = np.radians(25.0)
SMALL_SHARE: Final = 0.06
"""Below either of these a reversal bends and is cut off at nothing: slopes do not describe it."""
_QUANTILES: Final = 64  # stand for the draws where a probability is asked for


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Drawn:
    """Spread of one result over draws of the inputs."""

    standard: float  # SI
    deviations: Array  # (quantiles,) from the result of the undisturbed inputs, SI


def seed_of(values: Array) -> int:
    """Seed that belongs to a frame, so that the same frame is always drawn the same way.

    Parameters
    ----------
    values : ndarray
        The inputs of one frame. [SI]

    Returns
    -------
    int
        The seed. [-]

    References
    ----------
    Own rule: a digest of the numbers.
    """
    plain = np.where(np.isnan(values), np.nan, values + 0.0)  # one kind of missing, one kind of zero
    return int.from_bytes(hashlib.blake2b(plain.astype("<f8").tobytes(), digest_size=8).digest(), "little")


def draw_frames(measured: Measured, accuracy: InputAccuracy, draws: int) -> Measured:
    """Draw the inputs of one frame, each transmitter evenly within its limit of error.

    Parameters
    ----------
    measured : Measured
        One frame.
    accuracy : InputAccuracy
        Standard uncertainty of each input; inputs of one transmitter move together. [SI]
    draws : int
        How many. [-]

    Returns
    -------
    Measured
        The frame undisturbed, then the draws.

    References
    ----------
    JCGM 101:2008, 6.4.2 (rectangular distributions).
    """
    frame = measured.values[0]
    generator = np.random.default_rng(seed_of(frame))
    values = np.tile(frame, (draws + 1, 1))
    for source in accuracy.sources(measured.names):
        by = np.concatenate([[0.0], generator.uniform(-1.0, 1.0, draws) * np.sqrt(3.0)])
        values = source.moved(values, by)
    return measured.like(values)


def drawn(
    run: Runner, measured: Measured, accuracy: InputAccuracy, results: Sequence[str], draws: int = DRAWS
) -> dict[str, Drawn]:
    """Spread of results of one frame over draws of its inputs.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results.
    measured : Measured
        One frame.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    results : sequence of str
        Series names.
    draws : int
        How many draws. [-]

    Returns
    -------
    dict
        By name; a result that fewer than half of the draws give is left out.

    Notes
    -----
    Draws outside the range of the model are left out.

    References
    ----------
    JCGM 101:2008, 7.2 to 7.6.
    """
    evaluation = run(draw_frames(measured, accuracy, draws))
    found = {}
    for name in results:
        values = evaluation.column(name).values
        usable = values[1:][np.isfinite(values[1:])]
        if np.isfinite(values[0]) and usable.size > draws / 2:
            deviations = np.sort(usable) - values[0]
            places = (np.arange(_QUANTILES) + 0.5) / _QUANTILES * usable.size
            found[name] = Drawn(
                standard=float(usable.std(ddof=1)), deviations=deviations[places.astype(np.intp)]
            )
    return found
