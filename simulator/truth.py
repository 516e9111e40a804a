"""Sealed truth: what really happens in a story, and what a watcher of the plant should have said by when.

Only the scorer reads this. Neither the agent, the model, the pages nor the plant itself may import it: the
plant follows the scenario alone, and who watches it has the tags alone.
"""

from collections.abc import Sequence
from enum import StrEnum
from fnmatch import fnmatchcase
from importlib.resources import files
from pathlib import Path
from typing import Annotated, Final

from pydantic import BaseModel, BeforeValidator, ConfigDict, ValidationError, model_validator
from ruamel.yaml import YAML
from ruamel.yaml.error import YAMLError

from model.machine import Side
from simulator.faults import FaultKind
from simulator.instrument_faults import InstrumentFaultKind, LinkFaultKind
from simulator.scenario_text import Seconds, When, fault_words

FOLDER: Final = Path(str(files("simulator") / "truths"))
_EVERYWHERE: Final = "*"


class Surprise(StrEnum):
    """What happens to a unit without any part of it being broken."""

    SUCTION_SINKS = "suction pressure sinks"
    WRONG_ENDS = "wrong ends held open"
    GAS_HEAVIER = "gas gets heavier"
    POWER_DIP = "motors drop out"


class Need(StrEnum):
    """What a watcher must be able to do before it can be blamed for not saying it."""

    DRIFT = "drift detection"
    GROUPING = "grouping of stops"


Kind = FaultKind | InstrumentFaultKind | LinkFaultKind | Surprise
_KINDS: Final = {
    kind.value: kind for kinds in (FaultKind, InstrumentFaultKind, LinkFaultKind, Surprise) for kind in kinds
}


def _kind(text: object) -> Kind:
    if text not in _KINDS:
        raise ValueError(f"{text!r} is nothing that can happen; known: {', '.join(_KINDS)}")
    return _KINDS[str(text)]


class _Text(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Happening(When):
    """One thing that really happens; ``at`` is when it begins."""

    kind: Annotated[Kind, BeforeValidator(_kind)]
    unit: str  # id, or * for all of the site
    stage: int | None = None
    cylinder: int | None = None
    end: Side | None = None
    tag: str | None = None
    source: str | None = None
    size: str  # in words, with the measured figure


class Expected(When):
    """What should be said first; ``at`` is the onset, before which nothing of it can be known."""

    alarm: str | None = None  # key of the agent's catalogue
    finding: str | None = None  # what a later detector would call it
    needs: Need | None = None
    unit: str
    subject: tuple[str, ...] = ()  # any of these; none given: wherever
    latest: Seconds  # after the onset
    latest_unhurried: Seconds = 0.0  # the part of it that a hurried plant keeps

    @model_validator(mode="after")
    def _makes_sense(self) -> "Expected":
        if (self.alarm is None) == (self.finding is None):
            raise ValueError("names either an alarm or a finding")
        if self.finding is not None and self.needs is None:
            raise ValueError("needs: a finding says what it needs")
        if self.latest_unhurried > self.latest:
            raise ValueError("latest_unhurried: is a part of latest: and cannot exceed it")
        return self

    @property
    def key(self) -> str:
        """What the journal would call it."""
        return str(self.alarm or self.finding)

    def latest_real_s(self, pace: float) -> float:
        """Seconds on the clock that it may take after the onset [s]."""
        return (self.latest - self.latest_unhurried) / pace + self.latest_unhurried


class Pattern(_Text):
    """Alarms by unit and key; * stands for any run of letters."""

    unit: str = _EVERYWHERE
    alarm: str = _EVERYWHERE

    def fits(self, unit: str, alarm: str) -> bool:
        return fnmatchcase(unit, self.unit) and fnmatchcase(alarm, self.alarm)


class Truth(_Text):
    """The whole truth of one story."""

    story: str
    what_happens: tuple[Happening, ...]
    expected_first: tuple[Expected, ...] = ()  # alarms of one unit in the order in which they must come
    must_not: tuple[Pattern, ...] = ()  # what is expected, or may come, is never forbidden
    may: tuple[Pattern, ...] = ()  # follows from what happens; neither wanted nor forbidden

    @model_validator(mode="after")
    def _asks_something(self) -> "Truth":
        if not self.expected_first and not self.must_not:
            raise ValueError("expects nothing and forbids nothing: any watcher would pass")
        return self


class TruthError(ValueError):
    """A truth file cannot be used; every fault is listed."""

    def __init__(self, path: Path, faults: Sequence[str]) -> None:
        self.path = path
        self.faults = tuple(faults)
        super().__init__("\n".join(f"{path}: {fault}" for fault in self.faults))


def load_truth(path: Path) -> Truth:
    """Read and check a truth file.

    Raises
    ------
    TruthError
        With every fault of the file at once.
    """
    try:
        truth = Truth.model_validate(YAML(typ="safe").load(path.read_text(encoding="utf-8")))
    except OSError as error:
        raise TruthError(path, [f"cannot be read: {error.strerror}"]) from None
    except (YAMLError, UnicodeDecodeError) as error:
        raise TruthError(path, [f"is not YAML: {' '.join(str(error).split())}"]) from None
    except ValidationError as error:
        raise TruthError(path, [fault_words(e["loc"], e["msg"]) for e in error.errors()]) from None
    if truth.story != path.stem:
        raise TruthError(path, [f"story: {truth.story!r} is not the name of the file"])
    return truth


def truth_of(story: str) -> Truth:
    """The truth of a story that is shipped."""
    return load_truth(FOLDER / f"{story}.yaml")
