"""The weather is a pure function of time and seed, and looks like weather."""

from datetime import UTC, datetime

import numpy as np
import pytest

from simulator.weather import DAY_S, Weather

NEW_YEAR = datetime(2026, 1, 1, tzinfo=UTC).timestamp()
HOURS_OF_TWO_YEARS = NEW_YEAR + 3600.0 * np.arange(2 * 365 * 24)
ALL = ("ambient_k", "cooling_water_k", "ground_k")


@pytest.mark.parametrize("name", ALL)
def test_an_array_of_instants_equals_a_loop(name: str) -> None:
    ask = getattr(Weather(5), name)
    at = NEW_YEAR + np.array([0.0, 17.5, 86_400.0, 3e7])
    alone = [ask(float(t)) for t in at]
    assert all(isinstance(k, float) for k in alone)
    np.testing.assert_allclose(ask(at), alone, rtol=0, atol=1e-9)


@pytest.mark.parametrize("name", ALL)
def test_the_order_of_questions_does_not_matter_and_the_seed_does(name: str) -> None:
    one, other = getattr(Weather(5), name), getattr(Weather(5), name)
    late = one(NEW_YEAR + 9e6)
    one(NEW_YEAR)
    assert one(NEW_YEAR + 9e6) == late == other(NEW_YEAR + 9e6)
    assert getattr(Weather(6), name)(NEW_YEAR + 9e6) != late


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_july_is_warmer_than_january_and_afternoon_than_night(seed: int) -> None:
    air = Weather(seed).ambient_k(HOURS_OF_TWO_YEARS)
    day = ((HOURS_OF_TWO_YEARS - NEW_YEAR) // DAY_S) % 365
    hour = ((HOURS_OF_TWO_YEARS - NEW_YEAR) // 3600) % 24
    july, january = air[(day >= 181) & (day < 212)], air[day < 31]
    assert 10.0 < july.mean() - january.mean() < 24.0  # common practice, mild coastal climate
    assert 3.0 < air[hour == 14].mean() - air[hour == 2].mean() < 8.0
    assert 255.0 < air.min() < air.max() < 312.0


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_water_and_ground_swing_less_than_the_air_and_later(seed: int) -> None:
    weather = Weather(seed)
    air, water, ground = (getattr(weather, name)(HOURS_OF_TWO_YEARS) for name in ALL)
    assert ground.std() < air.std()
    assert water.std() < 0.6 * air.std()
    by_hour = lambda k: k.reshape(-1, 24).mean(axis=0)  # noqa: E731
    assert 14 < int(np.argmax(by_hour(water))) <= 20
    assert np.ptp(by_hour(ground)) < 0.1
    assert 285.0 < water.min() < water.max() < 310.0  # liquid and cooler than the gas it cools


def test_the_lagged_swing_is_what_a_first_order_lag_makes_of_the_air() -> None:
    """A fine explicit lag of the air, run for ten lags, lands on the closed form."""
    weather = Weather(4)
    lag_s, step_s = 6.0 * 3600.0, 60.0  # hand: the lag of the basin
    at = NEW_YEAR + step_s * np.arange(6000)
    air = weather._swing(at, 0.0)
    followed = air[0]
    for value in air[1:]:
        followed += (value - followed) * step_s / lag_s
    assert followed == pytest.approx(float(weather._swing(at[-1:], lag_s)[0]), abs=0.05)


def test_the_random_part_spreads_by_its_standard_deviation() -> None:
    """Two seeds differ by their random parts alone."""
    base = Weather(99)._swing(HOURS_OF_TWO_YEARS, 0.0)
    apart = [Weather(seed)._swing(HOURS_OF_TWO_YEARS, 0.0) - base for seed in range(10)]
    assert np.std(apart) == pytest.approx(3.0 * np.sqrt(2.0), rel=0.15)  # hand: two parts of 3 K each
