"""Coolers and lines at other flows."""

import numpy as np
import pytest

from model.cooler import cooled_temperature, effectiveness_at, flow_drop, transfer_units


def test_transfer_units_and_effectiveness_belong_together() -> None:
    # hand: one unit leaves 1/e of the difference
    assert float(transfer_units(1 - np.exp(-1.0))) == pytest.approx(1.0)
    assert float(effectiveness_at(0.92, 1.0)) == pytest.approx(0.92)


def test_half_the_flow_is_cooled_further() -> None:
    # hand: NTU = -ln(.08) = 2.5257, times 2^.4 = 3.3327, leaves exp(-3.3327) = .0357
    assert float(effectiveness_at(0.92, 0.5)) == pytest.approx(1 - 0.0357, abs=1e-4)
    assert (np.diff(effectiveness_at(0.92, np.array([0.1, 0.5, 1.0, 1.2]))) < 0).all()


def test_a_cooler_cools_to_its_water_at_best() -> None:
    assert float(cooled_temperature(380.0, 303.0, 1.0)) == 303.0
    assert float(cooled_temperature(380.0, 303.0, 0.9)) == pytest.approx(310.7)
    assert float(effectiveness_at(1.0, 0.7)) == 1.0


def test_pressure_lost_goes_with_the_square_of_flow() -> None:
    np.testing.assert_allclose(flow_drop(0.005, np.array([0.0, 0.5, 1.0, 2.0])), [0, 0.00125, 0.005, 0.02])
    assert float(flow_drop(0.005, 100.0)) == 0.5
