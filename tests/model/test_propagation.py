"""The law of propagation on published examples, beside a program of others, and at its edges."""

import math

import numpy as np
import pytest
import uncertainties
from numpy.typing import NDArray
from uncertainties import umath

from model.propagation import central, limit_passed, propagate

Array = NDArray[np.float64]

GAUGE_INPUTS = (
    50_000_623.0,
    215.0,
    11.5e-6,
    0.0,
    0.0,
    -0.1,
)  # ls, d, alpha_s, delta alpha, delta theta, theta
GAUGE_STANDARD = (
    25.0,
    math.sqrt(5.8**2 + 3.9**2 + 6.7**2),
    2e-6 / math.sqrt(3),
    1e-6 / math.sqrt(3),
    0.05 / math.sqrt(3),
    math.hypot(0.2, 0.5 / math.sqrt(2)),
)


def end_gauge(x: Array) -> Array:
    ls, d, alpha_s, d_alpha, d_theta, theta = x.T
    return np.asarray((ls + d - ls * (d_alpha * theta + alpha_s * d_theta))[:, None])


def test_end_gauge() -> None:
    found = propagate(end_gauge, GAUGE_INPUTS, GAUGE_STANDARD)
    # source: JCGM 100:2008 H.1 (H.1.2 model, H.1.3.5 results, table H.1 contributions)
    assert found.value[0] == pytest.approx(50_000_838, abs=0.5)
    assert found.standard[0] == pytest.approx(32, abs=0.5)
    parts = np.abs(found.contributions[:, 0])
    assert parts[[0, 1]] == pytest.approx([25, 9.7], abs=0.05)
    assert parts[2] == pytest.approx(0, abs=1e-6)
    assert parts[[3, 4]] == pytest.approx([2.9, 16.6], abs=0.05)


VOLT = np.array([5.007, 4.994, 5.005, 4.990, 4.999])
AMPERE = np.array([19.663, 19.639, 19.640, 19.685, 19.678]) * 1e-3
RADIAN = np.array([1.0456, 1.0438, 1.0468, 1.0428, 1.0433])
# source: JCGM 100:2008 table H.2, the five sets of readings above


def impedance(x: Array) -> Array:
    v, i, phi = x.T
    return np.stack([v / i * np.cos(phi), v / i * np.sin(phi), v / i], axis=1)


def readings() -> tuple[Array, Array, Array]:
    sets = np.stack([VOLT, AMPERE, RADIAN])
    return sets.mean(axis=1), sets.std(axis=1, ddof=1) / math.sqrt(5), np.corrcoef(sets)


def test_resistance_and_reactance_with_correlated_inputs() -> None:
    value, standard, correlation = readings()
    found = propagate(impedance, value, standard, correlation)
    # source: JCGM 100:2008 tables H.2 and H.3; its inputs of H.2 are rounded, so that 0.2956 is printed 0.295
    assert standard == pytest.approx([0.0032, 0.0095e-3, 0.00075], rel=0.01)
    assert (correlation[0, 1], correlation[0, 2], correlation[1, 2]) == pytest.approx(
        (-0.36, 0.86, -0.65), abs=0.006
    )
    assert found.value == pytest.approx([127.732, 219.847, 254.260], abs=6e-4)
    assert found.standard == pytest.approx([0.071, 0.295, 0.236], abs=1e-3)
    r = found.correlation
    assert (r[0, 1], r[0, 2], r[1, 2]) == pytest.approx((-0.588, -0.485, 0.993), abs=1e-3)


def test_leaving_the_correlation_out_gives_other_numbers() -> None:
    value, standard, _ = readings()
    found = propagate(impedance, value, standard)
    # source: JCGM 100:2008 H.2.4 (what comes of ignoring it), as recomputed by others
    assert found.standard == pytest.approx([0.195, 0.201, 0.204], abs=1e-3)


def test_one_transmitter_for_two_inputs_cancels_in_a_difference() -> None:
    together = np.ones((2, 2))
    found = propagate(
        lambda x: np.stack([x[:, 0] - x[:, 1], x[:, 0] + x[:, 1]], axis=1), [3, 2], [1, 1], together
    )
    assert found.standard == pytest.approx([0, 2])  # hand


@pytest.mark.parametrize(("kind", "standard"), [("sum", 2.0), ("dominant", math.sqrt(3 + 100))])
def test_additive_models(kind: str, standard: float) -> None:
    """Sums of four inputs; of the fourth ten times as wide, the standard is published as 10.1."""
    u = [1.0, 1.0, 1.0, 10.0 if kind == "dominant" else 1.0]
    found = propagate(lambda x: x.sum(axis=1, keepdims=True), np.zeros(4), u)
    # source: JCGM 101:2008 9.2.2 to 9.2.4: 2.0 and 10.1
    assert found.standard[0] == pytest.approx(standard)
    assert found.standard[0] == pytest.approx({"sum": 2.0, "dominant": 10.1}[kind], abs=0.06)


def test_beside_a_library_of_others() -> None:
    value, standard, correlation = readings()
    covariance = correlation * np.outer(standard, standard)
    v, i, phi = uncertainties.correlated_values(value, covariance)
    theirs = (v / i * umath.cos(phi), v / i * umath.sin(phi), v / i)
    ours = propagate(impedance, value, standard, correlation)
    # source: Python package uncertainties (derivatives by rule, not by differences)
    assert ours.standard == pytest.approx([x.std_dev for x in theirs], rel=1e-6)
    assert ours.correlation == pytest.approx(np.array(uncertainties.correlation_matrix(theirs)), abs=1e-6)


def test_one_side_stands_for_both() -> None:
    # hand
    lost = np.array([np.nan])
    assert central(np.array([1.0]), np.array([3.0]), lost) == 2
    assert central(np.array([1.0]), lost, np.array([0.5])) == 0.5
    assert np.isnan(central(np.array([1.0]), lost, lost))


def test_probability_that_a_limit_is_passed() -> None:
    # source: tables of the normal distribution: 2.275 % beyond two standard deviations
    assert limit_passed([0.0, 2.0, -2.0], 1.0) == pytest.approx([0.5, 0.02275, 0.97725], abs=1e-5)
    # hand: nothing uncertain
    assert limit_passed([1.0, 0.0, -1.0], 0.0) == pytest.approx([0, 0.5, 1])
    assert np.isnan(limit_passed(np.nan, 1.0))
