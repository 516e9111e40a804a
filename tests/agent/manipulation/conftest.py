"""One small invented unit with every kind of input, and readings for it."""

import math
from collections.abc import Callable

import pytest

from agent.records import Quality, Reading
from agent.siteplan.plan import Input, UnitPlan
from model.machine import Cylinder, End, GasDomain, LoadStep, Side, Stage, Unit

BUS, DCS = "bus", "dcs"


def make_input(quantity: str, subject: str, unit: str, **changes: object) -> Input:
    fields: dict[str, object] = {
        "quantity": quantity,
        "subject": subject,
        "tag": f"{subject}-{quantity}",
        "source": BUS,
        "address": f"site/{subject}/{quantity}",
        "unit": unit,
        "scale": 1.0,
        "offset": 0.0,
        "span_low": -math.inf,
        "span_high": math.inf,
        "accuracy": 0.0,
        "tap": "somewhere",
        "stale_after_s": 10.0,
        "on_change": False,
        "required": True,
    }
    return Input(**(fields | changes))  # type: ignore[arg-type]


def make_unit() -> Unit:
    ends = tuple(
        End(side=side, clearance=0.16, suction_area_ratio=0.06, discharge_area_ratio=0.06) for side in Side
    )
    cylinder = Cylinder(number=1, bore_m=0.2, rod_diameter_m=0.06, reciprocating_mass_kg=160.0, ends=ends)
    steps = (
        LoadStep(word="100", index=0, held_open=frozenset()),
        LoadStep(word="50", index=1, held_open=frozenset({(1, Side.HEAD)})),
    )
    return Unit(
        id="C-1",
        name="invented",
        service="air",
        stroke_m=0.14,
        connecting_rod_m=0.36,
        rated_speed_rad_s=100.0,
        ambient_pressure_pa=101300.0,
        composition={"nitrogen": 1.0},
        domain=GasDomain(
            low_temperature_k=270.0, high_temperature_k=450.0, low_pressure_pa=1e5, high_pressure_pa=1e7
        ),
        stages=(Stage(number=1, cylinders=(cylinder,)),),
        load_steps=steps,
    )


@pytest.fixture
def plan() -> UnitPlan:
    """Inputs: 0 and 1 pressures (barg), 2 and 3 temperatures (degC), 4 speed, 5 word, 6 switch."""
    pressure = {"scale": 1e5, "offset": 101300.0, "span_low": 101300.0, "span_high": 4101300.0}
    temperature = {"offset": 273.15, "span_low": 253.15, "span_high": 473.15}
    return UnitPlan(
        unit=make_unit(),
        inputs=(
            make_input("suction_pressure", "stage1", "barg", **pressure),
            make_input("discharge_pressure", "stage1", "barg", **pressure),
            make_input("suction_temperature", "stage1", "degC", **temperature),
            make_input("discharge_temperature", "stage1", "degC", **temperature),
            make_input("speed", "unit", "rad/s", span_low=0.0, span_high=150.0),
            make_input("load_step", "unit", "word", source=DCS, on_change=True),
            make_input("run_signal", "unit", "switch", source=DCS, on_change=True),
        ),
    )


@pytest.fixture
def read(plan: UnitPlan) -> Callable[..., Reading]:
    """Makes a reading of input ``place`` at a source time."""

    def make(
        place: int,
        source_time: float,
        value: float | None = None,
        *,
        word: str | None = None,
        quality: Quality = Quality.GOOD,
    ) -> Reading:
        entry = plan.inputs[place]
        return Reading(
            source=entry.source,
            address=entry.address,
            source_time=source_time,
            received_time=source_time + 0.1,
            value=value,
            word=word,
            quality=quality,
        )

    return make
