"""One sheet of a table: a polynomial by least squares through settled runs, and how well it foretells."""

import itertools
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import Enum
from typing import Final

import numpy as np

from simulator.gas_data import Floats
from simulator.polynomial import Powers, basis, total_degree

_PRIMES: Final = (2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37, 41, 43, 47)
_SPARE: Final = 2.2  # runs / terms
_MORE: Final = 6  # runs
# What a degree of an axis counts: along speed the machine is rough, as plates bounce once more or less;
# along temperatures it hardly bends.
_ROUGH: Final = 0.5
_SMOOTH: Final = 1.5

Runs = Callable[[Floats], Floats]  # points (n, axes + spots) -> columns (n, m), NaN where a run failed


@dataclass(frozen=True, slots=True, kw_only=True)
class Sheet:
    """Polynomial in the axes, each term times powers of the fault sizes (0 to 1 of the largest)."""

    axis_powers: Powers
    size_powers: Powers
    weights: Floats  # (terms, columns)
    runs: int
    held_out: float  # worst error of a run that the rest foretells / what is allowed

    def at(self, points: Floats, columns: slice) -> Floats:
        """Values at points (n, axes + spots)."""
        terms = terms_at(points, self.axis_powers, self.size_powers)
        # no BLAS: the sum over terms must not depend on how many minutes are asked for at once
        return np.asarray(np.einsum("nt,tc->nc", terms, self.weights[:, columns]))

    def loads_at(self, points: Floats, columns: slice) -> Floats:
        """The same for many columns, by BLAS."""
        return np.asarray(terms_at(points, self.axis_powers, self.size_powers) @ self.weights[:, columns])


def terms_at(points: Floats, axis_powers: Powers, size_powers: Powers) -> Floats:
    axes = axis_powers.shape[1]
    terms = basis(points[:, :axes], axis_powers)
    for j in range(size_powers.shape[1]):
        terms = terms * points[:, axes + j, None] ** size_powers[None, :, j]
    return terms


class Bend(Enum):
    """How the machine bends along an axis."""

    ROUGH = _ROUGH
    PLAIN = 1.0
    SMOOTH = _SMOOTH


def healthy_ladder(bends: Sequence[Bend]) -> list[tuple[Powers, Powers]]:
    """Terms without a fault, ever more of them."""
    halved = [1.0 if b is Bend.SMOOTH else b.value for b in bends]
    counts = [b.value for b in bends]
    rungs = [
        total_degree(len(bends), 2, halved),
        total_degree(len(bends), 3, counts),
        total_degree(len(bends), 4, counts),
    ]
    return [(rung, np.zeros((len(rung), 0), dtype=np.int64)) for rung in rungs]


_SINGLE: Final = (
    {(1,): 1, (2,): 1, (3,): 0},
    {(1,): 2, (2,): 1, (3,): 1, (4,): 0},
    {(1,): 3, (2,): 2, (3,): 1, (4,): 1, (5,): 0},
)
_PAIR: Final = (
    {(1, 1): 1, (2, 1): 0, (1, 2): 0},
    {(1, 1): 2, (2, 1): 1, (1, 2): 1, (2, 2): 0, (3, 1): 0, (1, 3): 0},
    {(1, 1): 2, (2, 1): 2, (1, 2): 2, (2, 2): 1, (3, 1): 1, (1, 3): 1, (3, 2): 0, (2, 3): 0},
)  # fmt: skip


def fault_ladder(bends: Sequence[Bend], spots: int) -> list[tuple[Powers, Powers]]:
    """Terms that one fault adds, or two faults together beyond each alone."""
    counts = [max(1.0, b.value) for b in bends]
    ladder = []
    for rung in _SINGLE if spots == 1 else _PAIR:
        parts = []
        for sizes, degree in rung.items():
            powers = total_degree(len(bends), degree, counts if degree > 2 else None)
            parts.append((powers, np.tile(np.array(sizes, dtype=np.int64), (len(powers), 1))))
        ladder.append((np.concatenate([p for p, _ in parts]), np.concatenate([s for _, s in parts])))
    return ladder


def spread_points(first: int, last: int, axes: int, spots: int) -> Floats:
    """Points of one endless even sequence: axes within -1 to 1, sizes within 0 to 1.

    Notes
    -----
    Halton's sequence, each dimension turned by a part of the golden ratio. # common practice
    """
    found = np.empty((last - first, axes + spots))
    for j in range(axes + spots):
        base = _PRIMES[j]
        for i in range(first, last):
            at, share, place = 0.0, 1.0, i + 20
            while place:
                share /= base
                at += share * (place % base)
                place //= base
            found[i - first, j] = at
    found = (found + np.arange(axes + spots) * 0.6180339887498949) % 1.0
    found[:, :axes] = 2.0 * found[:, :axes] - 1.0
    return found


def tour(points: Floats) -> list[int]:
    """An order in which each point lies near the one before."""
    left, path = list(range(1, len(points))), [0]
    while left:
        apart = ((points[left] - points[path[-1]]) ** 2).sum(axis=1)
        path.append(left.pop(int(apart.argmin())))
    return path


def fit(
    ladder: Sequence[tuple[Powers, Powers]],
    runs: Runs,
    judge: Callable[[Floats, Floats], Floats],
    known: Callable[[Floats], Floats] | None = None,
) -> Sheet:
    """Run, fit, and climb the ladder until every run is foretold by the others as well as allowed.

    Parameters
    ----------
    ladder : sequence of pairs of Powers
        Terms, ever more.
    runs : Callable
        Makes the runs.
    judge : Callable
        From the columns of all runs and their errors if foretold by the others: the worst of each run over
        what is allowed, (runs,).
    known : Callable or None
        What is known already at points; the sheet gives what is left.
    """
    axes, spots = ladder[0][0].shape[1], ladder[0][1].shape[1]
    points = np.empty((0, axes + spots))
    rows: Floats | None = None
    best, best_mean = None, math.inf
    for axis_powers, size_powers in _with_nothing(ladder):
        wanted = max(len(points), math.ceil(_SPARE * len(axis_powers)) + _MORE)
        fresh = spread_points(len(points), wanted, axes, spots)
        if len(fresh):
            fresh = fresh[tour(fresh)]
            got = runs(fresh)
            points = np.concatenate((points, fresh))
            rows = got if rows is None else np.concatenate((rows, got))
        assert rows is not None
        good = np.isfinite(rows).all(axis=1)
        left = rows[good] - (known(points[good]) if known else 0.0)
        weights, miss = _least_squares(terms_at(points[good], axis_powers, size_powers), left)
        held_out = judge(rows[good], miss)
        if (mean := float(np.sqrt((held_out**2).mean()))) < best_mean:
            best_mean = mean
            best = Sheet(
                axis_powers=axis_powers, size_powers=size_powers, weights=weights,
                runs=int(good.sum()), held_out=float(held_out.max()),
            )  # fmt: skip
        if held_out.max() <= 1.0 and len(axis_powers):
            break
    assert best is not None
    return best


def _with_nothing(ladder: Sequence[tuple[Powers, Powers]]) -> list[tuple[Powers, Powers]]:
    """Two small faults may add up: then no term at all foretells best."""
    first, sizes = ladder[0]
    return [(first[:0], sizes[:0]), *ladder] if sizes.shape[1] > 1 else list(ladder)


def _least_squares(terms: Floats, left: Floats) -> tuple[Floats, Floats]:
    """Weights, and by how much each run is missed by a fit through all others."""
    if not terms.shape[1]:
        return np.zeros((0, left.shape[1])), left
    q, r = np.linalg.qr(terms)
    weights = np.linalg.solve(r, q.T @ left)
    kept = np.maximum(1e-9, 1.0 - (q**2).sum(axis=1))
    return weights, (left - terms @ weights) / kept[:, None]


def pairs(count: int) -> list[tuple[int, int]]:
    return list(itertools.combinations(range(count), 2))
