"""The slider-crank: limits, derivatives, inverse."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from model.kinematics import (
    angle_of_travel,
    mean_piston_speed,
    piston_travel,
    piston_travel_curvature,
    piston_travel_rate,
)

STROKES = st.floats(0.05, 0.5)
RATIOS = st.floats(3.0, 8.0)  # rod over crank radius
ANGLES = st.floats(0.0, 2 * math.pi)


@given(STROKES, RATIOS)
def test_travel_spans_the_stroke_between_the_dead_centres(stroke: float, ratio: float) -> None:
    rod = ratio * stroke / 2
    # hand
    assert piston_travel(0.0, stroke, rod) == pytest.approx(0.0, abs=1e-12)
    assert piston_travel(math.pi, stroke, rod) == pytest.approx(stroke)
    assert piston_travel_rate(math.pi, stroke, rod) == pytest.approx(0.0, abs=1e-12)


@given(STROKES, RATIOS)
def test_acceleration_at_the_dead_centres_is_the_known_one(stroke: float, ratio: float) -> None:
    """Exact there: r (1 + r/l) and -r (1 - r/l)."""
    radius, rod = stroke / 2, ratio * stroke / 2
    # hand
    assert piston_travel_curvature(0.0, stroke, rod) == pytest.approx(radius * (1 + 1 / ratio))
    assert piston_travel_curvature(math.pi, stroke, rod) == pytest.approx(-radius * (1 - 1 / ratio))


@given(STROKES, RATIOS, ANGLES)
def test_rates_are_the_derivatives_of_the_travel(stroke: float, ratio: float, angle: float) -> None:
    rod, step = ratio * stroke / 2, 1e-4
    low, here, high = (piston_travel(angle + k * step, stroke, rod) for k in (-1, 0, 1))
    assert (high - low) / (2 * step) == pytest.approx(
        float(piston_travel_rate(angle, stroke, rod)), abs=1e-6 * stroke
    )
    assert (high - 2 * here + low) / step**2 == pytest.approx(
        float(piston_travel_curvature(angle, stroke, rod)), abs=2e-5 * stroke
    )


@given(STROKES, RATIOS, st.floats(0.01, math.pi - 0.01))
def test_angle_of_travel_undoes_the_travel(stroke: float, ratio: float, angle: float) -> None:
    rod = ratio * stroke / 2
    assert angle_of_travel(piston_travel(angle, stroke, rod), stroke, rod) == pytest.approx(angle, abs=1e-6)


def test_a_long_rod_gives_simple_harmonic_motion() -> None:
    angle = np.linspace(0, 2 * math.pi, 37)
    # hand
    assert piston_travel(angle, 0.3, 1e5) == pytest.approx(0.15 * (1 - np.cos(angle)), abs=1e-6)


def test_arrays_equal_a_loop_of_scalars() -> None:
    angle = np.linspace(0, 2 * math.pi, 41)
    for function in (piston_travel, piston_travel_rate, piston_travel_curvature):
        alone = [float(function(a, 0.32, 0.8)) for a in angle]
        assert function(angle, 0.32, 0.8) == pytest.approx(alone, abs=1e-15)


def test_mean_piston_speed_is_two_strokes_a_turn() -> None:
    # hand: 375 rpm, 320 mm: 6.25 turns a second, 0.64 m each
    assert mean_piston_speed(375 * math.pi / 30, 0.32) == pytest.approx(4.0)
