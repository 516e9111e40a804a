"""Loads and reversal: signs, limits, and traces of which the answer is plain."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from model.rodload import Reversal, gas_load, inertia_load, positive_intervals, reversal

N = 360
ANGLE = np.arange(N) * (2 * math.pi / N)


def of(trace: np.ndarray) -> Reversal:
    load = np.atleast_2d(trace)
    return reversal(load, np.maximum(load.max(axis=1), 0), np.maximum(-load.min(axis=1), 0))


def degrees(trace: np.ndarray) -> float:
    return math.degrees(float(of(trace).duration_rad[0]))


def test_head_pressure_pushes_and_crank_pressure_pulls() -> None:
    sides = {"head_area_m2": 0.03, "crank_area_m2": 0.027, "ambient_pressure_pa": 0.0}
    # hand
    assert gas_load(1e6, 0.0, **sides) == pytest.approx(-30e3)
    assert gas_load(0.0, 1e6, **sides) == pytest.approx(27e3)


def test_a_cylinder_full_of_atmosphere_loads_nothing() -> None:
    # hand
    load = gas_load(1e5, 1e5, head_area_m2=0.03, crank_area_m2=0.027, ambient_pressure_pa=1e5)
    assert load == pytest.approx(0.0, abs=1e-9)


def test_masses_pull_at_the_head_end_dead_centre() -> None:
    # hand: 100 kg, 0.1 m crank, 10 rad/s, long rod
    assert inertia_load(100.0, 10.0, 0.1) == pytest.approx(1000.0)


def test_a_sine_reverses_for_half_the_turn() -> None:
    # hand; 0.2 % of the peak is no load: twice asin(0.002) is missing
    assert degrees(np.sin(ANGLE)) == pytest.approx(180 - 2 * math.degrees(math.asin(0.002)), abs=0.01)
    assert of(np.sin(ANGLE)).share[0] == pytest.approx(1.0)


@pytest.mark.parametrize("shift", [0.1, 1.0, 2.5, 4.0, 6.0])
def test_duration_hangs_neither_on_where_the_turn_starts_nor_on_the_sign(shift: float) -> None:
    load = 0.6 - np.cos(ANGLE - shift)
    # hand: compression where the cosine is over 0.6 and 0.2 % of the peak of 1.6
    assert degrees(load) == pytest.approx(2 * math.degrees(math.acos(0.6032)), abs=0.02)
    assert degrees(-load) == pytest.approx(degrees(load), abs=1e-9)
    assert of(load).share[0] == pytest.approx(0.4 / 1.6, rel=1e-3)
    assert bool(of(-load).tension_is_minor[0])


def test_only_the_longest_contiguous_run_counts() -> None:
    load = np.full(N, -100.0)
    load[10:50] = 60.0
    load[100:120] = 60.0
    load[200] = 60.0
    # hand: 40 points stand 39 steps apart, and 58/160 of a step on either side is still tension
    assert degrees(load) == pytest.approx(39 + 2 * (60 - 0.2) / 160, abs=1e-9)


def test_a_run_through_angle_zero_is_one_run() -> None:
    load = np.full(N, -100.0)
    load[:20] = load[-20:] = 60.0
    assert degrees(load) == pytest.approx(39 + 2 * (60 - 0.2) / 160, abs=1e-9)


@pytest.mark.parametrize("sign", [1, -1])
def test_a_load_of_one_sign_does_not_reverse(sign: int) -> None:
    found = of(sign * (1.5 + np.sin(ANGLE)))
    assert found.duration_rad[0] == 0
    assert found.share[0] == 0


def test_a_load_that_hardly_crosses_zero_does_not_reverse() -> None:
    found = of(1.0 - 1.001 * np.cos(ANGLE))
    assert found.duration_rad[0] == 0


def test_no_load_at_all_does_not_reverse() -> None:
    found = of(np.zeros(N))
    assert found.duration_rad[0] == 0
    assert found.share[0] == 0


def test_a_missing_load_is_no_reversal_but_no_number() -> None:
    found = of(np.full(N, np.nan))
    assert np.isnan(found.duration_rad[0])
    assert np.isnan(found.share[0])


@given(st.floats(-2, 2), st.floats(0, 2), st.floats(0, 2 * math.pi))
def test_reversal_stays_within_its_bounds(mean: float, second: float, phase: float) -> None:
    found = of(mean + np.sin(ANGLE) + second * np.sin(2 * ANGLE + phase))
    assert 0 <= found.duration_rad[0] <= math.pi + 1e-9
    assert 0 <= found.share[0] <= 1


def test_rows_equal_a_loop_of_single_rows() -> None:
    rows = np.array([m + np.sin(ANGLE + p) for m in (-0.5, 0.0, 0.9) for p in (0.0, 2.0)])
    together = of(rows)
    assert together.duration_rad == pytest.approx([float(of(row).duration_rad[0]) for row in rows], abs=1e-12)


def test_intervals_are_those_of_the_trace() -> None:
    angle = np.linspace(0, 2 * math.pi, 361)
    found = positive_intervals(0.6 - np.cos(angle), angle, 0.0)
    # hand
    assert np.degrees(found) == pytest.approx(np.array([[53.13, 306.87]]), abs=0.02)
    cut = positive_intervals(np.cos(angle) - 0.6, angle, 0.0)
    assert np.degrees(cut) == pytest.approx(np.array([[0, 53.13], [306.87, 360]]), abs=0.02)
    assert positive_intervals(np.ones(361), angle, 0.0) == ((0.0, float(angle[-1])),)
    assert positive_intervals(-np.ones(361), angle, 0.0) == ()
