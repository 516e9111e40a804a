"""The curves of one cylinder, re-evaluated from a stored frame: curves themselves are not stored."""

import math
import threading
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from agent.database import CACHE_FOLDER
from agent.siteplan.plan import SitePlan, UnitPlan
from dashboard.figures.look import Drawing
from dashboard.figures.pin_load import PinLoadCurves, pin_load_figure
from dashboard.figures.pv_card import EndCurve, pv_figure
from dashboard.live import Blob, blob_of
from dashboard.readings import Row
from dashboard.wording import NOT_EVALUATED, clock, quality_words, usable
from model.corrections import Corrections
from model.curves import Curves, curves
from model.errors import NotEvaluatedError
from model.gas import load_or_build
from model.machine import Cylinder, Stage
from model.measured import Measured
from model.surface import GasSurface


@dataclass(frozen=True, slots=True, kw_only=True)
class Asked:
    """What a page asked for: the cylinder of a unit, at a stored row."""

    plan: UnitPlan
    stage: Stage
    cylinder: Cylinder
    row: Row
    barometer_pa: float


class CurveBook:
    """Remembers gas surfaces and the newest answers; one evaluation serves every viewer of that cylinder."""

    def __init__(self, site: SitePlan, data: Path) -> None:
        self._site = site
        self._cache = data / CACHE_FOLDER
        self._lock = threading.Lock()
        self._surfaces: dict[str, GasSurface] = {}
        self._answers: dict[tuple[str, int], tuple[int, Blob]] = {}

    def answer(self, asked: Asked, *, now: float) -> Blob:
        """Figures of the cylinder at the row, or why there are none."""
        key = (asked.plan.id, asked.cylinder.number)
        with self._lock:
            held = self._answers.get(key)
            if held is None or held[0] != asked.row.tick:
                held = (asked.row.tick, blob_of(self._payload(asked, now=now)))
                self._answers[key] = held
            return held[1]

    def _payload(self, asked: Asked, *, now: float) -> dict[str, Any]:
        head = {
            "unit": asked.plan.id,
            "cylinder": asked.cylinder.number,
            "tick": asked.row.tick,
            "as_of": clock(asked.row.tick, self._site.zone, now=now),
        }
        fault = _fault(asked)
        if fault is not None:
            return head | {"fault": fault, "figures": {}}
        try:
            drawn = drawings(asked, self._curves(asked))
        except NotEvaluatedError as error:
            return head | {"fault": (NOT_EVALUATED, quality_words(int(error.verdict))), "figures": {}}
        return head | {"fault": None, "figures": {name: asdict(d) for name, d in drawn.items()}}

    def _curves(self, asked: Asked) -> Curves:
        unit = asked.plan.unit
        key = repr((sorted(unit.composition.items()), unit.domain))
        if key not in self._surfaces:
            self._surfaces[key] = load_or_build(unit.composition, unit.domain, self._cache)
        measured = Measured.from_inputs(
            unit, asked.row.input_names, np.asarray(asked.row.frame.values, dtype=np.float64)[np.newaxis, :]
        )
        return curves(unit, self._surfaces[key], Corrections.nominal(), measured, asked.cylinder.number)


def _fault(asked: Asked) -> tuple[str, str] | None:
    """No curve is drawn of a frame whose loads the agent did not evaluate."""
    name = f"{asked.cylinder.subject}.pin_load_tension"
    code = asked.row.code(name)
    if asked.row.usable(name):
        return None
    return (NOT_EVALUATED, "an input is missing" if usable(code) else quality_words(code))


def drawings(asked: Asked, found: Curves) -> dict[str, Drawing]:
    """The charts of the Unit page, by the name of their place there."""
    suction = asked.row.value(f"{asked.stage.subject}.suction_pressure")
    discharge = asked.row.value(f"{asked.stage.subject}.discharge_pressure")
    highest = max(float(end.volume_m3.max()) for end in found.ends)
    drawn = {
        f"pv-{end.side.value}": pv_figure(
            EndCurve(
                side=end.side.value, held_open=end.held_open, volume_m3=end.volume_m3,
                pressure_pa=end.pressure_pa, suction_pressure_pa=suction, discharge_pressure_pa=discharge,
            ),
            highest_volume_m3=highest,
            barometer_pa=asked.barometer_pa,
        )
        for end in found.ends
    }  # fmt: skip
    drawn["pin-load"] = pin_load_figure(
        PinLoadCurves(
            crank_angle_deg=np.degrees(found.angle_rad),
            pin_load_n=found.pin_load_n,
            gas_load_n=found.gas_load_n,
            inertia_load_n=found.inertia_load_n,
            tension_limit_n=_limit(asked, "pin_load_tension"),
            compression_limit_n=_limit(asked, "pin_load_compression"),
            reversal_deg=[(math.degrees(a), math.degrees(b)) for a, b in found.reversal_intervals],
        )
    )
    return drawn


def _limit(asked: Asked, key: str) -> float | None:
    limit = asked.plan.unit.limit(asked.cylinder.subject, key)
    return None if limit is None else limit.value
