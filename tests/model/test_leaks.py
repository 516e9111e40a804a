"""Leaks of one cylinder: hand limits and what must hold for any."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from model.corrections import Corrections
from model.leaks import Leak, LeakEffect, LeakKind, leak_effect, leak_flux
from model.machine import OtherSide, Side, Unit
from model.stage import StageState, run_stage
from tests.model.nameplates import booster
from tests.model.surfaces import natural_gas

KINDS = {
    "suction valve, head": Leak(kind=LeakKind.SUCTION_VALVE, cylinder=1, side=Side.HEAD),
    "suction valve, crank": Leak(kind=LeakKind.SUCTION_VALVE, cylinder=1, side=Side.CRANK),
    "discharge valve, head": Leak(kind=LeakKind.DISCHARGE_VALVE, cylinder=1, side=Side.HEAD),
    "discharge valve, crank": Leak(kind=LeakKind.DISCHARGE_VALVE, cylinder=1, side=Side.CRANK),
    "rings": Leak(kind=LeakKind.RING, cylinder=1),
    "packing": Leak(kind=LeakKind.PACKING, cylinder=1),
}
HEAT = [name for name in KINDS if name != "packing"]
SMALL = 5e-6  # m2, of pistons of 300 cm2


def state(count: int = 1, *, ratio: float = 2.4, speed: float = 94.0, step: int = 0) -> StageState:
    return StageState(
        suction_pressure_pa=np.full(count, 29e5), discharge_pressure_pa=np.full(count, 29e5 * ratio),
        suction_temperature_k=np.full(count, 303.0), speed_rad_s=np.full(count, speed),
        load_step=np.full(count, step, np.intp),
    )  # fmt: skip


def effect(leak: Leak, where: StageState, area: float = SMALL, unit: Unit | None = None) -> LeakEffect:
    unit = unit or booster()
    return leak_effect(
        unit, unit.stages[0], natural_gas(), Corrections.nominal(), where, leak=leak, area_m2=area
    )


@pytest.mark.parametrize("ratio", [0.3, 0.546, 0.7, 0.9, 0.99])
def test_flux_is_that_of_the_nozzle_of_a_perfect_gas(ratio: float) -> None:
    # hand: isentropic nozzle, exponent 1.3, choked below .5457
    k, up, rho = 1.3, 30e5, 25.0
    r = max(ratio, (2 / (k + 1)) ** (k / (k - 1)))
    exact = math.sqrt(2 * k / (k - 1) * up * rho * (r ** (2 / k) - r ** ((k + 1) / k)))
    assert leak_flux(up, rho, ratio * up) == pytest.approx(exact, rel=0.012)
    assert leak_flux(up, rho, up) == 0
    assert leak_flux(up, rho, 1.2 * up) == 0


@pytest.mark.parametrize("name", list(KINDS))
def test_small_leaks_count_in_proportion(name: str) -> None:
    one, ten = effect(KINDS[name], state()).per_area(), effect(KINDS[name], state(), SMALL / 10).per_area()
    assert one.flow_out_kg_s[0] == pytest.approx(ten.flow_out_kg_s[0], rel=1e-9)
    # the work of a suction valve leak is what two like terms leave of each other
    assert one.power_w[0] == pytest.approx(ten.power_w[0], rel=0.05, abs=5e6)


@pytest.mark.parametrize("name", HEAT)
def test_a_leak_back_costs_flow_and_heats(name: str) -> None:
    found = effect(KINDS[name], state())
    assert found.flow_in_kg_s[0] == found.flow_out_kg_s[0] < 0
    assert found.cylinder_temperature_k[0] > found.discharge_temperature_k[0] > 0


def test_a_packing_draws_more_and_delivers_less_and_heats_nothing() -> None:
    found = effect(KINDS["packing"], state())
    assert found.flow_in_kg_s[0] > 0 > found.flow_out_kg_s[0]
    # hand: what is drawn besides and what is not delivered are all that leaves
    assert found.flow_in_kg_s[0] - found.flow_out_kg_s[0] == pytest.approx(found.leak_kg_s[0], rel=1e-12)
    valve = effect(KINDS["suction valve, crank"], state())
    per_flow = abs(found.cylinder_temperature_k[0] / found.flow_out_kg_s[0])
    assert per_flow < 0.15 * abs(valve.cylinder_temperature_k[0] / valve.flow_out_kg_s[0])


def test_a_packing_at_steady_pressure_loses_what_the_flux_says() -> None:
    """A crank end held open stays near suction pressure all the turn, and has its loss from there."""
    step = booster().load_steps.index(next(s for s in booster().load_steps if s.word == "50 crank"))
    found = effect(KINDS["packing"], state(step=step))
    gas = natural_gas()
    # hand: choked flow of the preheated gas at suction pressure
    density = float(gas.density(303.0 + 0.05 * 55.0, 29e5))
    assert found.flow_in_kg_s[0] == pytest.approx(SMALL * float(leak_flux(29e5, density, 1e5)), rel=0.02)
    assert found.flow_out_kg_s[0] == 0


def test_an_end_held_open_hands_on_all_that_its_discharge_valve_lets_in() -> None:
    step = booster().load_steps.index(next(s for s in booster().load_steps if s.word == "50"))
    held = effect(KINDS["discharge valve, head"], state(step=step))
    assert held.flow_out_kg_s[0] < effect(KINDS["discharge valve, head"], state()).flow_out_kg_s[0] < 0
    assert held.power_w[0] == 0
    assert effect(KINDS["suction valve, head"], state(step=step)).flow_out_kg_s[0] == 0


def test_rings_of_a_single_acting_piston_leak_to_its_other_side() -> None:
    unit = booster()
    (stage,) = unit.stages

    def one_sided(other: OtherSide) -> Unit:
        cylinders = tuple(replace(c, ends=c.ends[:1], other_side=other) for c in stage.cylinders)
        return replace(unit, stages=(replace(stage, cylinders=cylinders),))

    ring, valve = KINDS["rings"], KINDS["suction valve, head"]
    to_suction = one_sided(OtherSide.SUCTION)
    found, like = effect(ring, state(), unit=to_suction), effect(valve, state(), unit=to_suction)
    assert found.flow_out_kg_s[0] == like.flow_out_kg_s[0]
    lost = effect(ring, state(), unit=one_sided(OtherSide.AMBIENT))
    assert lost.flow_in_kg_s[0] > 0 > lost.flow_out_kg_s[0]


def test_a_huge_leak_takes_no_more_than_there_is() -> None:
    healthy = run_stage(booster(), booster().stages[0], natural_gas(), Corrections.nominal(), state())
    found = effect(KINDS["rings"], state(), 0.01)
    assert found.flow_out_kg_s[0] == -healthy.throws[1].flow_kg_s[0]
    assert math.isnan(found.cylinder_temperature_k[0])


def test_no_such_cylinder_is_no_effect_but_an_error() -> None:
    with pytest.raises(KeyError):
        effect(Leak(kind=LeakKind.RING, cylinder=9), state())
    with pytest.raises(ValueError, match="names its end"):
        Leak(kind=LeakKind.SUCTION_VALVE, cylinder=1)
    with pytest.raises(ValueError, match="belongs to no end"):
        Leak(kind=LeakKind.PACKING, cylinder=1, side=Side.CRANK)


@pytest.mark.parametrize("name", list(KINDS))
def test_frames_are_their_own(name: str) -> None:
    """Chunks of 1 and 7 of uneven frames give what all of them give at once."""
    count = 23
    rng = np.random.default_rng(3)
    whole = StageState(
        suction_pressure_pa=rng.uniform(26e5, 32e5, count),
        discharge_pressure_pa=rng.uniform(50e5, 75e5, count),
        suction_temperature_k=rng.uniform(290, 310, count),
        speed_rad_s=rng.uniform(60, 95, count),
        load_step=rng.integers(0, 3, count),
    )
    every = effect(KINDS[name], whole)
    for size in (1, 7):
        for start in range(0, count, size):
            part = effect(KINDS[name], whole.part(slice(start, start + size)))
            for key in ("flow_in_kg_s", "flow_out_kg_s", "power_w", "cylinder_temperature_k"):
                np.testing.assert_allclose(
                    getattr(part, key), getattr(every, key)[start : start + size], rtol=1e-9, atol=1e-12
                )


@given(st.sampled_from(HEAT), st.floats(1.4, 3.0), st.floats(50.0, 95.0), st.floats(1.05, 1.5))
@settings(max_examples=25, deadline=None)
def test_a_larger_leak_loses_more(name: str, ratio: float, speed: float, factor: float) -> None:
    where = state(ratio=ratio, speed=speed)
    assert (
        effect(KINDS[name], where, factor * SMALL).flow_out_kg_s[0]
        < effect(KINDS[name], where).flow_out_kg_s[0]
    )
