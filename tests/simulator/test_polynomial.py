"""Polynomials of several variables, and fits that foretell what they were not shown."""

import math

import numpy as np
import pytest

from simulator.polynomial import basis, total_degree
from simulator.tabulate_sheet import (
    Bend,
    _least_squares,
    fault_ladder,
    fit,
    healthy_ladder,
    spread_points,
    tour,
)


@pytest.mark.parametrize(("variables", "degree"), [(1, 3), (3, 2), (6, 2), (7, 3)])
def test_terms_of_a_total_degree_are_counted_by_the_binomial(variables: int, degree: int) -> None:
    powers = total_degree(variables, degree)
    assert len(powers) == math.comb(variables + degree, degree)  # hand
    assert len(np.unique(powers, axis=0)) == len(powers)
    assert powers.sum(axis=1).max() == degree


def test_a_weight_lets_an_axis_bend_more_or_less() -> None:
    powers = total_degree(2, 2, (0.5, 1.5))
    assert powers[:, 0].max() == 4  # hand: 2 / 0.5
    assert powers[:, 1].max() == 1  # hand: 2 / 1.5


def test_the_basis_is_of_chebyshev_polynomials() -> None:
    x = np.linspace(-1.0, 1.0, 7)[:, None]
    for n in range(6):
        np.testing.assert_allclose(
            basis(x, np.array([[n]]))[:, 0], np.cos(n * np.arccos(x[:, 0])), atol=1e-12
        )


def test_a_product_of_two_variables_is_a_product_of_their_terms() -> None:
    points = np.random.default_rng(1).uniform(-1.0, 1.0, (20, 2))
    x, y = points.T
    np.testing.assert_allclose(
        basis(points, np.array([[2, 1]]))[:, 0], (2 * x * x - 1) * y, atol=1e-14
    )  # hand


def test_points_fill_the_cube_evenly_and_go_on_where_they_stopped() -> None:
    points = spread_points(0, 400, 5, 2)
    assert points[:, :5].min() >= -1.0
    assert points[:, :5].max() <= 1.0
    assert points[:, 5:].min() >= 0.0
    assert points[:, 5:].max() <= 1.0
    np.testing.assert_allclose(points[:, :5].mean(axis=0), 0.0, atol=0.03)
    np.testing.assert_allclose(points[:, 5:].mean(axis=0), 0.5, atol=0.02)
    np.testing.assert_array_equal(points[150:], spread_points(150, 400, 5, 2))


def test_a_tour_visits_every_point_once_and_is_shorter() -> None:
    points = spread_points(0, 60, 3, 0)
    path = tour(points)
    assert sorted(path) == list(range(60))
    length = lambda order: np.linalg.norm(np.diff(points[order], axis=0), axis=1).sum()  # noqa: E731
    assert length(path) < 0.7 * length(range(60))


def test_errors_of_held_out_runs_are_those_of_fits_without_them() -> None:
    chance = np.random.default_rng(2)
    terms, values = chance.normal(size=(20, 4)), chance.normal(size=(20, 2))
    _, miss = _least_squares(terms, values)
    for k in (0, 7, 19):
        rest = np.arange(20) != k
        weights = np.linalg.lstsq(terms[rest], values[rest], rcond=None)[0]
        np.testing.assert_allclose(miss[k], values[k] - terms[k] @ weights, rtol=1e-9)


def test_a_fit_climbs_until_all_runs_are_foretold() -> None:
    def cubic(points: np.ndarray) -> np.ndarray:
        x, y = points.T
        return np.column_stack((1.0 + x + x * y + 0.5 * x**3, y**2))

    def judge(_: np.ndarray, miss: np.ndarray) -> np.ndarray:
        return np.abs(miss).max(axis=1) / 1e-6

    sheet = fit(healthy_ladder([Bend.PLAIN, Bend.PLAIN]), cubic, judge)
    assert sheet.held_out < 1.0
    assert sheet.axis_powers.max() == 3  # hand: the second rung
    points = np.random.default_rng(3).uniform(-1.0, 1.0, (50, 2))
    np.testing.assert_allclose(sheet.at(points, slice(None)), cubic(points), atol=1e-9)
    np.testing.assert_allclose(sheet.loads_at(points, slice(None)), cubic(points), atol=1e-9)


def test_one_fault_adds_nothing_at_size_zero_and_two_nothing_if_one_is_absent() -> None:
    for spots in (1, 2):
        for _, sizes in fault_ladder([Bend.PLAIN, Bend.SMOOTH], spots):
            assert sizes.min() >= 1


def test_two_faults_that_add_up_get_no_term_of_their_own() -> None:
    def runs(points: np.ndarray) -> np.ndarray:
        chance = np.random.default_rng(len(points))
        return 1.0 + 1e-3 * chance.normal(size=(len(points), 1))

    def judge(_: np.ndarray, miss: np.ndarray) -> np.ndarray:
        return np.abs(miss).max(axis=1) / 1e-4

    ladder = fault_ladder([Bend.PLAIN], 2)[:1]
    sheet = fit(ladder, runs, judge, known=lambda p: np.ones((len(p), 1)))
    assert len(sheet.axis_powers) == 0
    assert not sheet.at(np.full((3, 3), 0.5), slice(None)).any()
