"""The glossary: every quantity the tool stores or shows.

Series names, labels, display units, decimals and documentation all come from this one table. A stored
series is named ``<subject>.<key>``, where the subject is ``unit``, ``stage1`` or ``cylinder1``; the
standard uncertainty of an estimate stands beside it as ``<subject>.<key>.u``, and the probability that a
limit is passed beside its margin as ``<subject>.<key>_margin.p``.
"""

from dataclasses import dataclass
from enum import StrEnum
from types import MappingProxyType
from typing import Final

UNCERTAINTY_SUFFIX: Final = ".u"
PROBABILITY_SUFFIX: Final = ".p"


class Scope(StrEnum):
    UNIT = "unit"
    STAGE = "stage"
    CYLINDER = "cylinder"


class Kind(StrEnum):
    MEASURED = "measured"  # an input of the plant, in SI and absolute
    ESTIMATE = "estimate"  # computed by the model
    MARGIN = "margin"  # what is left before an entered limit


@dataclass(frozen=True, slots=True, kw_only=True)
class Quantity:
    """One row of the glossary.

    ``unit`` is the SI unit of the stored value, ``display_unit`` and ``decimals`` how a page shows it.
    ``dimension`` names the row of `model.units` that converts between the two.
    """

    key: str
    words: str
    scope: Scope
    kind: Kind
    dimension: str
    unit: str
    display_unit: str
    decimals: int
    has_uncertainty: bool = False


def _measured(  # noqa: PLR0917 - columns of a table
    key: str, words: str, scope: Scope, dimension: str, unit: str, show: str, dec: int
) -> Quantity:
    return Quantity(
        key=key, words=words, scope=scope, kind=Kind.MEASURED, dimension=dimension, unit=unit,
        display_unit=show, decimals=dec,
    )  # fmt: skip


def _estimate(  # noqa: PLR0917 - columns of a table
    key: str, words: str, scope: Scope, dimension: str, unit: str, show: str, dec: int, *, u: bool = True
) -> Quantity:
    return Quantity(
        key=key, words=words, scope=scope, kind=Kind.ESTIMATE, dimension=dimension, unit=unit,
        display_unit=show, decimals=dec, has_uncertainty=u,
    )  # fmt: skip


def _margin(of: Quantity, words: str) -> Quantity:
    """What is left of ``of``: a difference, so a temperature margin is in kelvin, never in degrees."""
    dimension = {"temperature": "temperature_difference"}.get(of.dimension, of.dimension)
    show = {"temperature": "K"}.get(of.dimension, of.display_unit)
    return Quantity(
        key=f"{of.key}_margin", words=words, scope=of.scope, kind=Kind.MARGIN, dimension=dimension,
        unit=of.unit, display_unit=show, decimals=of.decimals,
    )  # fmt: skip


_U, _S, _C = Scope.UNIT, Scope.STAGE, Scope.CYLINDER

_DISCHARGE_TEMPERATURE = _measured(
    "discharge_temperature", "discharge temperature", _S, "temperature", "K", "degC", 1
)
_GAS_TENSION = _estimate("gas_load_tension", "gas load, tension", _C, "force", "N", "kN", 1)
_GAS_COMPRESSION = _estimate("gas_load_compression", "gas load, compression", _C, "force", "N", "kN", 1)
_PIN_TENSION = _estimate("pin_load_tension", "combined load at the pin, tension", _C, "force", "N", "kN", 1)
_PIN_COMPRESSION = _estimate(
    "pin_load_compression", "combined load at the pin, compression", _C, "force", "N", "kN", 1
)
_ROD_TENSION = _estimate(
    "rod_load_tension", "combined load at the piston rod, tension", _C, "force", "N", "kN", 1
)
_ROD_COMPRESSION = _estimate(
    "rod_load_compression", "combined load at the piston rod, compression", _C, "force", "N", "kN", 1
)
_REVERSAL_DEGREES = _estimate(
    "reversal_degrees", "load reversal at the pin, duration", _C, "angle", "rad", "deg", 0
)
_REVERSAL_PERCENT = _estimate(
    "reversal_percent", "load reversal at the pin, magnitude", _C, "fraction", "1", "%", 1
)

_TABLE: Final = (
    # measured
    _measured("suction_pressure", "suction pressure", _S, "pressure", "Pa", "barg", 2),
    _measured("discharge_pressure", "discharge pressure", _S, "pressure", "Pa", "barg", 2),
    _measured("suction_temperature", "suction temperature", _S, "temperature", "K", "degC", 1),
    _DISCHARGE_TEMPERATURE,
    _measured("speed", "speed", _U, "rotation", "rad/s", "rpm", 1),
    _measured("flow", "measured flow", _U, "molar_flow", "mol/s", "Nm3/h", 0),
    _measured("electrical_power", "electrical power", _U, "power", "W", "kW", 0),
    _measured("load_step", "load step", _U, "index", "1", "1", 0),
    _measured("run_signal", "run signal", _U, "index", "1", "1", 0),
    # stage estimates
    _estimate("stage_ratio", "stage ratio", _S, "ratio", "1", "1", 3),
    _estimate(
        "isentropic_discharge_temperature",
        "isentropic discharge temperature",
        _S,
        "temperature",
        "K",
        "degC",
        1,
    ),
    _estimate(
        "expected_discharge_temperature", "expected discharge temperature", _S, "temperature", "K", "degC", 1
    ),
    _estimate(
        "discharge_temperature_residual",
        "discharge temperature, measured less expected",
        _S,
        "temperature_difference",
        "K",
        "K",
        1,
    ),
    _estimate("volumetric_efficiency", "expected volumetric efficiency", _S, "fraction", "1", "%", 1),
    _estimate(
        "measured_volumetric_efficiency",
        "volumetric efficiency from measured flow",
        _S,
        "fraction",
        "1",
        "%",
        1,
    ),
    _estimate("stage_capacity", "expected capacity", _S, "molar_flow", "mol/s", "Nm3/h", 0),
    _estimate("stage_power", "expected indicated power", _S, "power", "W", "kW", 0),
    # unit estimates
    _estimate("capacity", "expected capacity", _U, "molar_flow", "mol/s", "Nm3/h", 0),
    _estimate("mass_flow", "expected mass flow", _U, "mass_flow", "kg/s", "kg/s", 3),
    _estimate("power", "expected indicated power", _U, "power", "W", "kW", 0),
    _estimate(
        "capacity_residual", "measured flow less expected, share of expected", _U, "fraction", "1", "%", 1
    ),
    # cylinder estimates
    _GAS_TENSION,
    _GAS_COMPRESSION,
    _PIN_TENSION,
    _PIN_COMPRESSION,
    _ROD_TENSION,
    _ROD_COMPRESSION,
    _REVERSAL_DEGREES,
    _REVERSAL_PERCENT,
    _estimate(
        "reversal_crossings",
        "changes of sign of the load at the pin in a turn",
        _C,
        "index",
        "1",
        "1",
        0,
        u=False,
    ),
    # state
    Quantity(
        key="run_state",
        words="running state",
        scope=_U,
        kind=Kind.ESTIMATE,
        dimension="index",
        unit="1",
        display_unit="1",
        decimals=0,
    ),
    # margins: what is left
    _margin(_DISCHARGE_TEMPERATURE, "discharge temperature, left to the limit"),
    _margin(_GAS_TENSION, "gas load in tension, left to the limit"),
    _margin(_GAS_COMPRESSION, "gas load in compression, left to the limit"),
    _margin(_PIN_TENSION, "combined load in tension, left to the limit"),
    _margin(_PIN_COMPRESSION, "combined load in compression, left to the limit"),
    _margin(_REVERSAL_DEGREES, "reversal duration, left above the minimum"),
    _margin(_REVERSAL_PERCENT, "reversal magnitude, left above the minimum"),
)

QUANTITIES: Final = MappingProxyType({q.key: q for q in _TABLE})

# Quantities for which a site file may enter a limit, and on which side of it the trouble lies.
UPPER_LIMITS: Final = frozenset(
    {
        "discharge_temperature",
        "gas_load_tension",
        "gas_load_compression",
        "pin_load_tension",
        "pin_load_compression",
    }
)
LOWER_LIMITS: Final = frozenset({"reversal_degrees", "reversal_percent"})


def series_name(subject: str, key: str) -> str:
    """Name of a stored series, e.g. ``stage1.stage_ratio``."""
    return f"{subject}.{key}"


def split_series(name: str) -> tuple[str, Quantity, bool]:
    """Take a series name apart into subject, quantity and whether it is the uncertainty of it.

    The probability beside a margin (`PROBABILITY_SUFFIX`) takes the quantity of its margin; `series_unit`
    knows that it is a plain number.

    Raises
    ------
    KeyError
        The name holds no known quantity.
    """
    is_uncertainty = name.endswith(UNCERTAINTY_SUFFIX)
    bare = name.removesuffix(PROBABILITY_SUFFIX).removesuffix(UNCERTAINTY_SUFFIX)
    subject, _, key = bare.partition(".")
    return subject, QUANTITIES[key], is_uncertainty


def series_unit(name: str) -> str:
    """SI unit of a stored series.

    Raises
    ------
    KeyError
        The name holds no known quantity.
    """
    return "1" if name.endswith(PROBABILITY_SUFFIX) else split_series(name)[1].unit
