"""A store of the invented machines, written by the real writers and computed by the real model."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from typing import Self

import numpy as np

from agent.journal.sqlite import JournalWriter
from agent.pipeline import input_columns, result_columns
from agent.records import (
    AlarmEvent,
    AlarmState,
    Commit,
    DerivedRow,
    EventKind,
    Frame,
    LinkState,
    Quality,
    SourceStatus,
)
from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan, UnitPlan
from agent.storage.sqlite_series import SeriesWriter
from agent.unit_line import UnitLine
from model.gas import load_or_build

ROOT = Path(__file__).resolve().parents[2]
SITE_FILE = ROOT / "simulator" / "sites" / "ostmere.yaml"
BAR = 1e5
RPM = math.pi / 30
NORMAL_M3_H = 101325 / (8.314462618 * 273.15) / 3600  # mol/s in one normal cubic metre an hour

# Near the rated points of the machines; only that they are possible matters here. # from memory
K110 = {
    "stage1.suction_pressure": 29.81 * BAR,
    "stage1.discharge_pressure": 70.46 * BAR,
    "stage1.suction_temperature": 303.2,
    "stage1.discharge_temperature": 374.3,
    "unit.speed": 900 * RPM,
    "unit.flow": 20_600 * NORMAL_M3_H,
    "unit.electrical_power": 655e3,
    "unit.load_step": 0.0,
    "unit.run_signal": 1.0,
}
K220 = {
    "stage1.suction_pressure": 17.88 * BAR,
    "stage1.discharge_pressure": 37.78 * BAR,
    "stage2.suction_pressure": 37.57 * BAR,
    "stage2.discharge_pressure": 75.99 * BAR,
    "stage3.suction_pressure": 75.41 * BAR,
    "stage3.discharge_pressure": 141.18 * BAR,
    "stage1.suction_temperature": 308.0,
    "stage1.discharge_temperature": 381.4,
    "stage2.suction_temperature": 309.0,
    "stage2.discharge_temperature": 377.4,
    "stage3.suction_temperature": 308.0,
    "stage3.discharge_temperature": 370.5,
    "unit.flow": 28_000 * NORMAL_M3_H,
    "unit.electrical_power": 2_560e3,
    "unit.load_step": 0.0,
    "unit.run_signal": 1.0,
}
K330 = {
    "stage1.suction_pressure": 4.97 * BAR,
    "stage1.discharge_pressure": 12.45 * BAR,
    "stage2.suction_pressure": 12.39 * BAR,
    "stage2.discharge_pressure": 34.18 * BAR,
    "stage1.suction_temperature": 300.0,
    "stage1.discharge_temperature": 370.7,
    "stage2.suction_temperature": 308.0,
    "stage2.discharge_temperature": 389.2,
    "unit.speed": 742 * RPM,
    "unit.flow": 13_700 * NORMAL_M3_H,
    "unit.electrical_power": 1_040e3,
    "unit.load_step": 0.0,
    "unit.run_signal": 1.0,
}
RATED = {"K-110": K110, "K-220": K220, "K-330": K330}

Lost = Mapping[tuple[str, str], Quality]  # (unit, input) -> why it has no number


@cache
def site() -> SitePlan:
    return load_site(SITE_FILE)


@dataclass(kw_only=True)
class WrittenStore:
    """Writes ticks of all units; ``changes`` replace rated inputs, ``lost`` ones have no number."""

    data: Path
    gas_cache: Path
    plan: SitePlan = field(default_factory=site)
    noise: float = 0.002

    def __enter__(self) -> Self:
        self.data.mkdir(parents=True, exist_ok=True)
        self.series = SeriesWriter(self.data / "series.db")
        self.journal = JournalWriter(self.data / "journal.db")
        self.series.open()
        self.journal.open()
        for plan in self.plan.units:
            self.series.register(plan.id, input_columns(plan), result_columns(plan))
        self.configuration = self.series.configuration(self.plan.digest, self.plan.text, 0.0)
        self.random = np.random.default_rng(7)
        self.lines: dict[str, UnitLine] = {}
        return self

    def __exit__(self, *_: object) -> None:
        self.series.close()
        self.journal.close()

    def ticks(
        self,
        first: int,
        count: int = 1,
        *,
        changes: Mapping[str, Mapping[str, float]] | None = None,
        lost: Lost | None = None,
        units: tuple[str, ...] | None = None,
        source_up: bool = True,
    ) -> dict[str, DerivedRow]:
        """Write ``count`` ticks and give the last row of each unit."""
        frames: list[Frame] = []
        rows: list[DerivedRow] = []
        for plan in self.plan.units:
            if units is not None and plan.id not in units:
                continue
            own = [
                self._frame(plan, first + i, (changes or {}).get(plan.id, {}), lost or {})
                for i in range(count)
            ]
            frames += own
            rows += self._line(plan).live(own)
        self.series.commit(Commit(frames=frames, derived=rows, sources=self._sources(first, up=source_up)))
        return {row.unit: row for row in rows}

    def alarm(self, tick: int, unit: str = "K-220", alarm: str = "reversal") -> AlarmEvent:
        """Raise an alarm."""
        event = AlarmEvent(
            unit=unit, alarm=alarm, tick=tick, kind=EventKind.RAISED, state=AlarmState.UNACKNOWLEDGED,
            text="cylinder 4: reversal 35 ± 2 degrees, minimum 40 degrees", value=math.radians(35),
            limit=math.radians(40), subject="cylinder4",
        )  # fmt: skip
        self.journal.append([event], {unit: tick})
        return event

    def answer(self, tick: int) -> int:
        """Stand in for the agent: acknowledge what was asked for, and say how many requests there were."""
        events = [
            AlarmEvent(
                unit=r.unit, alarm=r.alarm, tick=tick, kind=EventKind.ACKNOWLEDGED,
                state=AlarmState.ACKNOWLEDGED, text="acknowledged",
                actor=r.actor, reason=r.reason, request=r.id,
            )
            for r in self.journal.pending_requests()
        ]  # fmt: skip
        if events:
            self.journal.append(events, {})
        return len(events)

    def _line(self, plan: UnitPlan) -> UnitLine:
        if plan.id not in self.lines:
            gas = load_or_build(plan.unit.composition, plan.unit.domain, self.gas_cache)
            self.lines[plan.id] = UnitLine(plan, gas, configuration=self.configuration)
        return self.lines[plan.id]

    def _frame(self, plan: UnitPlan, tick: int, changes: Mapping[str, float], lost: Lost) -> Frame:
        names = plan.input_names()
        values = np.array([(RATED[plan.id] | dict(changes))[n] for n in names])
        analogue = np.array([not n.endswith(("load_step", "run_signal")) for n in names])
        values *= 1 + self.noise * analogue * self.random.standard_normal(len(names)) * 0.2
        quality = np.array([int(lost.get((plan.id, n), Quality.GOOD)) for n in names], dtype=np.uint8)
        values[quality > Quality.UNCERTAIN] = np.nan
        return Frame(
            unit=plan.id, tick=tick, values=values.astype(np.float32), quality=quality,
            ages=np.full(len(names), 0.4, dtype=np.float32),
        )  # fmt: skip

    def _sources(self, tick: int, *, up: bool) -> tuple[SourceStatus, ...]:
        return tuple(
            SourceStatus(
                source=name, state=LinkState.UP if up else LinkState.DOWN, since=float(tick - 60),
                detail="" if up else "connection refused", received=12_345, rejected=2,
                last_rejection="ostmere/K-110/PT-1101: not a number", dropped=0, connections=1,
                clock_offset_s=0.12,
            )
            for name in self.plan.sources
        )  # fmt: skip
