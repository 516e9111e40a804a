"""Formulas as text: what the Working page shows is what was computed.

An expression is arithmetic over symbols, ``+ - * / **``, and calls of the functions listed here or given by
the caller. Symbols hold a number or an array over the crank angle.
"""

import ast
import math
import operator
from collections.abc import Callable, Mapping
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.rodload import reversal
from model.valves import plate_loss

Array = NDArray[np.float64]
Function = Callable[..., Array]


class ExpressionError(ValueError):
    """An expression uses something it may not."""

    def __init__(self, expression: str, what: str) -> None:
        super().__init__(f"{expression!r}: {what}")
        self.expression, self.what = expression, what


def _reversal_angle(load: Array, tension: Array, compression: Array) -> Array:
    found = reversal(np.atleast_2d(load), np.atleast_1d(tension), np.atleast_1d(compression))
    return np.asarray(found.duration_rad[0])


def _reversal_crossings(load: Array, tension: Array, compression: Array) -> Array:
    found = reversal(np.atleast_2d(load), np.atleast_1d(tension), np.atleast_1d(compression))
    return np.asarray(found.crossings[0])


def _plate(flow: Array, line: Array, preload: float, full_lift: float) -> Array:
    return plate_loss(np.asarray(flow), np.asarray(line), float(preload), float(full_lift))


_PLATE_WORDS: Final = (
    "pressure loss of a spring-loaded plate: lift y solves y^2 (p0/p1 + (1 - p0/p1) y) = loss at full lift /"
    " (p1 p), and the loss is p (p0 + (p1 - p0) y); within a few degrees of dead centre, where the flow is"
    " under 1/50 of that at full lift, p0 is tapered to nothing"
)
_REVERSAL_WORDS: Final = (
    "longest unbroken stretch of the sign that lasts for less of the turn, straight lines between the steps;"
    " loads under 0.2 % of the peak count as none"
)

_CROSSINGS_WORDS: Final = (
    "twice the number of unbroken stretches of the sign that has fewer of them; loads under 0.2 % of the peak"
    " count as none"
)

FUNCTIONS: Final[Mapping[str, tuple[Function, str]]] = MappingProxyType(
    {
        "exp": (np.exp, "e to the power of"),
        "log": (np.log, "natural logarithm"),
        "sqrt": (np.sqrt, "square root"),
        "sin": (np.sin, "sine"),
        "cos": (np.cos, "cosine"),
        "acos": (np.arccos, "inverse cosine"),
        "abs": (np.abs, "magnitude"),
        "max": (np.maximum, "the larger of two"),
        "min": (np.minimum, "the smaller of two"),
        "sum": (np.sum, "sum over the steps of one turn"),
        "where": (np.where, "the second where the first is 1, else the third"),
        "below": (np.less, "1 where the first is less than the second, else 0"),
        "plate": (
            _plate,
            _PLATE_WORDS,
        ),
        "reversal_angle": (
            _reversal_angle,
            _REVERSAL_WORDS,
        ),
        "reversal_crossings": (
            _reversal_crossings,
            _CROSSINGS_WORDS,
        ),
    }
)
"""Functions of an expression, each with the words that explain it."""

_OPERATORS: Final[Mapping[type, Callable[[Array, Array], Array]]] = MappingProxyType(
    {
        ast.Add: operator.add,
        ast.Sub: operator.sub,
        ast.Mult: operator.mul,
        ast.Div: operator.truediv,
        ast.Pow: operator.pow,
    }
)


def symbols(expression: str) -> tuple[str, ...]:
    """Symbols of an expression in the order they stand, each once; functions and pi are none.

    Raises
    ------
    ExpressionError
        It is no expression.
    """
    tree = _parse(expression)
    called = {id(n.func) for n in ast.walk(tree) if isinstance(n, ast.Call)}
    names = [n for n in ast.walk(tree) if isinstance(n, ast.Name) and id(n) not in called]
    names.sort(key=lambda n: (n.lineno, n.col_offset))
    return tuple(dict.fromkeys(n.id for n in names if n.id != "pi"))


def calls(expression: str) -> tuple[str, ...]:
    """Functions an expression calls in the order they stand, each once."""
    found = [n.func for n in ast.walk(_parse(expression)) if isinstance(n, ast.Call)]
    found.sort(key=lambda n: (n.lineno, n.col_offset))
    return tuple(dict.fromkeys(f.id for f in found if isinstance(f, ast.Name)))


def evaluate_expression(
    expression: str, values: Mapping[str, Array], functions: Mapping[str, Function]
) -> Array:
    """Value of an expression.

    Parameters
    ----------
    expression : str
        The text.
    values : mapping
        Number or array of each symbol.
    functions : mapping
        Functions beside those of `FUNCTIONS`.

    Returns
    -------
    ndarray
        The value, in the unit that follows from those of the symbols.

    Raises
    ------
    ExpressionError
        It is no expression, or a symbol or a function has no value.

    References
    ----------
    Arithmetic.
    """

    def value(node: ast.expr) -> Array:
        match node:
            case ast.UnaryOp(op=ast.USub(), operand=operand):
                found = np.negative(value(operand))
            case ast.BinOp(left=left, op=op, right=right) if type(op) in _OPERATORS:
                found = _OPERATORS[type(op)](value(left), value(right))
            case ast.Call(func=ast.Name(id=name), args=arguments, keywords=[]) if name in known:
                found = known[name](*(value(a) for a in arguments))
            case ast.Name(id=name) if name in values:
                found = values[name]
            case ast.Constant(value=float() | int() as number):
                found = np.asarray(number, np.float64)
            case _:
                raise ExpressionError(expression, f"{ast.unparse(node)} has no value here")
        return found

    known = {name: function for name, (function, _) in FUNCTIONS.items()} | dict(functions)
    values = {"pi": np.asarray(math.pi), **values}
    return value(_parse(expression))


def _parse(expression: str) -> ast.expr:
    try:
        return ast.parse(expression, mode="eval").body
    except SyntaxError as error:
        raise ExpressionError(expression, "is no expression") from error
