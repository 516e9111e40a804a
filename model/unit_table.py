"""The table of units: what each word is worth in SI. `model.units` reads texts with it."""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Final, overload

import numpy as np
from numpy.typing import NDArray

# Exact by definition: the SI brochure (9th edition) and the international pound, foot and gravity.
GAS_CONSTANT_J_MOL_K: Final = 8.31446261815324
_GRAVITY_M_S2: Final = 9.80665
_POUND_KG: Final = 0.45359237
_INCH_M: Final = 0.0254
_POUND_FORCE_N: Final = _POUND_KG * _GRAVITY_M_S2
_PSI_PA: Final = _POUND_FORCE_N / _INCH_M**2
_ATMOSPHERE_PA: Final = 101325.0
_HORSEPOWER_W: Final = 550 * 12 * _INCH_M * _POUND_FORCE_N

# Ideal molar volumes at the reference states in use; a normal cubic metre is 0 degC and 1.01325 bar.
_NORMAL_M3_MOL: Final = GAS_CONSTANT_J_MOL_K * 273.15 / _ATMOSPHERE_PA
_STANDARD_M3_MOL: Final = GAS_CONSTANT_J_MOL_K * 288.15 / _ATMOSPHERE_PA
# The standard cubic foot of the gas trade: 60 degF and 14.696 psia.
_STANDARD_FT3_MOL: Final = (
    GAS_CONSTANT_J_MOL_K * (60 + 459.67) * 5 / 9 / (14.696 * _PSI_PA) / (12 * _INCH_M) ** 3
)


@dataclass(frozen=True, slots=True)
class Conversion:
    """SI value = value * scale + offset."""

    scale: float
    offset: float = 0.0

    @overload
    def to_si(self, x: float) -> float: ...
    @overload
    def to_si(self, x: NDArray[np.floating[Any]]) -> NDArray[np.floating[Any]]: ...
    def to_si(self, x: float | NDArray[np.floating[Any]]) -> float | NDArray[np.floating[Any]]:
        return x * self.scale + self.offset

    @overload
    def from_si(self, x: float) -> float: ...
    @overload
    def from_si(self, x: NDArray[np.floating[Any]]) -> NDArray[np.floating[Any]]: ...
    def from_si(self, x: float | NDArray[np.floating[Any]]) -> float | NDArray[np.floating[Any]]:
        return (x - self.offset) / self.scale


@dataclass(frozen=True, slots=True, kw_only=True)
class Dimension:
    """One row of the table: what can be read as this dimension."""

    words: str  # "a length"
    example: str
    units: Mapping[str, Conversion]
    si: str = ""  # in the words of pint; empty where only the listed units are taken


def _scales(factors: Mapping[str, float]) -> Mapping[str, Conversion]:
    return MappingProxyType({word: Conversion(factor) for word, factor in factors.items()})


_HOUR_S, _DAY_S = 3600.0, 86400.0
PRESSURE_BASES: Final = _scales(
    {
        "Pa": 1.0, "hPa": 100.0, "kPa": 1e3, "MPa": 1e6, "bar": 1e5, "mbar": 100.0, "psi": _PSI_PA,
        "atm": _ATMOSPHERE_PA,
    }
)  # fmt: skip


def _dimension(words: str, example: str, units: Mapping[str, Conversion], si: str = "") -> Dimension:
    return Dimension(words=words, example=example, units=MappingProxyType(dict(units)), si=si)


_ROTATIONS: Final = _scales({"rad/s": 1.0, "rpm": math.tau / 60, "r/min": math.tau / 60, "Hz": math.tau})
_FREQUENCIES: Final = _scales({"Hz": 1.0, "kHz": 1e3, "1/s": 1.0, "1/min": 1 / 60})
_TEMPERATURES: Final = {
    "K": Conversion(1.0),
    "degC": Conversion(1.0, 273.15),
    "degF": Conversion(5 / 9, 459.67 * 5 / 9),
}
_TEMPERATURE_DIFFERENCES: Final = _scales({"K": 1.0, "degC difference": 1.0, "degF difference": 5 / 9})
_MOLAR_FLOWS: Final = _scales(
    {
        "mol/s": 1.0,
        "kmol/h": 1e3 / _HOUR_S,
        "Nm3/h": 1 / (_NORMAL_M3_MOL * _HOUR_S),
        "Nm3/d": 1 / (_NORMAL_M3_MOL * _DAY_S),
        "Sm3/h": 1 / (_STANDARD_M3_MOL * _HOUR_S),
        "Sm3/d": 1 / (_STANDARD_M3_MOL * _DAY_S),
        "MMscfd": 1e6 / (_STANDARD_FT3_MOL * _DAY_S),
    }
)
_MASS_FLOWS: Final = _scales(
    {"kg/s": 1.0, "kg/h": 1 / _HOUR_S, "t/h": 1e3 / _HOUR_S, "lb/h": _POUND_KG / _HOUR_S}
)
_POWERS: Final = _scales({"W": 1.0, "kW": 1e3, "MW": 1e6, "hp": _HORSEPOWER_W})
_FORCES: Final = _scales(
    {"N": 1.0, "kN": 1e3, "MN": 1e6, "lbf": _POUND_FORCE_N, "klbf": 1e3 * _POUND_FORCE_N}
)
_ANGLES: Final = _scales({"rad": 1.0, "deg": math.pi / 180})
_STATES: Final = _scales({"1": 1.0, "word": 1.0, "switch": 1.0})
_LENGTHS: Final = _scales({"m": 1.0, "cm": 0.01, "mm": 0.001, "in": _INCH_M, "ft": 12 * _INCH_M})
_AREAS: Final = _scales({"m2": 1.0, "cm2": 1e-4, "mm2": 1e-6, "in2": _INCH_M**2})
_MASSES: Final = _scales({"kg": 1.0, "t": 1e3, "lb": _POUND_KG})
_TIMES: Final = _scales({"s": 1.0, "ms": 1e-3, "min": 60.0, "h": _HOUR_S, "d": _DAY_S})

DIMENSIONS: Final = MappingProxyType(
    {
        # The words of a pressure are a base with its reference; `model.units` puts them together.
        "pressure": _dimension("a pressure", "18 barg", {}, "Pa"),
        "pressure_difference": _dimension("a pressure difference", "0.1 bar", PRESSURE_BASES, "Pa"),
        "temperature": _dimension("a temperature", "35 degC", _TEMPERATURES),
        "temperature_difference": _dimension("a temperature difference", "1 K", _TEMPERATURE_DIFFERENCES),
        "rotation": _dimension("a speed of rotation", "900 rpm", _ROTATIONS),
        "frequency": _dimension("a frequency", "150 Hz", _FREQUENCIES),
        "molar_flow": _dimension("a molar or normal volume flow", "12000 Nm3/h", _MOLAR_FLOWS, "mol/s"),
        "mass_flow": _dimension("a mass flow", "3.2 kg/s", _MASS_FLOWS, "kg/s"),
        "power": _dimension("a power", "850 kW", _POWERS, "W"),
        "force": _dimension("a force", "170 kN", _FORCES, "N"),
        "angle": _dimension("an angle", "20 deg", _ANGLES),
        "fraction": _dimension("a fraction", "16 %", _scales({"1": 1.0, "%": 0.01})),
        "ratio": _dimension("a ratio", "2.5", _scales({"1": 1.0})),
        "index": _dimension("a state", "word", _STATES),
        "length": _dimension("a length", "195 mm", _LENGTHS, "m"),
        "area": _dimension("an area", "17.9 cm2", _AREAS, "m**2"),
        "mass": _dimension("a mass", "165 kg", _MASSES, "kg"),
        "time": _dimension("a time", "10 s", _TIMES, "s"),
    }
)
