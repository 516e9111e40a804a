"""An invented two-throw machine and rows of it, by name."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pytest

from agent.records import DerivedRow, Frame, Quality, RunState
from agent.siteplan.plan import AlarmSetting, Input, UnitPlan
from model.machine import Cylinder, End, GasDomain, Limit, LoadStep, Side, Stage, Unit

LIMITS = {
    "gas_load_tension": 170e3,
    "gas_load_compression": 170e3,
    "pin_load_tension": 160e3,
    "pin_load_compression": 160e3,
    "reversal_degrees": math.radians(40),
    "reversal_percent": 0.03,
}
QUIET = {
    "gas_load_tension": 119e3,
    "gas_load_compression": 147e3,
    "pin_load_tension": 90e3,
    "pin_load_compression": 137e3,
    "reversal_degrees": math.radians(171),
    "reversal_percent": 0.66,
}
BAND_SHARE = 0.01  # standard uncertainty of the loads


def _unit(limits: tuple[Limit, ...]) -> Unit:
    cylinders = tuple(
        Cylinder(
            number=n, bore_m=0.195, rod_diameter_m=0.063, reciprocating_mass_kg=165.0,
            ends=tuple(
                End(side=s, clearance=0.16, suction_area_ratio=0.06, discharge_area_ratio=0.06) for s in Side
            ),
        )
        for n in (1, 2)
    )  # fmt: skip
    return Unit(
        id="K-1", name="Test unit", service="gas", stroke_m=0.14, connecting_rod_m=0.36,
        rated_speed_rad_s=94.2, ambient_pressure_pa=101_300.0, composition={"methane": 1.0},
        domain=GasDomain(
            low_temperature_k=273.0, high_temperature_k=450.0, low_pressure_pa=1e5, high_pressure_pa=1e7
        ),
        stages=(Stage(number=1, cylinders=cylinders[:1]), Stage(number=2, cylinders=cylinders[1:])),
        load_steps=(LoadStep(word="100", index=0, held_open=frozenset()),), limits=limits,
    )  # fmt: skip


def _input(stage: int) -> Input:
    return Input(
        quantity="discharge_temperature", subject=f"stage{stage}", tag=f"TT-{stage}", source="bus",
        address=f"x/{stage}", unit="degC", scale=1.0, offset=273.15, span_low=273.15, span_high=473.15,
        accuracy=1.0, tap="nozzle", stale_after_s=10.0, on_change=False, required=True,
    )  # fmt: skip


@dataclass
class Machine:
    """Rows of the machine; what is not named is quiet."""

    plan: UnitPlan
    quiet: dict[str, float] = field(default_factory=dict)

    def tick(
        self,
        tick: int,
        values: Mapping[str, float] | None = None,
        *,
        quality: Mapping[str, Quality] | None = None,
        state: RunState = RunState.RUNNING,
    ) -> tuple[DerivedRow, Frame]:
        """``values`` and ``quality`` by series name; a temperature moves its margin with it."""
        held = {**self.quiet, **(values or {}), "unit.run_state": float(state)}
        for stage in (1, 2):
            name = f"stage{stage}.discharge_temperature"
            limit = self.plan.unit.limit(f"stage{stage}", "discharge_temperature")
            if limit is not None and name in held:
                held.setdefault(f"{name}_margin", limit.value - held[name])
        marks = quality or {}
        row_names, frame_names = self.plan.result_names(), self.plan.input_names()
        row = DerivedRow(
            unit=self.plan.id, tick=tick, configuration=1,
            values=np.array([held.get(n, math.nan) for n in row_names], np.float32),
            quality=np.array([marks.get(n, Quality.GOOD) for n in row_names], np.uint8),
        )  # fmt: skip
        frame = Frame(
            unit=self.plan.id, tick=tick,
            values=np.array([held[n] for n in frame_names], np.float32),
            quality=np.array([marks.get(n, Quality.GOOD) for n in frame_names], np.uint8),
            ages=np.zeros(len(frame_names), np.float32),
        )  # fmt: skip
        return row, frame

    def without(self, *quantities: str) -> "Machine":
        """The same machine where nobody entered these limits."""
        kept = tuple(entry for entry in self.plan.unit.limits if entry.quantity not in quantities)
        return Machine(UnitPlan(unit=_unit(kept), inputs=self.plan.inputs), self.quiet)

    def with_settings(self, *settings: AlarmSetting) -> "Machine":
        plan = UnitPlan(unit=self.plan.unit, inputs=self.plan.inputs, alarm_settings=settings)
        return Machine(plan, self.quiet)

    def with_inputs(self, count: int) -> "Machine":
        return Machine(UnitPlan(unit=self.plan.unit, inputs=self.plan.inputs[:count]), self.quiet)


@pytest.fixture(scope="session")
def machine() -> Machine:
    def limit(quantity: str, subject: str, value: float) -> Limit:
        return Limit(
            quantity=quantity, subject=subject, value=value, source="sheet 7 (invented)", entered_by="R. Fenn"
        )

    limits = [limit(q, f"cylinder{n}", v) for q, v in LIMITS.items() for n in (1, 2)]
    limits += [limit("discharge_temperature", f"stage{n}", 403.15) for n in (1, 2)]
    quiet: dict[str, float] = {}
    for n in (1, 2):
        quiet[f"stage{n}.discharge_temperature"] = 374.0
        for quantity, value in QUIET.items():
            quiet[f"cylinder{n}.{quantity}"] = value
            share = 0.0 if quantity.startswith("reversal") else BAND_SHARE
            quiet[f"cylinder{n}.{quantity}.u"] = value * share
        quiet[f"cylinder{n}.reversal_degrees.u"] = math.radians(1)
        quiet[f"cylinder{n}.reversal_percent.u"] = 0.002
    return Machine(UnitPlan(unit=_unit(tuple(limits)), inputs=(_input(1), _input(2))), quiet)
