"""Scenario files: what is done to the plant and when, and what fails in it.

A scenario is a list of timed changes of named plant variables, of faults that grow, of instruments that lie
and of links that fail. Times count from the moment all wires are up. A hurried plant divides them by its
pace, but the agent's alarms wait in real time: the part of an instant that stands for such waiting is written
as `unhurried` and is never divided.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from pydantic import ValidationError
from ruamel.yaml import YAML
from ruamel.yaml.error import YAMLError

from agent.siteplan.plan import SitePlan
from simulator.course import (
    Course,
    FaultCourse,
    GasMove,
    InstrumentCourse,
    Leg,
    LinkSpell,
    UnitCourse,
    link_state,
)
from simulator.instrument_faults import LinkState
from simulator.scenario_fit import header_faults, instrument_size, misfits
from simulator.scenario_text import (
    NUMBERS,
    Change,
    FaultText,
    InstrumentText,
    LinkText,
    ScenarioText,
    When,
    fault_words,
)


class ScenarioError(ValueError):
    """A scenario file cannot be used; every fault is listed."""

    def __init__(self, path: Path, faults: Sequence[str]) -> None:
        self.path = path
        self.faults = tuple(faults)
        super().__init__("\n".join(f"{path}: {fault}" for fault in self.faults))


@dataclass(frozen=True, slots=True, kw_only=True)
class Scenario:
    """A scenario file that fits its site."""

    name: str
    text: ScenarioText
    site: SitePlan

    @property
    def title(self) -> str:
        return self.text.title

    def at_pace(self, pace: float) -> "Story":
        """The story as it is told so many times faster."""
        if not pace > 0:
            raise ValueError(f"pace {pace} is not above zero")
        units = {u.id: _unit_course(self.text, self.site, u.id, pace) for u in self.site.units}
        # At another pace other things coincide, since some times are not hurried.
        if faults := header_faults(units):
            raise ValueError(f"{self.name} at pace {pace:g}: {'; '.join(faults)}")
        return Story(
            scenario=self,
            pace=pace,
            units=units,
            links=tuple(_spell(link, pace) for link in self.text.links),
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Story:
    """A scenario told at a pace; elapsed times are real seconds since it began, negative before."""

    scenario: Scenario
    pace: float
    units: Mapping[str, UnitCourse]
    links: tuple[LinkSpell, ...]

    @property
    def repeats_after_s(self) -> float | None:
        """Length of a round [s]; None: told once, then quiet."""
        repeat = self.scenario.text.repeat
        return None if repeat is None else repeat.real_s(self.pace)

    @property
    def length_s(self) -> float | None:
        """How long the story takes, if it says so [s]."""
        length = self.scenario.text.length
        return None if length is None else length / self.pace

    def round_time(self, elapsed_s: float) -> float:
        """Real seconds since the present round began [s]; negative before the story."""
        if self.repeats_after_s is None or elapsed_s < 0:
            return elapsed_s
        return elapsed_s % self.repeats_after_s

    def link(self, source: str, elapsed_s: float) -> LinkState:
        """What the link of a source does at an instant."""
        return link_state(self.links, source, self.round_time(elapsed_s))

    def timetable(self) -> tuple[tuple[float, str], ...]:
        """Real seconds after the beginning of a round [s], and what happens then."""
        return tuple(sorted((h.real_s(self.pace), h.say) for h in self.scenario.text.timetable))


def load_scenario(path: Path, site: SitePlan) -> Scenario:
    """Read and check a scenario file.

    Raises
    ------
    ScenarioError
        With every fault of the file at once.
    """
    try:
        raw = YAML(typ="safe").load(path.read_text(encoding="utf-8"))
        text = ScenarioText.model_validate(raw)
    except OSError as error:
        raise ScenarioError(path, [f"cannot be read: {error.strerror}"]) from None
    except (YAMLError, UnicodeDecodeError) as error:
        raise ScenarioError(path, [f"is not YAML: {' '.join(str(error).split())}"]) from None
    except ValidationError as error:
        raise ScenarioError(path, [fault_words(e["loc"], e["msg"]) for e in error.errors()]) from None
    if faults := misfits(text, site):
        raise ScenarioError(path, faults)
    if faults := header_faults({u.id: _unit_course(text, site, u.id, 1.0) for u in site.units}):
        raise ScenarioError(path, faults)
    return Scenario(name=path.stem, text=text, site=site)


def _unit_course(text: ScenarioText, site: SitePlan, unit: str, pace: float) -> UnitCourse:
    changes = sorted((c for c in text.changes if c.unit == unit), key=lambda c: c.real_s(pace))
    return UnitCourse(
        numbers={
            field: Course(legs=tuple(_leg(c, pace) for c in changes if c.variable == variable))
            for variable, (field, _) in NUMBERS.items()
            if any(c.variable == variable for c in changes)
        },
        load_steps=tuple((c.real_s(pace), str(c.to)) for c in changes if c.variable == "load_step"),
        running=tuple((c.real_s(pace), bool(c.to)) for c in changes if c.variable == "running"),
        gas=tuple(
            GasMove(leg=Leg(start_s=c.real_s(pace), to=1.0, over_s=c.over / pace), to=c.to)
            for c in changes
            if isinstance(c.to, Mapping)
        ),
        faults=_faults([f for f in text.faults if f.unit == unit], pace),
        instruments=_instruments([i for i in text.instruments if i.unit == unit], site, pace),
    )


def _leg(change: Change, pace: float) -> Leg:
    return Leg(start_s=change.real_s(pace), to=float(change.to), over_s=change.over / pace)  # type: ignore[arg-type]


def _faults(entries: Sequence[FaultText], pace: float) -> tuple[FaultCourse, ...]:
    """Entries of one kind at one place are legs of one course."""
    places = dict.fromkeys((f.fault, f.stage, f.cylinder, f.end) for f in entries)
    courses = []
    for kind, stage, cylinder, side in places:
        own = sorted(
            (f for f in entries if (f.fault, f.stage, f.cylinder, f.end) == (kind, stage, cylinder, side)),
            key=lambda f: f.real_s(pace),
        )
        legs = tuple(Leg(start_s=f.real_s(pace), to=f.to, over_s=f.over / pace, growth=f.growth) for f in own)
        courses.append(
            FaultCourse(kind=kind, stage=stage, cylinder=cylinder, side=side, course=Course(legs=legs))
        )
    return tuple(courses)


def _instruments(
    entries: Sequence[InstrumentText], site: SitePlan, pace: float
) -> tuple[InstrumentCourse, ...]:
    courses = []
    for tag, kind in dict.fromkeys((i.tag, i.fault) for i in entries):
        own = sorted((i for i in entries if (i.tag, i.fault) == (tag, kind)), key=lambda i: i.real_s(pace))
        legs = tuple(
            Leg(start_s=i.real_s(pace), to=instrument_size(i, site), over_s=i.over / pace) for i in own
        )
        courses.append(InstrumentCourse(tag=tag, kind=kind, course=Course(legs=legs)))
    return tuple(courses)


def _spell(link: LinkText, pace: float) -> LinkSpell:
    start = link.real_s(pace)
    lasts = (link.lasts - link.lasts_unhurried) / pace + link.lasts_unhurried
    return LinkSpell(
        source=link.source, kind=link.fault, start_s=start, end_s=start + lasts, buffered=link.buffered,
        by_s=link.by,
    )  # fmt: skip


__all__ = ["Scenario", "ScenarioError", "Story", "When", "load_scenario"]
