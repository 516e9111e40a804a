"""The alarms, as data: what is watched, when it is said, how urgent it is and what the operator is to do.

One alarm of each kind for a whole unit; its text names the worst cylinder or stage. An alarm exists only
where somebody entered a limit, and only because there is something to do about it.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum
from types import MappingProxyType
from typing import Final

from agent.records import Priority

# The band of an estimate is its standard uncertainty times this: about 95 % where errors are normal.
COVERAGE_FACTOR: Final = 2.0
COVERAGE_WORDS: Final = "two standard uncertainties"


class Rule(Enum):
    """How a setting, a deadband and a limit make an alarm point."""

    ABOVE_SHARE = "best estimate plus its band above a share of the limit"
    LITTLE_LEFT = "measured value with less than the setting left to the limit"
    BELOW_SHARE = "best estimate less its band below a share of the minimum"


@dataclass(frozen=True, slots=True, kw_only=True)
class Watched:
    """One quantity an alarm looks at. The deadband is a share of the limit for loads, else in SI."""

    quantity: str  # key of model.quantities
    deadband: float
    rest: float  # the value of a machine without any trouble; makes different quantities comparable


@dataclass(frozen=True, slots=True, kw_only=True)
class AlarmType:
    key: str
    words: str
    rule: Rule
    watched: tuple[Watched, ...]
    setting: float  # share of the limit, or for LITTLE_LEFT what must be left, in SI
    on_delay_s: float
    off_delay_s: float
    priority: Priority
    owner: str
    action: str
    consequence: str
    time_to_respond: str
    rationale: str

    @property
    def setting_dimension(self) -> str:
        """Dimension of a site's own setting, as a row of `model.units`."""
        return "temperature_difference" if self.rule is Rule.LITTLE_LEFT else "fraction"

    @property
    def deadband_dimension(self) -> str | None:
        """Dimension of a site's own deadband; None where two quantities are watched and none fits both."""
        return self.setting_dimension if len(self.watched) == 1 else None


_ON_DELAY_S = 60.0  # a short excursion needs no action
_OFF_DELAY_S = 30.0  # the deadband does the most; this keeps one quiet moment from ending an alarm
_OPERATOR = "board operator"

_LOAD_ACTION = (
    "Raise the suction pressure or lower the discharge pressure of this stage. Change the load step only to "
    "one that the machine's procedure permits at the present pressures, for rod load and for reversal: "
    "unloading an end can raise the peak load."
)
_LOAD_CONSEQUENCE = "Fatigue of rod, crosshead and frame; in the end a broken rod."


def _load(key: str, words: str, why: str) -> AlarmType:
    return AlarmType(
        key=key,
        words=words,
        rule=Rule.ABOVE_SHARE,
        watched=(Watched(quantity=key, deadband=0.02, rest=0.0),),
        setting=0.95,
        on_delay_s=_ON_DELAY_S,
        off_delay_s=_OFF_DELAY_S,
        priority=Priority.MEDIUM,
        owner=_OPERATOR,
        action=_LOAD_ACTION,
        consequence=_LOAD_CONSEQUENCE,
        time_to_respond="within the hour",
        rationale=f"{why} No raw tag shows it. Medium: where the control board has a load alarm of its own, "
        "that one comes first; a site without one may rationalise it as High.",
    )


_GAS_WHY = "Rod and frame are rated for the gas load, in tension and in compression apart."
_PIN_WHY = (
    "The combined load of gas and moving masses is what the crosshead pin carries. It can fall while the gas "
    "load rises, so both are watched."
)

_TABLE: Final = (
    _load("gas_load_tension", "Gas load in tension high", _GAS_WHY),
    _load("gas_load_compression", "Gas load in compression high", _GAS_WHY),
    _load("pin_load_tension", "Combined load in tension high", _PIN_WHY),
    _load("pin_load_compression", "Combined load in compression high", _PIN_WHY),
    AlarmType(
        key="discharge_temperature",
        words="Discharge temperature near its limit",
        rule=Rule.LITTLE_LEFT,
        watched=(Watched(quantity="discharge_temperature", deadband=3.0, rest=math.nan),),
        setting=10.0,
        on_delay_s=_ON_DELAY_S,
        off_delay_s=_OFF_DELAY_S,
        priority=Priority.MEDIUM,
        owner=_OPERATOR,
        action="Lower the pressure ratio of this stage: check the cooling water, raise the suction pressure "
        "or lower the discharge pressure. If it is not stage 1: do not open the first-stage recycle and do "
        "not unload the stages before it, because the last stage then gets hotter.",
        consequence="The unit may trip on discharge temperature, and its flow is lost.",
        time_to_respond="within the hour",
        rationale="Ten kelvin leave time to act before the trip. Medium: the control board's own alarm comes "
        "first; a site without one may rationalise it as High.",
    ),
    AlarmType(
        key="reversal",
        words="Load reversal below its minimum",
        rule=Rule.BELOW_SHARE,
        watched=(
            Watched(quantity="reversal_degrees", deadband=math.radians(3.0), rest=math.pi),
            Watched(quantity="reversal_percent", deadband=0.02, rest=1.0),
        ),
        setting=1.0,
        on_delay_s=_ON_DELAY_S,
        off_delay_s=_OFF_DELAY_S,
        priority=Priority.HIGH,
        owner=_OPERATOR,
        action="Return to the last permitted load step. If no permitted step is reached within 10 minutes, "
        "stop the unit under procedure. Note how long it ran like this, and have the crosshead pin and its "
        "bushing inspected at the next stop.",
        consequence="The crosshead pin gets no oil: pin and bushing wear and seize.",
        time_to_respond="within 10 minutes",
        rationale="A change of load step or of pressures can take the reversal away while every raw tag "
        "stays in its usual range. High: the time to act is short and no other instrument shows it.",
    ),
)

CATALOGUE: Final[Mapping[str, AlarmType]] = MappingProxyType({a.key: a for a in _TABLE})
