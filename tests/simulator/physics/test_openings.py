"""Orifice flow against gas dynamics, and the motion of a valve plate."""

import math

import numpy as np
import pytest

from simulator.eos import critical_flow
from simulator.gas_data import GAS_CONSTANT
from simulator.valves import LARGEST_STEP, flow_function, held_back, molar_flow, plate_step


@pytest.mark.parametrize(
    ("k", "ratio", "constant"),
    [
        (1.1, 0.584679, 0.628360),
        (1.27, 0.551208, 0.661783),
        (1.3, 0.545728, 0.667262),
        (1.4, 0.528282, 0.684731),
        (1.67, 0.486669, 0.726661),
    ],
)
def test_critical_ratio_and_constant(k: float, ratio: float, constant: float) -> None:
    # source: one-dimensional gas dynamics; the values are in every textbook's table
    assert critical_flow(k) == pytest.approx((ratio, constant), abs=1e-6)


@pytest.mark.parametrize("k", [1.1, 1.27, 1.3, 1.4, 1.67])
def test_flow_function_follows_the_nozzle_equation(k: float) -> None:
    ratio, constant = critical_flow(k)
    for r in np.linspace(0.0, 0.9995, 400):
        if r <= ratio:
            exact = constant
        else:  # source: subsonic nozzle equation
            exact = math.sqrt(2.0 * k / (k - 1.0) * (r ** (2.0 / k) - r ** ((k + 1.0) / k)))
        assert flow_function(r, ratio, constant**2) == pytest.approx(exact, rel=0.004)


def test_choked_air_through_a_square_centimetre() -> None:
    ratio, constant = critical_flow(1.4)
    air = GAS_CONSTANT / 287.0  # kg/mol
    flow = molar_flow(1e-4, 7e5, 1e5, 7e5 / (GAS_CONSTANT * 300.0), air, ratio, constant**2)
    # source: C* A P / sqrt(R T), k 1.4, R 287 J/(kg K): 0.163349 kg/s
    assert flow * air == pytest.approx(0.163349, rel=1e-5)


def test_flow_function_is_continuous_where_it_turns_laminar() -> None:
    ratio, constant = critical_flow(1.3)
    below, above = (flow_function(1.0 - 2e-4 * f, ratio, constant**2) for f in (1.001, 0.999))
    assert below == pytest.approx(above, rel=2e-3)
    assert flow_function(1.0, ratio, constant**2) == 0.0


def test_a_step_never_removes_more_than_its_share_of_a_difference() -> None:
    # hand: a volume of 1 mol at 1 bar, 10 Pa to lose, stiffness 1.35
    flow, held = held_back(5.0, 10.0, 1e5, 1.0, 1e-3)
    assert held == 1.0
    assert 1e-3 * 1.35 * 1e5 * flow == pytest.approx(LARGEST_STEP * 10.0)
    assert held_back(5e-3, 10.0, 1e5, 1.0, 1e-3) == (5e-3, 0.0)


def test_a_plate_rests_where_its_spring_balances_the_pressure() -> None:
    lift = speed = 0.0
    for _ in range(20_000):
        lift, speed = plate_step(lift, speed, 800.0, 400.0, 1200.0, 600.0, 1e-4)
    assert lift == pytest.approx(0.5, abs=1e-9)  # hand: (800 - 400) / (1200 - 400)


@pytest.mark.parametrize("step", [1e-6, 1e-4, 1e-2])
def test_a_plate_stays_between_seat_and_stop_at_any_step(step: float) -> None:
    lift = speed = 0.0
    for i in range(2_000):
        difference = 5_000.0 if i % 50 < 25 else -5_000.0
        lift, speed = plate_step(lift, speed, difference, 400.0, 1200.0, 600.0, step)
        assert 0.0 <= lift <= 1.0


def test_a_free_plate_swings_at_its_natural_frequency() -> None:
    lift, speed, turns, before = 0.6, 0.0, [], 0.0
    step, frequency = 1e-6, 2.0 * math.pi * 100.0
    for i in range(30_000):
        lift, speed = plate_step(lift, speed, 800.0, 400.0, 1200.0, frequency, step)
        if before > 0.0 >= speed:
            turns.append(i * step)
        before = speed
    damped = 100.0 * math.sqrt(1.0 - 0.2**2)  # source: damped oscillator
    assert 1.0 / (turns[1] - turns[0]) == pytest.approx(damped, rel=0.01)
