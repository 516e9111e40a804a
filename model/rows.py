"""Tables of arrays that share their first axis: some rows of them, rows put back, several joined."""

from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

Rows = NDArray[np.intp] | NDArray[np.bool_]
T = TypeVar("T")


def rows_of(table: T, rows: Rows) -> T:
    """Some rows of every array of a frozen dataclass, in any order and any number of times."""
    if is_dataclass(table):
        parts = {f.name: rows_of(getattr(table, f.name), rows) for f in fields(table)}
        return type(table)(**parts)  # type: ignore[return-value]
    return table[rows]  # type: ignore[index, no-any-return]


def put_rows(table: T, rows: Rows, part: T) -> None:
    """Write rows into the arrays of a table."""
    if is_dataclass(table):
        for f in fields(table):
            put_rows(getattr(table, f.name), rows, getattr(part, f.name))
    else:
        table[rows] = part  # type: ignore[index]


def blank(like: T, count: int) -> T:
    """A table of that many rows without numbers: NaN, zero or false."""
    if is_dataclass(like):
        parts = {f.name: blank(getattr(like, f.name), count) for f in fields(like)}
        return type(like)(**parts)  # type: ignore[return-value]
    array = np.asarray(like)
    empty = np.nan if array.dtype.kind == "f" else 0
    return np.full((count, *array.shape[1:]), empty, array.dtype)  # type: ignore[return-value]


def joined(count: int, pieces: Sequence[tuple[Rows, T]]) -> T:
    """A table of that many rows from pieces, each with the rows it goes to; at least one piece."""
    whole = blank(pieces[0][1], count)
    for rows, part in pieces:
        put_rows(whole, rows, part)
    return whole
