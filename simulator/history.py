"""Months of minutes of the invented plant in some minutes: ``throwline plant history``.

Tables of every unit are made first (or taken from the cache), then minutes are read from them, sent through
the same instruments as the live plant's, and written. The crank itself turns only while tables are made.
"""

import hashlib
import sys
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.resources import files
from pathlib import Path
from typing import Final

import numpy as np

from agent.siteplan.errors import SiteFileError
from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan, UnitPlan
from simulator.course import UnitCourse
from simulator.gas_data import Floats
from simulator.history_files import HistoryFileError, UnitFiles, need_arrow, rounded_row, write_about
from simulator.history_minutes import Minutes, Setting, minutes_of
from simulator.history_tables import tables_of
from simulator.history_true import MINUTE_S, TrueValues
from simulator.instruments import Instrument
from simulator.ordinary_life import HABITS, QUIET, ordinary_course
from simulator.ostmere import EQUIPMENT, SEED, USUAL
from simulator.plant import LIVE_STEPS
from simulator.scenario import ScenarioError, Story, load_scenario
from simulator.tabulate import TableError, Tabulator
from simulator.tabulate_domain import OutsideTableError
from simulator.tabulate_store import source_digest
from simulator.weather import DAY_S

CHUNK: Final = 14 * 24 * 60  # minutes
CACHE: Final = Path("data/cache")
START: Final = datetime(2025, 1, 1, tzinfo=UTC)
ORDINARY: Final = "ordinary life"


class HistoryError(Exception):
    """No history can be made; the message says why in one sentence."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Wish:
    """What history is asked for."""

    site: SitePlan
    units: tuple[UnitPlan, ...]
    days: float
    start: datetime
    seed: int
    story: Story | None  # None: ordinary life
    cache: Path | None
    steps: int = LIVE_STEPS

    @property
    def time(self) -> Floats:
        minutes = max(1, round(self.days * DAY_S / MINUTE_S))
        return self.start.timestamp() + MINUTE_S * np.arange(minutes, dtype=float)


@dataclass(frozen=True, slots=True, kw_only=True)
class Chunk:
    """Some minutes of one unit as they are written."""

    minutes: Minutes
    shown: dict[str, Sequence[object] | Floats]  # by tag, in the plant's unit
    quality: dict[str, Floats]
    true: dict[str, Floats]


class Progress:
    """What hears how far it has come; this one keeps silent."""

    def step(self, words: str) -> None:
        """A new part begins."""

    def run(self) -> None:
        """One more run of the machine is done."""

    def minutes(self, done: int, of: int) -> None:
        """So many minutes of the part are written."""


def unit_chunks(
    wish: Wish, plan: UnitPlan, progress: Progress, pieces_told: dict[str, float]
) -> Iterator[Chunk]:
    """All minutes of one unit, chunk by chunk."""
    time = wish.time
    elapsed = time - time[0]
    course, habits = (
        _course(wish, plan, float(elapsed[-1])),
        QUIET if wish.story else HABITS.get(plan.id, QUIET),
    )
    if wish.story is not None and wish.story.repeats_after_s is not None:
        elapsed = elapsed % wish.story.repeats_after_s
    usual = USUAL[plan.id]
    setting = Setting(plan=plan, usual=usual, course=course, habits=habits, seed=wish.seed)
    minutes = minutes_of(setting, time, elapsed)
    tabulator = Tabulator(plan.unit, EQUIPMENT[plan.id], SEED, steps=wish.steps, folder=wish.cache)
    tabulator.watch = progress.run
    pieces = tables_of(tabulator, plan, usual, minutes, progress.step)
    for code, piece in pieces.items():
        pieces_told[f"{plan.id}/{code}"] = round(piece.table.held_out, 3)
    truth = TrueValues(plan, usual, pieces)
    instruments = _instruments(plan, wish.seed)
    words = np.array([step.word for step in plan.unit.load_steps])
    progress.step(f"{plan.id} minutes")
    for begin in range(0, len(time), CHUNK):
        part = minutes.part(slice(begin, begin + CHUNK))
        true = truth.follow(part)
        shown: dict[str, Sequence[object] | Floats] = {}
        quality: dict[str, Floats] = {}
        for tag in plan.inputs:
            if tag.quantity == "load_step":
                shown[tag.tag] = words[part.step].tolist()
                quality[tag.tag] = np.zeros(len(part.time), dtype=np.uint8)
                continue
            steps = np.full(len(part.time), MINUTE_S)
            steps[0] = MINUTE_S if begin else 0.0
            reading, stated = instruments[tag.tag].readings(
                true[tag.name], steps, part.tracks.get(tag.tag, ())
            )
            reading = (reading - tag.offset) / tag.scale
            switch = tag.quantity == "run_signal"
            shown[tag.tag] = reading if switch else rounded_row(reading, tag.unit)
            quality[tag.tag] = np.where(np.isfinite(reading), stated, 2).astype(np.uint8)
        yield Chunk(minutes=part, shown=shown, quality=quality, true=true)
        progress.minutes(min(begin + CHUNK, len(time)), len(time))


def write_history(wish: Wish, out: Path, progress: Progress) -> None:
    """Write all units' files."""
    need_arrow()
    about = {
        "site": wish.site.name,
        "seed": str(wish.seed),
        "scenario": wish.story.scenario.name if wish.story else ORDINARY,
        "plant": source_digest(),
        "start": wish.start.isoformat(),
    }
    out.mkdir(parents=True, exist_ok=True)
    held_out: dict[str, float] = {}
    for plan in wish.units:
        with UnitFiles(out, plan, about) as written:
            for chunk in unit_chunks(wish, plan, progress, held_out):
                written.write(chunk.minutes.time, chunk.shown, chunk.quality)
                written.write_truth(chunk.minutes.time, _truth(plan, chunk))
    files_of = {u.id: {i.tag: i.unit for i in u.inputs} for u in wish.units}
    quality = {"0": "good", "1": "uncertain", "2": "bad"}
    write_about(
        out,
        {**about, "minutes": len(wish.time), "quality": quality, "tags": files_of},
        {**about, "sealed_draw": SEED, "held_out_error_over_allowed": held_out},
    )


def digest(wish: Wish, progress: Progress | None = None) -> str:
    """A digest of all that a history shows, without writing it."""
    found = hashlib.sha256()
    for plan in wish.units:
        for chunk in unit_chunks(wish, plan, progress or Progress(), {}):
            for tag in plan.inputs:
                row = chunk.shown[tag.tag]
                found.update(np.asarray(row).tobytes() if isinstance(row, np.ndarray) else repr(row).encode())
                found.update(chunk.quality[tag.tag].tobytes())
    return found.hexdigest()


def wish_for(
    site: Path,
    *,
    days: float,
    scenario: str | None = None,
    seed: int = 1,
    units: Sequence[str] = (),
    start: datetime = START,
    cache: Path | None = CACHE,
) -> Wish:
    """What is asked for, checked.

    Raises
    ------
    HistoryError
        A unit is unknown to the site or to the plant, or there are no days.
    """
    plan = load_site(site)
    known = {u.id: u for u in plan.units}
    wanted = tuple(units) or tuple(known)
    for name in wanted:
        if name not in known or name not in EQUIPMENT:
            raise HistoryError(f"{name!r} is no unit of this site and plant; known: {', '.join(known)}")
    if not days > 0.0:
        raise HistoryError(f"{days:g} days are no history")
    story = None
    if scenario is not None:
        story = load_scenario(_scenario_path(scenario), plan).at_pace(1.0)
    return Wish(
        site=plan, units=tuple(known[n] for n in wanted), days=days, start=start, seed=seed, story=story,
        cache=cache,
    )  # fmt: skip


def run(
    site: Path,
    out: Path,
    *,
    days: float,
    scenario: str | None,
    seed: int,
    units: Sequence[str],
    start: datetime,
    cache: Path | None,
) -> int:
    """Make a history under a progress bar; 0 if it was written, 1 if not."""
    try:
        need_arrow()
        wish = wish_for(site, days=days, scenario=scenario, seed=seed, units=units, start=start, cache=cache)
        with _bar() as progress:
            write_history(wish, out, progress)
    except (
        SiteFileError, ScenarioError, HistoryError, HistoryFileError, TableError, OutsideTableError, OSError
    ) as error:  # fmt: skip
        print(f"throwline plant history: {error}", file=sys.stderr)  # noqa: T201
        return 1
    return 0


@contextmanager
def _bar() -> Iterator[Progress]:
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn  # noqa: PLC0415 - only for a person
    from rich.progress import Progress as Bar  # noqa: PLC0415

    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        TextColumn("{task.fields[done]}"),
        TimeElapsedColumn(),
    )
    with Bar(*columns) as bar:

        class Shown(Progress):
            def __init__(self) -> None:
                self._task = bar.add_task("tables", total=None, done="")
                self._runs = 0

            def step(self, words: str) -> None:
                bar.stop_task(self._task)
                self._task = bar.add_task(words, total=None, done="")
                self._runs = 0

            def run(self) -> None:
                self._runs += 1
                bar.update(self._task, done=f"{self._runs} runs of the machine")

            def minutes(self, done: int, of: int) -> None:
                bar.update(self._task, total=of, completed=done, done=f"{done} of {of} minutes")

        yield Shown()


def _scenario_path(name_or_path: str) -> Path:
    shipped = files("simulator") / "scenarios" / f"{name_or_path}.yaml"
    return Path(str(shipped)) if shipped.is_file() else Path(name_or_path)


def _course(wish: Wish, plan: UnitPlan, length_s: float) -> UnitCourse:
    if wish.story is not None:
        return wish.story.units[plan.id]
    return ordinary_course(plan.id, wish.seed, plan.unit.load_steps[1].word, length_s)


def _instruments(plan: UnitPlan, seed: int) -> dict[str, Instrument]:
    return {
        i.tag: Instrument(i.quantity, f"{seed}/{plan.id}/{i.tag}", span_low=i.span_low)
        for i in plan.inputs
        if i.quantity != "load_step"
    }


def _truth(plan: UnitPlan, chunk: Chunk) -> dict[str, Floats | Sequence[str]]:
    minutes = chunk.minutes
    found: dict[str, Floats | Sequence[str]] = {f"true {name}": row for name, row in chunk.true.items()}
    found |= {f"around {name}": row for name, row in minutes.values.items()}
    found["around ambient_k"] = minutes.ambient_k
    if minutes.composition is not None:
        for k, name in enumerate(minutes.names):
            found[f"around share of {name}"] = minutes.composition[:, k]
    found["ordered load_step"] = [plan.unit.load_steps[int(s)].word for s in minutes.step]
    found["ordered running"] = minutes.running.astype(np.float64)
    for k, spot in enumerate(minutes.spots):
        found[f"fault {spot.words}"] = minutes.sizes[:, k]
    for tag, tracks in minutes.tracks.items():
        for track in tracks:
            found[f"instrument {tag} {track.kind}"] = track.sizes
    return found
