"""The uncertainty of one number, line by line."""

import math
from collections.abc import Sequence
from dataclasses import dataclass

from model.measured import Measured
from model.uncertainty import (
    MODEL_ERRORS,
    NO_ERROR,
    InputAccuracy,
    Nuisance,
    Runner,
    model_variance,
    slopes,
)
from model.verdicts import Verdict


@dataclass(frozen=True, slots=True, kw_only=True)
class Share:
    """One line of an uncertainty budget."""

    source: str
    standard: float  # of the result, from this source alone, SI
    share: float  # of the square of the whole; all lines sum to one
    reason: str = ""


def budget(
    run: Runner, measured: Measured, accuracy: InputAccuracy, name: str, nuisances: Sequence[Nuisance] = ()
) -> tuple[Share, ...]:
    """Where the uncertainty of one result of one frame comes from.

    Parameters
    ----------
    run : callable
        The evaluation, from frames to results.
    measured : Measured
        One frame.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    name : str
        Series name of the result.
    nuisances : sequence of Nuisance
        What else is not known exactly; those of one name are one line.

    Returns
    -------
    tuple of Share
        The largest first, the model's own error among them; empty where the result is not evaluated.

    Raises
    ------
    KeyError
        The result has no uncertainty.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1.2 and H.1.7 (a budget by source).
    """
    one = measured.like(measured.values[:1])
    evaluation, found = slopes(run, one, accuracy, nuisances)
    if name not in found.results:
        raise KeyError(name)
    place = found.results.index(name)
    inputs = len(found.sources) - len(nuisances)
    squares: dict[str, float] = {}
    for k, source in enumerate(found.sources):
        scale = 1.0 if k < inputs else nuisances[k - inputs].standard / nuisances[k - inputs].step
        change = float(found.change[k, 0, place]) * scale
        squares[source] = squares.get(source, 0.0) + change**2
    squares["model"] = float(model_variance(found.results, evaluation.columns, 1)[0, place])
    total = sum(squares.values())
    if not math.isfinite(total) or total == 0 or evaluation.columns[name].verdicts[0] != Verdict.GOOD:
        return ()
    error = MODEL_ERRORS.get(name.removesuffix("_margin").partition(".")[2], NO_ERROR)
    return tuple(
        Share(
            source=source, standard=math.sqrt(square), share=square / total,
            reason=error.reason if source == "model" else "",
        )
        for source, square in sorted(squares.items(), key=lambda item: -item[1])
        if square > 0
    )  # fmt: skip
