"""What is left, with its sign on the right side."""

import math

import numpy as np
import pytest

from model.margins import margin, share_left
from model.quantities import LOWER_LIMITS, QUANTITIES, UPPER_LIMITS


@pytest.mark.parametrize("key", sorted(UPPER_LIMITS))
def test_an_upper_limit_has_room_below_it(key: str) -> None:
    # hand
    assert margin(key, [90.0, 110.0], 100.0) == pytest.approx([10.0, -10.0])


@pytest.mark.parametrize("key", sorted(LOWER_LIMITS))
def test_a_lower_limit_has_room_above_it(key: str) -> None:
    # hand
    assert margin(key, [0.9, 0.2], 0.3) == pytest.approx([0.6, -0.1])


def test_every_quantity_with_a_limit_has_a_margin_in_the_glossary() -> None:
    for key in UPPER_LIMITS | LOWER_LIMITS:
        assert f"{key}_margin" in QUANTITIES


def test_a_quantity_without_limits_has_no_margin() -> None:
    with pytest.raises(KeyError):
        margin("stage_ratio", 1.0, 2.0)
    with pytest.raises(KeyError):
        share_left("stage_ratio", 1.0, 2.0)


def test_shares_rank_different_margins_on_one_scale() -> None:
    # hand: 136 of 170 kN leaves a fifth; 390 K between 300 and 400 a tenth; 100 deg between 20 and 180 a half
    assert share_left("gas_load_tension", 136e3, 170e3) == pytest.approx(0.2)
    assert share_left("discharge_temperature", 390.0, 400.0, 300.0) == pytest.approx(0.1)
    assert share_left("reversal_degrees", math.radians(100), math.radians(20)) == pytest.approx(0.5)
    assert share_left("reversal_percent", 0.05, 0.05) == pytest.approx(0.0)
    assert share_left("reversal_percent", 1.0, 0.05) == pytest.approx(1.0)


def test_a_share_needs_a_rest_on_the_near_side_of_the_limit() -> None:
    with pytest.raises(KeyError):
        share_left("discharge_temperature", 390.0, 400.0)
    assert np.isnan(share_left("discharge_temperature", 390.0, 400.0, 410.0))
