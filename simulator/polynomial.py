"""Polynomials of several variables on the cube from -1 to 1, as sums of products of Chebyshev polynomials."""

import itertools
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from simulator.gas_data import Floats

Powers = npt.NDArray[np.int64]


def total_degree(variables: int, degree: float, weights: Sequence[float] | None = None) -> Powers:
    """Degrees of every variable in every term, (terms, variables).

    Parameters
    ----------
    variables : int
        How many variables.
    degree : float
        Largest sum of degree x weight in a term.
    weights : Sequence[float] or None
        What a degree of each variable counts; one each if None.
    """
    counts = tuple(weights) if weights is not None else (1.0,) * variables
    found: list[tuple[int, ...]] = [()]
    for j in range(variables):
        most = int(degree / counts[j] + 1e-9)
        grown = itertools.product(found, range(most + 1))
        found = [
            (*t, n)
            for t, n in grown
            if sum(a * b for a, b in zip((*t, n), counts, strict=False)) <= degree + 1e-9
        ]
    return np.array(sorted(found, key=lambda t: (sum(t), t)), dtype=np.int64).reshape(len(found), variables)


def basis(points: Floats, powers: Powers) -> Floats:
    """Every term at every point, (points, terms)."""
    highest = int(powers.max(initial=0))
    chebyshev = np.ones((highest + 1, *points.shape))
    if highest > 0:
        chebyshev[1] = points
    for n in range(2, highest + 1):
        chebyshev[n] = 2.0 * points * chebyshev[n - 1] - chebyshev[n - 2]
    terms = np.ones((len(points), len(powers)))
    for j in range(points.shape[1]):
        terms *= chebyshev[powers[:, j], :, j].T
    return terms
