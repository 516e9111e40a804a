"""Tables of arrays that share their first axis: some rows of them, rows put back, several joined."""

from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from typing import Any, TypeVar, cast

import numpy as np
from numpy.typing import NDArray

Rows = NDArray[np.intp] | NDArray[np.bool_]
T = TypeVar("T")


def rows_of(table: T, rows: Rows) -> T:
    """Some rows of every array of a frozen dataclass, in any order and any number of times."""
    return cast(T, _rows_of(table, rows))


def put_rows(table: T, rows: Rows, part: T) -> None:
    """Write rows into the arrays of a table."""
    _put_rows(table, rows, part)


def joined(count: int, pieces: Sequence[tuple[Rows, T]]) -> T:
    """A table of that many rows from pieces, each with the rows it goes to; at least one piece.

    Rows without a piece are NaN, zero or false.
    """
    whole = cast(T, _blank(pieces[0][1], count))
    for rows, part in pieces:
        _put_rows(whole, rows, part)
    return whole


def _rows_of(table: Any, rows: Rows) -> Any:
    if is_dataclass(table) and not isinstance(table, type):
        return type(table)(**{f.name: _rows_of(getattr(table, f.name), rows) for f in fields(table)})
    return table[rows]


def _put_rows(table: Any, rows: Rows, part: Any) -> None:
    if is_dataclass(table):
        for f in fields(table):
            _put_rows(getattr(table, f.name), rows, getattr(part, f.name))
    else:
        table[rows] = part


def _blank(like: Any, count: int) -> Any:
    if is_dataclass(like) and not isinstance(like, type):
        return type(like)(**{f.name: _blank(getattr(like, f.name), count) for f in fields(like)})
    empty = np.nan if like.dtype.kind == "f" else 0
    return np.full((count, *like.shape[1:]), empty, like.dtype)
