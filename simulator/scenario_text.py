"""The text of a scenario file: which entries there are and what each may say, whatever the site."""

from collections.abc import Mapping, Sequence
from types import MappingProxyType
from typing import Annotated, Final

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from model.machine import Side
from model.units import UnitError, parse
from simulator.course import Growth
from simulator.faults import Fault, FaultError, FaultKind
from simulator.gas_data import GASES, WATER
from simulator.instrument_faults import InstrumentFaultKind, LinkFaultKind

# variable of a scenario file -> (field of Surroundings, or the ambient, and the dimension of its text)
NUMBERS: Final[Mapping[str, tuple[str, str]]] = MappingProxyType(
    {
        "suction_header_pressure": ("suction_pressure_pa", "pressure"),
        "discharge_header_pressure": ("discharge_pressure_pa", "pressure"),
        "suction_temperature": ("suction_temperature_k", "temperature"),
        "speed": ("speed_rad_s", "rotation"),
        "cooling_water": ("cooling_water_k", "temperature"),
        "jacket_water": ("jacket_water_k", "temperature"),
        "ambient": ("ambient_k", "temperature"),
        "first_recycle": ("first_recycle", "fraction"),
        "final_recycle": ("final_recycle", "fraction"),
        "saturation": ("saturation", "fraction"),
    }
)
_SWITCHES: Final = ("load_step", "running")
_GAS: Final = "composition"


def _seconds(text: object) -> float:
    if not isinstance(text, str):
        raise ValueError(f"expected a time such as '20 s', got {text!r}")  # noqa: TRY004 - pydantic wants ValueError
    return parse(text, "time")


def _signed_seconds(text: object) -> float:
    if isinstance(text, str) and text.startswith("-"):
        return -_seconds(text[1:])
    return _seconds(text)


Seconds = Annotated[float, BeforeValidator(_seconds), Field(ge=0)]
SomeSeconds = Annotated[float, BeforeValidator(_seconds), Field(gt=0)]


class _Text(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class When(_Text):
    """An instant of a story."""

    at: Seconds
    unhurried: Seconds = 0.0

    @model_validator(mode="after")
    def _part_of_the_whole(self) -> "When":
        if self.unhurried > self.at:
            raise ValueError(
                f"unhurried: {self.unhurried:g} s is a part of at: {self.at:g} s and cannot exceed it"
            )
        return self

    def real_s(self, pace: float) -> float:
        """Seconds on the clock [s]."""
        return (self.at - self.unhurried) / pace + self.unhurried


class Change(When):
    """One plant variable of one unit moves to a new value, at once or as a ramp."""

    unit: str
    variable: str
    to: float | str | bool | dict[str, float]
    over: Seconds = 0.0

    @model_validator(mode="before")
    @classmethod
    def _value_of_its_kind(cls, entry: object) -> object:
        if not isinstance(entry, dict) or "to" not in entry:
            return entry
        return {**entry, "to": _value(entry.get("variable"), entry["to"], ramp="over" in entry)}


class FaultText(When):
    """Something of the machine or of the plant around it goes wrong, or is put right with ``to: 0``."""

    unit: str
    fault: FaultKind
    to: float
    over: Seconds = 0.0
    growth: Growth = Growth.LINEAR
    stage: int | None = None
    cylinder: int | None = None
    end: Side | None = None

    @model_validator(mode="after")
    def _makes_sense(self) -> "FaultText":
        self.value()
        return self

    def value(self) -> Fault:
        try:
            return Fault(
                kind=self.fault, size=self.to, stage=self.stage, cylinder=self.cylinder, side=self.end
            )
        except FaultError as error:
            raise ValueError(str(error)) from None


class InstrumentText(When):
    """An instrument begins or ceases to lie."""

    unit: str
    tag: str
    fault: InstrumentFaultKind
    to: float | bool | str
    over: Seconds = 0.0


class LinkText(When):
    """The link of a source misbehaves for a while."""

    source: str
    fault: LinkFaultKind
    lasts: Annotated[SomeSeconds, Field(alias="for")]
    lasts_unhurried: Annotated[Seconds, Field(alias="for_unhurried")] = 0.0
    buffered: bool = False
    by: Annotated[float, BeforeValidator(_signed_seconds)] = 0.0

    @model_validator(mode="after")
    def _says_by_how_much(self) -> "LinkText":
        wants = self.fault in {LinkFaultKind.LATE, LinkFaultKind.SKEWED}
        if wants and self.by == 0.0:
            raise ValueError(f"by: a link that is {self.fault} needs to say by how much")
        if self.by != 0.0 and not wants:
            raise ValueError(f"by: a link that is {self.fault} has no amount")
        if self.buffered and self.fault is not LinkFaultKind.LOST:
            raise ValueError("buffered: only a lost link keeps anything")
        if self.fault is LinkFaultKind.LATE and self.by < 0.0:
            raise ValueError("by: nothing arrives before it was sent")
        if self.lasts_unhurried > self.lasts:
            raise ValueError("for_unhurried: is a part of for: and cannot exceed it")
        return self


class Happening(When):
    """A line of the timetable that the demo prints."""

    say: str


class ScenarioText(_Text):
    """A whole file."""

    title: str
    length: SomeSeconds | None = None
    changes: tuple[Change, ...] = ()
    faults: tuple[FaultText, ...] = ()
    instruments: tuple[InstrumentText, ...] = ()
    links: tuple[LinkText, ...] = ()
    timetable: tuple[Happening, ...] = ()
    repeat: When | None = None

    @model_validator(mode="after")
    def _round_takes_time(self) -> "ScenarioText":
        if self.repeat is not None and not self.repeat.at > 0.0:
            raise ValueError("repeat: a round takes some time")
        return self


def _value(variable: object, value: object, *, ramp: bool) -> object:
    """The value of a change in SI, a composition, a load-step word, or running."""
    if isinstance(variable, str) and variable in NUMBERS:
        if not isinstance(value, str):
            raise ValueError(f"to: expected text with a unit, such as '26 bara', got {value!r}")
        try:
            return parse(value, NUMBERS[variable][1])
        except UnitError as error:
            raise ValueError(f"to: {error}") from None
    if variable == _GAS:
        return _composition(value)
    if variable not in _SWITCHES:
        known = ", ".join((*NUMBERS, _GAS, *_SWITCHES))
        raise ValueError(f"variable: {variable!r} is no plant variable; known: {known}")
    if ramp:
        raise ValueError(f"over: {variable} changes at once, it has no ramp")
    kind = bool if variable == "running" else str
    if not isinstance(value, kind):
        wanted = "true or false" if kind is bool else "a load-step word in quotes"
        raise ValueError(f"to: expected {wanted}, got {value!r}")  # noqa: TRY004 - as above
    return value


def _composition(value: object) -> dict[str, float]:
    if not isinstance(value, dict) or not value or not all(_is_share(v) for v in value.values()):
        raise ValueError(f"to: expected mole fractions such as {{methane: 0.9, ethane: 0.1}}, got {value!r}")
    dry = sorted(GASES.keys() - {WATER})
    if strange := [str(name) for name in value if name not in dry]:
        raise ValueError(f"to: no such gas: {', '.join(strange)}; known: {', '.join(dry)}")
    if not abs(sum(value.values()) - 1.0) <= 1e-6:
        raise ValueError("to: the mole fractions are not shares of one")
    return {str(name): float(share) for name, share in value.items()}


def _is_share(value: object) -> bool:
    return isinstance(value, float | int) and not isinstance(value, bool) and 0.0 <= value <= 1.0


def fault_words(location: Sequence[int | str], message: str) -> str:
    """Place and words of one fault found by the schema."""
    path = ""
    for part in location:
        path += f"[{part}]" if isinstance(part, int) else f".{part}"
    return f"{path.lstrip('.') or 'file'}: {message.removeprefix('Value error, ')}"
