# ruff: noqa: PLR0917 - one argument a column of the table
"""Piston motion and loads against textbook examples."""

import math

import numpy as np
import pytest

from simulator.kinematics import motion, reversal


def at(stroke: float, rod: float, rpm: float, degrees: float) -> tuple[float, float]:
    """Piston speed [m/s] and acceleration [m/s2] at one angle."""
    moved = motion(stroke, rod, 3600)
    i, w = round(degrees * 10), rpm * 2.0 * math.pi / 60.0
    return moved.per_radian_m[i] * w, moved.per_radian_squared_m[i] * w**2


@pytest.mark.parametrize(
    ("crank", "rod", "rpm", "degrees", "speed", "acceleration"),
    [
        # source: Khurmi and Gupta, Theory of Machines, examples 15.4 and 15.5; exact slider-crank values
        (0.30, 1.5, 180.0, 40.0, 4.19643, 85.5989),
        (0.15, 0.6, 450.0, 60.0, 6.90536, 124.949),
    ],
)
def test_speed_and_acceleration_of_textbook_engines(
    crank: float, rod: float, rpm: float, degrees: float, speed: float, acceleration: float
) -> None:
    assert at(2.0 * crank, rod, rpm, degrees) == pytest.approx((speed, acceleration), rel=1e-5)


def test_greatest_speed_of_a_textbook_engine() -> None:
    # source: Khurmi and Gupta, example 15.3: 6.54 m/s at 75 degrees by the two-term formula, exact 6.5615
    moved = motion(0.6, 1.0, 3600)
    fastest = int(np.argmax(moved.per_radian_m))
    assert moved.per_radian_m[fastest] * 200.0 * 2.0 * math.pi / 60.0 == pytest.approx(6.5615, rel=2e-3)
    assert fastest / 10.0 == pytest.approx(75.0, abs=1.5)


def test_inertia_of_a_textbook_engine() -> None:
    # source: Khurmi and Gupta, example 15.6, exact kinematics: 18 511 N
    _, acceleration = at(0.200, 0.4, 500.0, 60.0)
    assert 180.0 * acceleration == pytest.approx(18_511.0, rel=1e-4)


def test_position_speed_and_acceleration_are_slopes_of_one_another() -> None:
    moved = motion(0.14, 0.36, 7200)
    step = moved.angle_rad[1]
    slope = (np.roll(moved.position_m, -1) - np.roll(moved.position_m, 1)) / (2.0 * step)
    assert np.allclose(slope, moved.per_radian_m, atol=1e-7)
    slope = (np.roll(moved.per_radian_m, -1) - np.roll(moved.per_radian_m, 1)) / (2.0 * step)
    assert np.allclose(slope, moved.per_radian_squared_m, atol=1e-7)
    assert moved.position_m[0] == 0.0
    assert moved.position_m[3600] == pytest.approx(0.14)


def test_inertia_alone_reverses_where_the_acceleration_vanishes() -> None:
    # source: Khurmi and Gupta, example 15.4: no acceleration at 79.27 and 280.73 degrees (two-term formula)
    moved = motion(0.6, 1.5, 3600)
    found = reversal(100.0 * moved.per_radian_squared_m)
    assert math.degrees(found.angle_rad) == pytest.approx(2.0 * 79.27, abs=0.6)
    assert found.crossings == 2


def test_reversal_of_a_shifted_cosine() -> None:
    angle = np.linspace(0.0, 2.0 * math.pi, 1800, endpoint=False)
    found = reversal(np.cos(angle) - 0.5)
    # hand: positive within +-60 degrees, less the 0.2 % of 1.5 that counts as no load; peaks 0.5 and 1.5
    expected = 2.0 * math.acos(0.5 + 0.002 * 1.5)
    assert found.angle_rad == pytest.approx(expected, abs=1e-5)
    assert found.share == pytest.approx(1.0 / 3.0, rel=1e-5)
    assert found.crossings == 2


def test_the_longest_run_counts_and_runs_wrap_through_zero() -> None:
    angle = np.linspace(0.0, 2.0 * math.pi, 3600, endpoint=False)
    load = np.cos(3.0 * angle) - 0.5  # hand: three runs of 40 degrees each
    found = reversal(load)
    assert math.degrees(found.angle_rad) == pytest.approx(40.0, abs=0.3)
    assert found.crossings == 6
    assert reversal(np.roll(load, 77)).angle_rad == pytest.approx(found.angle_rad, rel=1e-9)


def test_a_load_of_one_sign_never_reverses() -> None:
    angle = np.linspace(0.0, 2.0 * math.pi, 360, endpoint=False)
    found = reversal(2.0 + np.cos(angle))
    assert (found.angle_rad, found.share, found.crossings) == (0.0, 0.0, 0)
    assert reversal(np.zeros(360)).angle_rad == 0.0
