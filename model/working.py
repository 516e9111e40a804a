"""Any number of an evaluation with its working shown: formulas, inputs, each step's value, sources.

The steps are computed from the very text that is shown, apart from `model.evaluate`; a test holds the last
step equal to the published number. One frame at a time: this is for reading, not for monitoring.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.expression import FUNCTIONS, Function, calls, evaluate_expression, symbols
from model.surface import GasSurface

Array = NDArray[np.float64]

OURS: Final = "ours"


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Given:
    """A number that the working starts from."""

    symbol: str
    words: str
    value: Array
    unit: str
    origin: str  # in words: measured, nameplate, correction, site file, search, constant
    series: str = ""  # of a measured one


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Step:
    """One formula with its value."""

    symbol: str
    words: str
    expression: str
    value: Array
    unit: str
    source: str  # standard and clause, handbook, or `OURS`

    @property
    def needs(self) -> tuple[str, ...]:
        return symbols(self.expression)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Working:
    """How one number came about; the last step is the number."""

    name: str  # series name
    givens: tuple[Given, ...]
    steps: tuple[Step, ...]
    functions: Mapping[str, str]  # each function that the steps call, and its words

    @property
    def value(self) -> Array:
        return self.steps[-1].value


@dataclass(slots=True, eq=False, kw_only=True)
class Sheet:
    """A growing list of givens and steps; later ones use the symbols of earlier ones."""

    functions: Mapping[str, tuple[Function, str]] = field(default_factory=dict)
    values: dict[str, Array] = field(default_factory=dict)
    lines: dict[str, Given | Step] = field(default_factory=dict)

    def given(  # noqa: PLR0917 - columns of a table
        self, symbol: str, words: str, value: Array | float, unit: str, origin: str, series: str = ""
    ) -> None:
        line = Given(
            symbol=symbol, words=words, value=np.asarray(value), unit=unit, origin=origin, series=series
        )
        self._take(line)

    def step(self, symbol: str, words: str, expression: str, unit: str, source: str = OURS) -> Array:
        extra = {name: function for name, (function, _) in self.functions.items()}
        value = np.asarray(evaluate_expression(expression, self.values, extra))
        self._take(
            Step(symbol=symbol, words=words, expression=expression, value=value, unit=unit, source=source)
        )
        return value

    def upto(self, symbol: str, name: str) -> Working:
        """What a symbol hangs on, in order, and nothing else."""
        needed = {symbol}
        for line in reversed(list(self.lines.values())):
            if isinstance(line, Step) and line.symbol in needed:
                needed.update(line.needs)
        kept = [line for line in self.lines.values() if line.symbol in needed]
        steps = tuple(line for line in kept if isinstance(line, Step))
        called = dict.fromkeys(call for step in steps for call in calls(step.expression))
        words = {n: (self.functions.get(n) or FUNCTIONS[n])[1] for n in called}
        return Working(
            name=name, givens=tuple(line for line in kept if isinstance(line, Given)), steps=steps,
            functions=words,
        )  # fmt: skip

    def _take(self, line: Given | Step) -> None:
        if line.symbol in self.lines:
            raise ValueError(f"{line.symbol} stands twice in the working")
        self.lines[line.symbol] = line
        self.values[line.symbol] = line.value


def gas_functions(gas: GasSurface) -> Mapping[str, tuple[Function, str]]:
    """Property look-ups of a gas, as functions of an expression."""
    return {
        "rho": (gas.density, "density of the gas at temperature and pressure, kg/m3"),
        "h": (gas.enthalpy, "enthalpy at temperature and pressure, J/kg"),
        "s": (gas.entropy, "entropy at temperature and pressure, J/(kg K)"),
        "T_of_s": (gas.temperature_from_entropy, "temperature at entropy and pressure, K"),
        "T_of_h": (gas.temperature_from_enthalpy, "temperature at enthalpy and pressure, K"),
    }


def joined(parts: Sequence[str]) -> str:
    """A sum of symbols as text."""
    return " + ".join(parts)
