"""Where a stored number comes from: the row it stands in, the site file of that row, and its working."""

import difflib
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from agent.accuracy import accuracy_of
from agent.database import CACHE_FOLDER
from agent.records import DerivedRow, Frame, Quality
from agent.siteplan.plan import SitePlan, UnitPlan
from agent.storage.sqlite_series import SeriesReader
from agent.stored_site import StoredSites
from model.budget import Share, budget
from model.corrections import Corrections
from model.errors import NotEvaluatedError
from model.evaluate import Evaluation, evaluate
from model.explain import working
from model.gas import load_or_build
from model.measured import Measured
from model.quantities import split_series
from model.surface import GasSurface
from model.units import format_value, unit_label
from model.working import Given, Working

SHOWN_NAMES: Final = 5


class ExplanationError(Exception):
    """There is no working to show; the message says why in one sentence."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Explanation:
    """The working of one stored number."""

    site: SitePlan  # as it was when the row was computed
    plan: UnitPlan
    tick: int
    name: str
    working: Working
    published: float  # as stored, SI
    shares: tuple[Share, ...]  # of its uncertainty; none where it has none

    @property
    def words(self) -> str:
        return _words(self.name)

    @property
    def shown(self) -> str:
        """The number as the pages show it."""
        quantity = split_series(self.name)[1]
        text = format_value(
            float(self.working.value), quantity.display_unit, quantity.dimension, quantity.decimals,
            barometer_pa=self.site.barometer_pa,
        )  # fmt: skip
        return f"{text} {unit_label(quantity.display_unit)}".rstrip()

    def source(self, share: Share) -> str:
        """Where a part of the uncertainty comes from; an input names its tag."""
        names = share.source.split(" + ")
        tags = [self.plan.input(name) for name in names]
        found = [f"{i.tag}, {_words(i.name)}" for i in tags if i is not None]
        return " and ".join(found) or f"{share.source}: {share.reason}".rstrip(": ")

    def origin(self, line: Given) -> str:
        """Where a given comes from; a measured one names its tag."""
        entry = self.plan.input(line.series) if line.series else None
        return line.origin if entry is None else f"{line.origin}, {entry.tag}, {entry.tap}"


class Explainer:
    """Answers for one site and its store; remembers gas surfaces."""

    def __init__(self, site: SitePlan, reader: SeriesReader, data: Path) -> None:
        self._site, self._reader, self._data = site, reader, data
        self._sites = StoredSites(site, reader)
        self.reset()

    def reset(self) -> None:
        self._surfaces: dict[str, GasSurface] = {}

    def explain(self, unit_id: str, name: str, at: int | None = None) -> Explanation:
        """The working of a series of a unit, at a stored second or at the newest one.

        Raises
        ------
        ExplanationError
            The unit, the series or the row is not there, or the row holds no such number.
        """
        frame, row, columns = self._stored(unit_id, at)
        site = self._sites.site(row.configuration)
        if site is None or unit_id not in {p.id for p in site.units}:
            raise ExplanationError("The site file that computed this row cannot be read any more.")
        plan = site.unit(unit_id)
        self._check_name(plan, name)
        stored = dict(zip(columns, _codes(frame, row), strict=False))
        code = stored.get(name, (np.nan, int(Quality.NEVER)))
        if code[1] > Quality.UNCERTAIN:
            raise ExplanationError(
                f"{unit_id} {name} is not evaluated at that time: {Quality(code[1]).words}."
            )
        measured = Measured.from_inputs(
            plan.unit, columns[: frame.values.size], frame.values.astype(np.float64)
        )
        try:
            found = working(plan.unit, self._gas(plan), Corrections.nominal(), measured, name)
        except NotEvaluatedError as error:
            words = Quality(int(error.verdict)).words
            raise ExplanationError(f"{unit_id} {name} is not evaluated at that time: {words}.") from None
        except KeyError:
            raise ExplanationError(f"{unit_id} {name} is a state and has no formula.") from None
        return Explanation(
            site=site, plan=plan, tick=frame.tick, name=name, working=found, published=float(code[0]),
            shares=self._shares(plan, measured, name),
        )  # fmt: skip

    def _shares(self, plan: UnitPlan, measured: Measured, name: str) -> tuple[Share, ...]:
        gas = self._gas(plan)

        def run(frames: Measured) -> Evaluation:
            return evaluate(plan.unit, gas, Corrections.nominal(), frames)

        try:
            return budget(run, measured, accuracy_of(plan), name)
        except KeyError:
            return ()

    def _stored(self, unit_id: str, at: int | None) -> tuple[Frame, DerivedRow, tuple[str, ...]]:
        columns = self._reader.columns(unit_id)
        if not columns.inputs:
            known = ", ".join(self._reader.units()) or "none"
            raise ExplanationError(f"The store holds no unit {unit_id!r}; it holds: {known}.")
        if at is None:
            pair = self._reader.last(unit_id)
        else:
            frame, row = self._reader.frame(unit_id, at), self._reader.row(unit_id, at)
            pair = None if frame is None or row is None else (frame, row)
        if pair is None:
            raise ExplanationError(f"The store holds no row of {unit_id} at that second.")
        return *pair, tuple(c.name for c in (*columns.inputs, *columns.results))

    def _check_name(self, plan: UnitPlan, name: str) -> None:
        known = [n for n in (*plan.input_names(), *plan.result_names()) if n.split(".")[-1] not in {"u", "p"}]
        if name in known:
            return
        ends_alike = [n for n in known if n.endswith(f".{name}")]
        near = (ends_alike or difflib.get_close_matches(name, known, SHOWN_NAMES, 0.4))[:SHOWN_NAMES]
        hint = f" Near it: {', '.join(near)}." if near else ""
        raise ExplanationError(f"{plan.id} has no series {name!r}.{hint}")

    def _gas(self, plan: UnitPlan) -> GasSurface:
        key = repr((sorted(plan.unit.composition.items()), plan.unit.domain))
        if key not in self._surfaces:
            cache = self._data / CACHE_FOLDER
            self._surfaces[key] = load_or_build(plan.unit.composition, plan.unit.domain, cache)
        return self._surfaces[key]


def value_text(value: NDArray[np.float64], unit: str) -> str:
    """A number of the working in SI with six digits, or the range of many."""
    suffix = "" if unit == "1" else f" {unit}"
    if value.ndim == 0:
        return f"{float(value):.6g}{suffix}"
    return f"{value.size} values, {float(value.min()):.4g} to {float(value.max()):.4g}{suffix}"


def _codes(frame: Frame, row: DerivedRow) -> list[tuple[float, int]]:
    values = (*frame.values.tolist(), *row.values.tolist())
    return list(zip(values, (*frame.quality.tolist(), *row.quality.tolist()), strict=True))


def _words(name: str) -> str:
    subject, quantity, _ = split_series(name)
    head = subject.rstrip("0123456789")
    return quantity.words if subject == "unit" else f"{quantity.words}, {head} {subject[len(head) :]}"
