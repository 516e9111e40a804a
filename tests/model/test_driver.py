"""Driver: losses, power both ways, one factor, slip."""

from dataclasses import replace

import numpy as np
import pytest

from model.driver import (
    DriverCurve,
    electrical_power,
    indicated_power,
    learned_factor,
    motor_losses,
    slipping_speed,
)
from simulator.ostmere import EQUIPMENT

MOTOR = DriverCurve(
    rated_power_w=2.9e6, friction_w=45e3, motor_loads=(0.5, 1.0), motor_efficiencies=(0.955, 0.96)
)


def test_losses_meet_the_efficiencies_entered() -> None:
    load = np.array([0.5, 1.0])
    np.testing.assert_allclose(load / (load + motor_losses(MOTOR, load)), [0.955, 0.96], rtol=1e-12)


def test_power_at_the_feeder_by_hand() -> None:
    # hand: 2.4 MW / .94 + 45 kW = 2.5982 MW; losses of .5 and full load 23.56 and 41.67 kW per MW rated, so
    # a = .017527, b = .024139; at .89593 of load .036903 of 2.9 MW = 107.0 kW
    assert float(electrical_power(MOTOR, 2.4e6)) == pytest.approx(2.5982e6 + 107.0e3, rel=1e-4)


@pytest.mark.parametrize("factor", [1.0, 1.03])
def test_the_inverse_brings_it_back(factor: float) -> None:
    driver = replace(MOTOR, factor=factor)
    power = np.array([0.0, 0.2e6, 1.2e6, 2.4e6, 3.0e6])
    np.testing.assert_allclose(
        indicated_power(driver, electrical_power(driver, power)), power, rtol=1e-9, atol=1e-3
    )
    assert np.isnan(indicated_power(driver, 10e3))


def test_one_factor_is_learned_and_outliers_do_not_move_it() -> None:
    power = np.linspace(1e6, 2.6e6, 11)
    measured = np.asarray(1.02 * electrical_power(MOTOR, power))
    measured[3], measured[7] = 0.0, np.nan
    assert learned_factor(MOTOR, power, measured) == pytest.approx(1.02)
    assert learned_factor(replace(MOTOR, factor=1.5), power, measured) == pytest.approx(1.02)
    assert np.isnan(learned_factor(MOTOR, power, np.full(11, np.nan)))


def test_an_induction_motor_slips_with_its_load() -> None:
    motor = DriverCurve(
        rated_power_w=1250e3, friction_w=20e3, synchronous_speed_rad_s=750 * np.pi / 30, full_load_slip=0.013
    )
    # source: the invented plant: 740 to 746 rpm in service
    rpm = slipping_speed(motor, np.array([0.45e6, 1.0e6])) * 30 / np.pi
    assert 740 < rpm[1] < rpm[0] < 746.5


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_one_factor_serves_the_invented_drivers_over_their_range(name: str) -> None:
    """Learned near full load, with the usual efficiencies and no friction entered: used down to half load."""
    real = EQUIPMENT[name].driver
    driver = DriverCurve(rated_power_w=real.rated_power_w)
    full = 0.82 * real.rated_power_w * real.mechanical_efficiency
    factor = learned_factor(driver, np.array([full]), np.array([real.electrical_power(full)]))
    assert 0.95 < factor < 1.05
    learned = replace(driver, factor=factor)
    for share in (0.5, 0.7, 0.9, 1.0, 1.1):
        plant = real.electrical_power(share * full)
        assert float(electrical_power(learned, share * full)) == pytest.approx(plant, rel=0.02)
        assert float(indicated_power(learned, plant)) == pytest.approx(share * full, rel=0.02)
