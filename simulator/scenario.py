"""Scenario files: what is done to the plant and when.

A scenario is a list of timed changes of named plant variables, some of them ramps. Times count from the
moment both wires are up. A hurried plant divides them by its pace, but the agent's alarms wait in real time:
the part of an instant that stands for such waiting is written as `unhurried` and is never divided.
"""

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from types import MappingProxyType
from typing import Annotated, Any, Final

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, ValidationError, model_validator
from ruamel.yaml import YAML
from ruamel.yaml.error import YAMLError

from model.units import parse
from simulator.steady_table import Conditions, Machine

# variable of a scenario file -> (field of Conditions, dimension of its text)
_QUANTITIES: Final[Mapping[str, tuple[str, str]]] = MappingProxyType(
    {
        "suction_header_pressure": ("suction_header_pa", "pressure"),
        "discharge_header_pressure": ("discharge_header_pa", "pressure"),
        "suction_temperature": ("suction_temperature_k", "temperature"),
        "speed": ("speed_rad_s", "rotation"),
    }
)
_SWITCHES: Final = ("load_step", "running")


class ScenarioError(ValueError):
    """A scenario file cannot be used; every fault is listed."""

    def __init__(self, path: Path, faults: Iterable[str]) -> None:
        self.path = path
        self.faults = tuple(faults)
        super().__init__("\n".join(f"{path}: {fault}" for fault in self.faults))


def _seconds(text: object) -> float:
    if not isinstance(text, str):
        raise ValueError(f"expected a time such as '20 s', got {text!r}")  # noqa: TRY004 - pydantic wants ValueError
    return parse(text, "time")


Seconds = Annotated[float, BeforeValidator(_seconds), Field(ge=0)]


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
    to: float | str | bool
    over: Seconds = 0.0

    @model_validator(mode="before")
    @classmethod
    def _value_of_its_kind(cls, entry: object) -> object:
        if not isinstance(entry, dict) or "to" not in entry:
            return entry
        return {**entry, "to": _value(entry.get("variable"), entry["to"], ramp="over" in entry)}


class Happening(When):
    """A line of the timetable that the demo prints."""

    say: str


class _File(_Text):
    title: str
    changes: tuple[Change, ...]
    timetable: tuple[Happening, ...] = ()
    repeat: When | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    name: str
    title: str
    changes: tuple[Change, ...]
    timetable: tuple[Happening, ...]
    repeat: When | None  # length of a round; None: told once, then quiet

    def round_time(self, elapsed_s: float, pace: float) -> float:
        """Real seconds since the present round began [s]; negative before the story."""
        if self.repeat is None or elapsed_s < 0:
            return elapsed_s
        return elapsed_s % self.repeat.real_s(pace)

    def real_timetable(self, pace: float) -> tuple[tuple[float, str], ...]:
        """Real seconds after the beginning of a round [s], and what happens then."""
        return tuple(sorted((h.real_s(pace), h.say) for h in self.timetable))

    def conditions(self, unit: str, rated: Conditions, elapsed_s: float, pace: float) -> Conditions:
        """What the story makes of a unit's rated conditions.

        Parameters
        ----------
        unit : str
            Name of the unit.
        rated : Conditions
            Where the unit runs when nothing happens.
        elapsed_s : float
            Real time since the story began [s].
        pace : float
            How many times faster the story runs [1].

        Returns
        -------
        Conditions
            Rated conditions with the changes applied; a ramp cut short goes on from where it was.
        """
        now = self.round_time(elapsed_s, pace)
        due = sorted((c for c in self.changes if c.unit == unit), key=lambda c: c.real_s(pace))
        tracks: dict[str, _Track] = {}
        for change in due:
            start = change.real_s(pace)
            if start > now:
                break
            name = _QUANTITIES.get(change.variable, (change.variable, ""))[0]
            before = tracks[name].at(start) if name in tracks else getattr(rated, name)
            tracks[name] = _Track(start, before, change.to, change.over / pace)
        values: dict[str, Any] = {name: track.at(now) for name, track in tracks.items()}
        return replace(rated, **values)


@dataclass(frozen=True, slots=True)
class _Track:
    """The way of one variable since its last change."""

    start_s: float
    before: float | str | bool
    to: float | str | bool
    over_s: float

    def at(self, now_s: float) -> float | str | bool:
        if self.over_s == 0 or now_s >= self.start_s + self.over_s:
            return self.to
        before, to = float(self.before), float(self.to)
        return before + (to - before) * (now_s - self.start_s) / self.over_s


def load_scenario(path: Path, machines: Mapping[str, Machine]) -> Scenario:
    """Read and check a scenario file.

    Raises
    ------
    ScenarioError
        With every fault of the file at once.
    """
    try:
        raw = YAML(typ="safe").load(path.read_text(encoding="utf-8"))
        text = _File.model_validate(raw)
    except OSError as error:
        raise ScenarioError(path, [f"cannot be read: {error.strerror}"]) from None
    except (YAMLError, UnicodeDecodeError) as error:
        raise ScenarioError(path, [f"is not YAML: {' '.join(str(error).split())}"]) from None
    except ValidationError as error:
        raise ScenarioError(path, [_fault(e["loc"], e["msg"]) for e in error.errors()]) from None
    faults = [f"changes[{i}]: {f}" for i, c in enumerate(text.changes) for f in _misfits(c, machines)]
    if faults:
        raise ScenarioError(path, faults)
    return Scenario(
        name=path.stem, title=text.title, changes=text.changes, timetable=text.timetable, repeat=text.repeat
    )


def _value(variable: object, value: object, *, ramp: bool) -> float | str | bool:
    """The value of a change in SI, a load-step word, or running."""
    if variable in _QUANTITIES:
        if not isinstance(value, str):
            raise ValueError(f"to: expected text with a unit, such as '26 bara', got {value!r}")
        return parse(value, _QUANTITIES[str(variable)][1])
    if variable not in _SWITCHES:
        known = ", ".join((*_QUANTITIES, *_SWITCHES))
        raise ValueError(f"variable: {variable!r} is no plant variable; known: {known}")
    if ramp:
        raise ValueError(f"over: {variable} changes at once, it has no ramp")
    kind = bool if variable == "running" else str
    if not isinstance(value, kind):
        wanted = "true or false" if kind is bool else "a load-step word in quotes"
        raise ValueError(f"to: expected {wanted}, got {value!r}")  # noqa: TRY004 - as above
    return value


def _misfits(change: Change, machines: Mapping[str, Machine]) -> list[str]:
    machine = machines.get(change.unit)
    if machine is None:
        return [f"unit: {change.unit!r} is no machine of this plant; known: {', '.join(machines)}"]
    if change.variable == "load_step" and change.to not in machine.steps:
        return [f"to: {change.to!r} is no load step of {change.unit}; known: {', '.join(machine.steps)}"]
    return []


def _fault(location: tuple[int | str, ...], message: str) -> str:
    path = ""
    for part in location:
        path += f"[{part}]" if isinstance(part, int) else f".{part}"
    return f"{path.lstrip('.') or 'file'}: {message.removeprefix('Value error, ')}"
