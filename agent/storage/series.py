"""What a series store does, whatever it is made of."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Final, Protocol

import numpy as np
from numpy.typing import NDArray

from agent.records import Commit, DerivedRow, Frame, SeriesDef, SourceStatus

# How long full-rate rows are kept. Inputs outlive results: results can be computed again from them.
KEEP_INPUTS_S: Final = 30 * 86_400
KEEP_DERIVED_S: Final = 3 * 86_400
# Rows taken from one table by one prune: ten times what a minute adds, so a backlog shrinks without a long
# lock, and a clock that runs ahead for a moment cannot empty the store.
PRUNE_ROWS: Final = 600


@dataclass(frozen=True, slots=True, kw_only=True)
class Configuration:
    """A site file as it was when it computed something."""

    id: int
    digest: str
    at: float  # unix seconds when it was first used
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Columns:
    """The stored columns of a unit, in stored order; grows, never shrinks."""

    inputs: tuple[SeriesDef, ...] = ()
    results: tuple[SeriesDef, ...] = ()


SeriesRange = tuple[NDArray[np.int64], NDArray[np.float64], NDArray[np.uint8]]  # ticks, values, quality


class SeriesSink(Protocol):
    """The writing side; only the agent has one."""

    def open(self) -> None: ...

    def register(
        self, unit: str, inputs: Sequence[tuple[str, str]], results: Sequence[tuple[str, str]]
    ) -> None: ...

    def configuration(self, digest: str, text: str, at: float) -> int: ...

    def commit(self, commit: Commit) -> None: ...

    def prune(self, now: float) -> int: ...

    def close(self) -> None: ...


class SeriesSource(Protocol):
    """The reading side; any process, any thread."""

    def units(self) -> tuple[str, ...]: ...

    def columns(self, unit: str) -> Columns: ...

    def last_tick(self, unit: str) -> int | None: ...

    def last(self, unit: str) -> tuple[Frame, DerivedRow] | None: ...

    def frame(self, unit: str, tick: int) -> Frame | None: ...

    def row(self, unit: str, tick: int) -> DerivedRow | None: ...

    def rows(
        self, unit: str, start: int, stop: int, *, inputs: Sequence[str], results: Sequence[str]
    ) -> list[tuple[Frame, DerivedRow]]: ...

    def range(
        self, unit: str, names: Sequence[str], start: int, stop: int, max_points: int | None = None
    ) -> SeriesRange: ...

    def sources(self) -> tuple[SourceStatus, ...]: ...

    def configuration(self, number: int) -> Configuration | None: ...

    def close(self) -> None: ...
