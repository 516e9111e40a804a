"""What load steps make of a cylinder: pockets, suction valves that close late, one-sided pistons."""

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from model.corrections import Corrections
from model.cycle import end_cycle, late_closing
from model.kinematics import piston_travel
from model.machine import Cylinder, LoadStep, OtherSide, Side, Stage, Unit
from model.stage import StageRun, StageState, run_stage
from model.stage_work import alike, stage_work
from model.throw import Throw
from tests.model.nameplates import booster
from tests.model.surfaces import natural_gas
from tests.model.test_cycle import END, path, trace

BOTH_HEADS = frozenset({(1, Side.HEAD), (2, Side.HEAD)})
LOADS = ("gas_tension_n", "gas_compression_n", "pin_tension_n", "pin_compression_n", "rod_tension_n",
         "rod_compression_n", "reversal_rad", "reversal_share")  # fmt: skip


def with_pockets(unit: Unit, fixed: float, variable: float) -> Unit:
    def plate(cylinder: Cylinder) -> Cylinder:
        ends = tuple(
            replace(e, pocket_clearance=fixed, variable_pocket_clearance=variable)
            if e.side is Side.HEAD
            else e
            for e in cylinder.ends
        )
        return replace(cylinder, ends=ends)

    stages = tuple(replace(s, cylinders=tuple(plate(c) for c in s.cylinders)) for s in unit.stages)
    steps = (
        LoadStep(word="100", index=0, held_open=frozenset()),
        LoadStep(word="75", index=1, held_open=frozenset(), pockets_open=BOTH_HEADS),
        LoadStep(word="60", index=2, held_open=frozenset(), pocket_positions=((1, Side.HEAD, 0.4),)),
        LoadStep(
            word="late",
            index=3,
            held_open=frozenset(),
            valve_closings=((1, Side.HEAD, 1.2), (2, Side.CRANK, 2.0)),
        ),
        LoadStep(word="50", index=4, held_open=BOTH_HEADS),
    )
    return replace(unit, stages=stages, load_steps=steps)


def larger(unit: Unit, added: dict[int, float]) -> Unit:
    """The same machine built with that clearance in its head ends, by cylinder."""

    def built(cylinder: Cylinder) -> Cylinder:
        more = added.get(cylinder.number, 0.0)
        ends = tuple(
            replace(e, clearance=e.clearance + more) if e.side is Side.HEAD else e for e in cylinder.ends
        )
        return replace(cylinder, ends=ends)

    (stage,) = unit.stages
    return replace(unit, stages=(replace(stage, cylinders=tuple(built(c) for c in stage.cylinders)),))


def at(steps: list[int], ratio: float = 2.4, speed: float = 94.0) -> StageState:
    count = len(steps)
    return StageState(
        suction_pressure_pa=np.full(count, 29e5), discharge_pressure_pa=np.full(count, 29e5 * ratio),
        suction_temperature_k=np.full(count, 303.0), speed_rad_s=np.full(count, speed),
        load_step=np.array(steps, np.intp),
    )  # fmt: skip


def run(unit: Unit, state: StageState) -> StageRun:
    return run_stage(unit, unit.stages[0], natural_gas(), Corrections.nominal(), state)


def assert_same(one: Throw, row: int, other: Throw) -> None:
    for name in ("flow_kg_s", "power_w", *LOADS):
        assert getattr(one, name)[row] == getattr(other, name)[0], name


def test_an_open_pocket_is_the_machine_built_with_that_clearance() -> None:
    unit = with_pockets(booster(), 0.25, 0.5)
    mixed = run(unit, at([0, 1, 2, 0]))
    for row, added in ((0, {}), (1, {1: 0.25, 2: 0.25}), (2, {1: 0.2})):
        built = run(larger(unit, added), at([0]))
        for number in (1, 2):
            assert_same(mixed.throws[number], row, built.throws[number])
        assert mixed.discharge_temperature_k[row] == built.discharge_temperature_k[0]


def test_frames_of_mixed_steps_are_those_of_each_step_alone() -> None:
    unit = with_pockets(booster(), 0.25, 0.5)
    order = [3, 1, 4, 0, 2, 1, 3, 0]
    mixed = run(unit, at(order))
    for row, step in enumerate(order):
        alone = run(unit, at([step]))
        for number in (1, 2):
            for name in ("flow_kg_s", "power_w", *LOADS):
                found = getattr(mixed.throws[number], name)[row]
                assert found == pytest.approx(getattr(alone.throws[number], name)[0], rel=1e-9), name


def test_flow_and_power_alone_are_those_of_the_whole_stage_in_every_step() -> None:
    unit = with_pockets(booster(), 0.25, 0.5)
    state = at([0, 1, 2, 3, 4])
    whole = run(unit, state)
    quick = stage_work(
        unit, alike(unit, unit.stages[0]), natural_gas(), Corrections.nominal(), state, angles=480
    )
    np.testing.assert_allclose(quick.flow_kg_s, whole.flow_kg_s, rtol=1e-12)
    np.testing.assert_allclose(quick.power_w, whole.power_w, rtol=1e-12)


def test_a_pocket_lowers_flow_and_power_and_leaves_the_temperature() -> None:
    """Without flow there is no power either: the gas is as hot as without the pocket."""
    found = run(with_pockets(booster(), 0.25, 0.5), at([0, 1]))
    # hand: 0.25 (r^(1/n) - 1) of each head end's sweep, about half of the stage's
    assert 0.09 < 1 - found.flow_kg_s[1] / found.flow_kg_s[0] < 0.17
    assert found.power_w[1] < found.power_w[0]
    assert found.discharge_temperature_k[1] == pytest.approx(found.discharge_temperature_k[0], abs=2.0)


@pytest.mark.parametrize("side", list(Side))
@pytest.mark.parametrize("angle", [0.3, 1.2, 2.0, 2.8])
def test_late_closing_pushes_back_what_the_piston_sweeps_until_then(side: Side, angle: float) -> None:
    end = replace(END, side=side, valve_closing_rad=angle)
    _, back = late_closing(end, 0.14, 0.36)
    # hand: the travel since that end's outer dead centre
    where = angle + math.pi if side is Side.HEAD else angle
    travel = float(piston_travel(where, 0.14, 0.36)) / 0.14
    assert back == pytest.approx(1 - travel if side is Side.HEAD else travel, abs=1e-12)


@pytest.mark.parametrize("angle", [0.3, 0.9, 1.4])
@pytest.mark.parametrize("ratio", [1.5, 2.4])
def test_an_ideal_end_that_closes_late_meets_its_closed_form(angle: float, ratio: float) -> None:
    # hand: m ~ V(closing) - c r^(1/n); W = n/(n-1) p1 (V(closing) - c r^(1/n)) (r^((n-1)/n) - 1)
    end = replace(END, valve_closing_rad=angle)
    n, c, ps = 1.3, end.clearance, 30e5
    _, back = late_closing(end, 0.14, 0.36)
    drawn = 1 + c - back - c * ratio ** (1 / n)
    pressure, efficiency = trace(ratio, Corrections.ideal(), end=end)
    assert efficiency == pytest.approx(drawn, abs=1e-12)
    theta = np.linspace(0, 2 * math.pi, pressure.size)
    volume = c + piston_travel(theta, 0.14, 0.36) / 0.14
    work = -float(((pressure[1:] + pressure[:-1]) / 2 * np.diff(volume)).sum())
    expected = n / (n - 1) * ps * drawn * (ratio ** ((n - 1) / n) - 1)
    assert work == pytest.approx(expected, rel=3e-3)


def test_an_end_that_closes_too_late_delivers_nothing_and_takes_no_work() -> None:
    end = replace(END, valve_closing_rad=2.9)
    pressure, efficiency = trace(3.0, Corrections.ideal(), end=end)
    assert efficiency == 0.0
    assert pressure.max() < 90e5
    theta = np.linspace(0, 2 * math.pi, pressure.size)
    volume = end.clearance + piston_travel(theta, 0.14, 0.36) / 0.14
    work = -float(((pressure[1:] + pressure[:-1]) / 2 * np.diff(volume)).sum())
    assert abs(work) < 0.02 * 30e5


@given(st.floats(0.0, 3.0), st.floats(0.01, 0.14))
@settings(max_examples=30, deadline=None)
def test_flow_falls_the_later_valves_close(angle: float, later: float) -> None:
    def efficiency(closing: float) -> float:
        end = replace(END, valve_closing_rad=closing)
        _, found = end_cycle(
            end, path(2.4), np.array([[94.0]]), np.array([[False]]), Corrections.nominal(), stroke_m=0.14,
            rod_m=0.36, natural_frequency_hz=150.0,
        )  # fmt: skip
        return float(found[0, 0])

    assert efficiency(angle + later) <= efficiency(angle)


def single(unit: Unit, side: Side, other: OtherSide, tail: float = 0.0) -> Unit:
    def cut(c: Cylinder) -> Cylinder:
        ends = tuple(e for e in c.ends if e.side is side)
        return replace(c, ends=ends, other_side=other, tail_rod_diameter_m=tail)

    (stage,) = unit.stages
    return replace(unit, stages=(replace(stage, cylinders=tuple(cut(c) for c in stage.cylinders)),))


@pytest.mark.parametrize("side", list(Side))
def test_what_is_behind_a_single_acting_piston_moves_its_load_by_pressure_times_area(side: Side) -> None:
    unit = booster()
    cylinder = unit.cylinders[0]
    to_suction = run(single(unit, side, OtherSide.SUCTION), at([0])).throws[1]
    to_air = run(single(unit, side, OtherSide.AMBIENT), at([0])).throws[1]
    # hand: between both, the other side differs by (suction - air) on its own area, all the turn
    other = Side.CRANK if side is Side.HEAD else Side.HEAD
    shift = (29e5 - 101300.0) * cylinder.area_m2(other)
    sign = 1.0 if side is Side.HEAD else -1.0
    assert to_suction.power_w[0] == to_air.power_w[0]
    low, high = to_air.gas_compression_n[0], to_suction.gas_compression_n[0]
    if side is Side.HEAD:  # suction pressure behind the piston pulls: less compression
        assert low - high == pytest.approx(shift, rel=1e-9)
    else:
        pulled, less = to_air.gas_tension_n[0], to_suction.gas_tension_n[0]
        assert pulled - less == pytest.approx(-sign * shift, rel=1e-9)


def test_a_tail_rod_as_thick_as_the_rod_makes_both_ends_alike() -> None:
    unit = booster()
    cylinder = replace(unit.cylinders[0], tail_rod_diameter_m=unit.cylinders[0].rod_diameter_m)
    head, crank = cylinder.ends
    cylinder = replace(cylinder, ends=(replace(head, clearance=0.17), replace(crank, clearance=0.17)))
    unit = replace(unit, stages=(Stage(number=1, cylinders=(cylinder,)),), connecting_rod_m=1e4)
    found = run(unit, at([0])).throws[1]
    # hand: without obliquity a symmetric piston pulls as hard as it pushes
    assert found.gas_tension_n[0] == pytest.approx(found.gas_compression_n[0], rel=1e-4)
    assert found.reversal_rad[0] == pytest.approx(math.pi, abs=0.02)


def test_a_distance_piece_pushes_on_the_section_of_the_rod() -> None:
    unit = booster()
    cylinder = unit.cylinders[0]

    def gas_loads(piece: float | None) -> Throw:
        one = replace(cylinder, distance_piece_pressure_pa=piece)
        return run(replace(unit, stages=(Stage(number=1, cylinders=(one,)),)), at([0])).throws[1]

    air, raised = gas_loads(None), gas_loads(6e5)
    # hand
    shift = (6e5 - 101300.0) * math.pi / 4 * cylinder.rod_diameter_m**2
    assert raised.gas_tension_n[0] - air.gas_tension_n[0] == pytest.approx(shift, rel=1e-9)
    assert air.gas_compression_n[0] - raised.gas_compression_n[0] == pytest.approx(shift, rel=1e-9)
    assert gas_loads(101300.0).gas_tension_n[0] == air.gas_tension_n[0]


def test_the_piston_rod_does_not_carry_the_crosshead() -> None:
    unit = booster()
    cylinder = replace(unit.cylinders[0], crosshead_mass_kg=60.0)
    found = run(replace(unit, stages=(Stage(number=1, cylinders=(cylinder,)),)), at([0])).throws[1]
    light = replace(cylinder, reciprocating_mass_kg=105.0, crosshead_mass_kg=0.0)
    lighter = run(replace(unit, stages=(Stage(number=1, cylinders=(light,)),)), at([0])).throws[1]
    # hand: the rod feels the machine that has no crosshead
    assert found.rod_tension_n[0] == pytest.approx(lighter.pin_tension_n[0], rel=1e-12)
    assert found.rod_compression_n[0] == pytest.approx(lighter.pin_compression_n[0], rel=1e-12)
    assert found.rod_tension_n[0] != found.pin_tension_n[0]
    assert lighter.rod_tension_n[0] == lighter.pin_tension_n[0]


def test_peaks_are_those_of_a_sixty_times_finer_turn() -> None:
    unit = with_pockets(booster(), 0.25, 0.5)
    cylinder = replace(unit.cylinders[0], crosshead_mass_kg=60.0)
    unit = replace(unit, stages=(Stage(number=1, cylinders=(cylinder,)),))
    for step in (0, 1, 3, 4):
        state = at([step], ratio=2.7)
        coarse = run(unit, state).throws[1]
        fine = run_stage(
            unit, unit.stages[0], natural_gas(), Corrections.nominal(), state, angles=28_800
        ).throws[1]
        for name in LOADS[:6]:  # the bar of the project for analytic peaks
            assert getattr(coarse, name)[0] == pytest.approx(getattr(fine, name)[0], rel=2e-3), (step, name)
        assert coarse.reversal_rad[0] == pytest.approx(fine.reversal_rad[0], abs=math.radians(0.05))


def test_a_load_step_without_anything_leaves_the_cylinder_itself() -> None:
    cylinder = booster().cylinders[0]
    assert LoadStep(word="100", index=0, held_open=frozenset()).made_of(cylinder) is cylinder


def test_what_pockets_add_is_told_by_end() -> None:
    unit = with_pockets(booster(), 0.25, 0.5)
    by_word = {step.word: unit.added_clearances(step) for step in unit.load_steps}
    assert by_word["100"] == {}
    assert by_word["75"] == {(1, Side.HEAD): 0.25, (2, Side.HEAD): 0.25}
    assert by_word["60"] == {(1, Side.HEAD): 0.2}
