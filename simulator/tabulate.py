"""A unit of the invented plant as a table, made on demand from runs of the crank-angle machine.

A table belongs to one unit at one load step. It is a stack of sheets: the machine without faults, then what
each fault adds, then what two faults together add beyond each alone. Each sheet is a polynomial of the
boundary inputs that vary and of the fault sizes. Three faults at once are reckoned by their pairs.
Outside its domain a table refuses.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from types import MappingProxyType
from typing import Final

import numpy as np

from model.machine import Unit
from simulator.equipment import Equipment, SealedDraw
from simulator.gas_data import Floats
from simulator.machine import Machine, NotSettledError
from simulator.settling import Settler
from simulator.tabulate_columns import (
    CARD_ANGLES,
    Column,
    Form,
    columns_of,
    reading,
    reduced,
    restored,
    reversals,
    scale,
)
from simulator.tabulate_domain import Domain, OutsideTableError, Spot
from simulator.tabulate_sheet import Bend, Sheet, fault_ladder, fit, healthy_ladder, pairs
from simulator.tabulate_store import SheetStore

# What a held-out run may differ by: flow and pressures, power (shares), discharge temperatures.
_ALLOWED_SHARE: Final = 0.003
_ALLOWED_POWER: Final = 0.005
_ALLOWED_K: Final = 0.4
_ALLOWED_DEG: Final = 2.0  # of reversal
TOO_COARSE: Final = 3.0  # times the allowed error: such a table is refused
_BENDS: Final = MappingProxyType(
    {"speed_rad_s": Bend.ROUGH, "suction_pressure_pa": Bend.PLAIN, "discharge_pressure_pa": Bend.PLAIN}
)
_FIRST_TURNS: Final = 40
_FAILED: Final = 0.1  # largest share of runs that may fail


class TableError(RuntimeError):
    def __init__(self, unit: str, words: str, what: str) -> None:
        super().__init__(f"{unit}: no table of {words}: {what}")


@dataclass(frozen=True, slots=True, kw_only=True)
class Table:
    """One unit at one load step, over a domain."""

    unit: Unit
    equipment: Equipment
    domain: Domain
    spots: tuple[Spot, ...]
    largest: tuple[float, ...]  # size of each spot's fault
    columns: tuple[Column, ...]
    sheets: Mapping[tuple[int, ...], Sheet]  # by the spots they are of

    def values(self, boundary: Mapping[str, Floats], sizes: Floats) -> dict[str, Floats]:
        """Settled values by name [SI], and the reversal of each cylinder [rad].

        Parameters
        ----------
        boundary : Mapping[str, Floats]
            Fields of `Surroundings` that vary, and the gas shares, (n,) each.
        sizes : Floats
            Fault sizes, (n, spots).

        Raises
        ------
        OutsideTableError
            Something lies outside the table.
        """
        points = self._points(boundary, sizes)
        count = len(self.columns)
        rows = self._sum(points, slice(0, count), Sheet.at)
        full = {
            name: self._full(name, boundary, len(points)) for name in ("suction_pressure_pa", "speed_rad_s")
        }
        rows = restored(self.columns, rows, scale(self.columns, full))
        found = {c.name: rows[:, k] for k, c in enumerate(self.columns)}
        found["electrical_power_w"] = electrical(self.equipment, found["indicated_power_w"])
        for k, cylinder in enumerate(self.unit.cylinders):
            begin = count + k * CARD_ANGLES
            loads = self._sum(points, slice(begin, begin + CARD_ANGLES), Sheet.loads_at)
            found[f"cylinder{cylinder.number}.reversal_rad"] = np.radians(reversals(loads))
        return found

    @property
    def held_out(self) -> float:
        """Worst error of a held-out run / what is allowed, over all sheets."""
        return max(sheet.held_out for sheet in self.sheets.values())

    @property
    def value_names(self) -> tuple[str, ...]:
        """Names that `values` gives."""
        reversal = (f"cylinder{c.number}.reversal_rad" for c in self.unit.cylinders)
        return (*(c.name for c in self.columns), "electrical_power_w", *reversal)

    def _full(self, name: str, boundary: Mapping[str, Floats], count: int) -> Floats:
        if any(axis.name == name for axis in self.domain.axes):
            return np.asarray(boundary[name], dtype=float)
        return np.full(count, float(getattr(self.domain.usual, name)))

    def _points(self, boundary: Mapping[str, Floats], sizes: Floats) -> Floats:
        points = self.domain.points(self.unit.id, boundary)
        for k, spot in enumerate(self.spots):
            worst = float(sizes[:, k].max(initial=0.0))
            if worst > self.largest[k] * (1.0 + 1e-9):
                raise OutsideTableError(self.unit.id, spot.words, worst, 0.0, self.largest[k])
        return np.concatenate((points, sizes / np.array([self.largest]).reshape(1, -1)), axis=1)

    def _sum(self, points: Floats, columns: slice, ask: Callable[[Sheet, Floats, slice], Floats]) -> Floats:
        axes = len(self.domain.axes)
        total = ask(self.sheets[()], points[:, :axes], columns)
        for spots, sheet in self.sheets.items():
            if not spots:
                continue
            own = [*range(axes), *(axes + k for k in spots)]
            there = np.flatnonzero((points[:, own[axes:]] > 0.0).all(axis=1))
            if len(there):
                total[there] += ask(sheet, points[np.ix_(there, own)], columns)
        for k, j in pairs(len(self.spots)):
            both = (points[:, axes + k] > 0.0) & (points[:, axes + j] > 0.0)
            if (k, j) not in self.sheets and both.any():
                words = f"{self.spots[k].words} and {self.spots[j].words}"
                raise TableError(self.unit.id, words, "they are present at once, which was not foreseen")
        return total


def electrical(equipment: Equipment, indicated_w: Floats) -> Floats:
    """What the driver draws [W]."""
    driver = equipment.driver
    shaft = indicated_w / driver.mechanical_efficiency + driver.friction_w
    load = shaft / driver.rated_power_w
    return np.asarray(shaft + driver.rated_power_w * (driver.fixed_loss + driver.load_loss * load**2))


class Tabulator:
    """Makes the tables of one unit and keeps their sheets.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    equipment : Equipment
        What the nameplate does not say.
    draw : SealedDraw or int
        The sealed draw or its seed.
    steps : int
        Integration steps a turn.
    folder : Path or None
        Where sheets are kept; None: nowhere.
    """

    def __init__(
        self, unit: Unit, equipment: Equipment, draw: SealedDraw | int, *, steps: int, folder: Path | None
    ) -> None:
        self._unit, self._equipment, self._draw, self._steps = unit, equipment, draw, steps
        self._columns = columns_of(unit)
        self._store = SheetStore(folder, (unit, equipment, draw, steps))
        self.runs = 0
        self.turns = 0
        self.watch: Callable[[], None] = lambda: None

    def table(
        self,
        domain: Domain,
        spots: Sequence[tuple[Spot, float]] = (),
        together: Sequence[tuple[int, int]] | None = None,
    ) -> Table:
        """A table over a domain, with faults up to given sizes.

        Parameters
        ----------
        domain : Domain
            What may vary.
        spots : sequence of Spot and float
            Faults and their largest sizes.
        together : sequence of pairs or None
            Which two faults occur at once; None: any two.

        Raises
        ------
        TableError
            The machine cannot be tabulated there: runs fail or are not foretold.
        """
        known = tuple(s for s, _ in spots)
        table = Table(
            unit=self._unit, equipment=self._equipment, domain=domain, spots=known,
            largest=tuple(size for _, size in spots), columns=self._columns, sheets={},
        )  # fmt: skip
        wanted: list[tuple[int, ...]] = [(), *((k,) for k in range(len(spots)))]
        wanted += pairs(len(spots)) if together is None else together
        for members in wanted:
            sheet = self._sheet(table, members)
            table = replace(table, sheets={**table.sheets, members: sheet})
        return table

    def _sheet(self, table: Table, members: tuple[int, ...]) -> Sheet:
        kept = [(table.spots[k], table.largest[k]) for k in members]
        key = (table.domain, kept)
        sheet = self._store.load(key)
        if sheet is None:
            sheet = self._fit(table, members)
            self._store.save(key, sheet)
        words = " and ".join(s.words for s, _ in kept) or "the machine without faults"
        if sheet.held_out > TOO_COARSE:
            what = f"a run is missed by {sheet.held_out:.1f} times what is allowed; the ranges are too wide"
            raise TableError(self._unit.id, words, what)
        return sheet

    def _fit(self, table: Table, members: tuple[int, ...]) -> Sheet:
        bends = [_BENDS.get(a.name, Bend.SMOOTH) for a in table.domain.axes]
        axes = len(bends)

        def known(points: Floats) -> Floats:
            total = np.zeros(1)
            for spots, sheet in table.sheets.items():
                if set(spots) < set(members):
                    own = [*range(axes), *(axes + members.index(k) for k in spots)]
                    total = total + sheet.at(points[:, own], slice(None))
            return total

        ladder = fault_ladder(bends, len(members)) if members else healthy_ladder(bends)
        runs = self._runner(table, members)
        return fit(ladder, runs, self._judge, known if members else None)

    def _runner(self, table: Table, members: tuple[int, ...]) -> Callable[[Floats], Floats]:
        settler: Settler | None = None
        axes = len(table.domain.axes)

        def run(points: Floats) -> Floats:
            nonlocal settler
            rows, failed = [], 0
            for point in points:
                around = table.domain.surroundings(point[:axes])
                sizes = [float(s) * table.largest[k] for k, s in zip(members, point[axes:], strict=True)]
                faults = table.domain.faults([table.spots[k] for k in members], sizes)
                if settler is None:
                    machine = Machine(self._unit, self._equipment, around, self._draw, steps=self._steps)
                    machine.hasten(_FIRST_TURNS)
                    settler = Settler(machine)
                before = settler.turns
                try:
                    outcome = settler.settle(point, around, faults)
                    row = reading(settler.machine, outcome)[None]
                    rows.append(reduced(self._columns, row, _scale_of(self._columns, around))[0])
                except NotSettledError:
                    failed += 1
                    rows.append(np.full(rows[-1].shape if rows else (1,), np.nan))
                self.runs += 1
                self.turns += settler.turns - before
                self.watch()
            if failed > _FAILED * len(points):
                raise TableError(
                    self._unit.id, "this domain", f"{failed} of {len(points)} runs do not settle"
                )
            return np.array(rows)

        return run

    def _judge(self, rows: Floats, miss: Floats) -> Floats:
        """Worst miss of each run / what is allowed."""
        count = len(self._columns)
        worst = (np.abs(miss[:, :count]) / self._allowed(rows)).max(axis=1)
        for k in range(len(self._unit.cylinders)):
            own = slice(count + k * CARD_ANGLES, count + (k + 1) * CARD_ANGLES)
            apart = reversals(rows[:, own]) - reversals(rows[:, own] - miss[:, own])
            worst = np.maximum(worst, np.abs(apart) / _ALLOWED_DEG)
        return np.asarray(worst)

    def _allowed(self, rows: Floats) -> Floats:
        """Allowed errors of the columns without loads; what no tag shows is not judged."""
        size = np.abs(rows[:, : len(self._columns)]).mean(axis=0)
        limits = []
        for column, mean in zip(self._columns, size, strict=True):
            if column.form is Form.LOGARITHM:
                limits.append(_ALLOWED_SHARE)
            elif column.name.endswith("power_w"):
                limits.append(_ALLOWED_POWER * mean)
            elif column.form in (Form.PER_SWEPT, Form.PER_SPEED):
                limits.append(_ALLOWED_SHARE * mean)
            elif column.name.endswith(".discharge_temperature_k"):
                limits.append(_ALLOWED_K)
            else:
                limits.append(np.inf)
        return np.array(limits)


def _scale_of(columns: Sequence[Column], around: object) -> Floats:
    names = ("suction_pressure_pa", "speed_rad_s")
    return scale(columns, {n: np.array([float(getattr(around, n))]) for n in names})
