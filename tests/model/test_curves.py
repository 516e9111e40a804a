"""The drawn turn carries the stored numbers."""

import math

import numpy as np
import pytest

from model.curves import Curves, curves
from model.errors import NotEvaluatedError
from model.evaluate import Corrections, Measured, evaluate
from model.machine import Side
from model.verdicts import Verdict
from tests.model.nameplates import (
    BOOSTER_FRAME,
    BOOSTER_INPUTS,
    MAKE_UP_FRAME,
    MAKE_UP_INPUTS,
    RPM,
    booster,
    make_up,
)
from tests.model.surfaces import hydrogen_rich, natural_gas

NOMINAL = Corrections.nominal()


def booster_frame(step: float = 0.0, rpm: float = 900.0, ps: float = 29.81e5) -> Measured:
    frame = BOOSTER_FRAME.copy()
    frame[BOOSTER_INPUTS.index("unit.load_step")] = step
    frame[BOOSTER_INPUTS.index("unit.speed")] = rpm * RPM
    frame[0] = ps
    return Measured.from_inputs(booster(), BOOSTER_INPUTS, frame)


def total_degrees(found: Curves) -> list[float]:
    """Lengths of the reversal intervals, the ones at both ends of the turn joined. [deg]"""
    lengths = [math.degrees(end - start) for start, end in found.reversal_intervals]
    if len(lengths) > 1 and found.reversal_intervals[0][0] == 0:
        lengths[0] += lengths.pop()
    return lengths


@pytest.mark.parametrize("step", [0.0, 1.0, 2.0, 3.0])
@pytest.mark.parametrize("rpm", [600.0, 900.0])
@pytest.mark.parametrize("ps", [25e5, 29.81e5, 40e5])
def test_extremes_and_reversal_of_the_drawn_loads_are_the_stored_ones(
    step: float, rpm: float, ps: float
) -> None:
    unit, gas, measured = booster(), natural_gas(), booster_frame(step, rpm, ps)
    found = curves(unit, gas, NOMINAL, measured, 1)
    stored = evaluate(unit, gas, NOMINAL, measured)
    for load, key in ((found.pin_load_n, "pin_load"), (found.gas_load_n, "gas_load")):
        for extreme, side in ((load.max(), "tension"), (-load.min(), "compression")):
            value = float(stored.column(f"cylinder1.{key}_{side}").values[0])
            assert max(extreme, 0) == pytest.approx(value, rel=2e-3, abs=50.0)
    degrees = math.degrees(float(stored.column("cylinder1.reversal_degrees").values[0]))
    assert max(total_degrees(found), default=0.0) == pytest.approx(degrees, abs=0.1)


def test_make_up_cylinders_draw_their_stored_peaks() -> None:
    measured = Measured.from_inputs(make_up(), MAKE_UP_INPUTS, MAKE_UP_FRAME)
    for number in (1, 2, 3, 4):
        found = curves(make_up(), hydrogen_rich(), NOMINAL, measured, number)
        assert found.pin_load_n.max() == pytest.approx(float(found.peaks.pin_tension_n[0]), rel=2e-3)
        assert -found.pin_load_n.min() == pytest.approx(float(found.peaks.pin_compression_n[0]), rel=2e-3)


def test_a_turn_is_whole_and_its_angles_rise() -> None:
    found = curves(booster(), natural_gas(), NOMINAL, booster_frame(), 2)
    assert found.angle_rad.shape == (361,)
    assert (np.diff(found.angle_rad) > 0).all()
    assert found.angle_rad[0] == 0
    assert found.angle_rad[-1] == pytest.approx(2 * math.pi)
    assert found.pin_load_n[0] == pytest.approx(found.pin_load_n[-1], rel=1e-6)
    assert found.pin_load_n == pytest.approx(found.gas_load_n + found.inertia_load_n)


def test_volumes_are_those_of_the_nameplate() -> None:
    unit = booster()
    found = curves(unit, natural_gas(), NOMINAL, booster_frame(), 1)
    head, crank = found.ends
    assert (head.side, crank.side) == (Side.HEAD, Side.CRANK)
    swept = unit.cylinders[0].head_area_m2 * unit.stroke_m
    # hand: clearance 16 % at the head-end dead centre
    assert head.volume_m3[0] == pytest.approx(0.16 * swept)
    assert head.volume_m3.max() == pytest.approx(1.16 * swept, rel=1e-4)
    swept = unit.cylinders[0].crank_area_m2 * unit.stroke_m
    assert crank.volume_m3[0] == pytest.approx(1.18 * swept)


def test_area_of_the_drawn_diagrams_is_the_power() -> None:
    unit, gas, measured = booster(), natural_gas(), booster_frame()
    found = curves(unit, gas, NOMINAL, measured, 1)
    area = sum(
        -np.sum((end.pressure_pa[1:] + end.pressure_pa[:-1]) / 2 * np.diff(end.volume_m3))
        for end in found.ends
    )
    stored = float(evaluate(unit, gas, NOMINAL, measured).column("unit.power").values[0])
    # hand: two like cylinders, 15 turns a second
    assert area * 15 * 2 == pytest.approx(stored, rel=1e-3)


def test_held_open_ends_are_marked() -> None:
    found = curves(booster(), natural_gas(), NOMINAL, booster_frame(step=1.0), 1)
    assert [end.held_open for end in found.ends] == [True, False]


def test_tension_and_compression_share_the_turn() -> None:
    found = curves(booster(), natural_gas(), NOMINAL, booster_frame(), 1)
    lengths = [
        sum(end - start for start, end in part)
        for part in (found.tension_intervals, found.compression_intervals)
    ]
    # all but the moments of no load
    assert 0.98 * 2 * math.pi < sum(lengths) < 2 * math.pi


def test_a_frame_that_cannot_be_evaluated_says_why() -> None:
    for measured, reason in (
        (booster_frame(ps=math.nan), Verdict.INPUT_MISSING),
        (booster_frame(step=9.0), Verdict.UNKNOWN_WORD),
        (booster_frame(ps=70e5), Verdict.OUT_OF_MODEL),
        (booster_frame(ps=12e5), Verdict.OUT_OF_MODEL),
    ):
        with pytest.raises(NotEvaluatedError) as caught:
            curves(booster(), natural_gas(), NOMINAL, measured, 1)
        assert caught.value.verdict is reason


def test_an_unknown_cylinder_is_refused() -> None:
    with pytest.raises(KeyError):
        curves(booster(), natural_gas(), NOMINAL, booster_frame(), 7)
