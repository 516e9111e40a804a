"""Noise follows its budget, lags lag, and senders show the digits they have."""

import math
import statistics
from itertools import pairwise

import pytest

from simulator.instruments import (
    BUDGETS,
    HOUR_S,
    RESOLUTION,
    FirstOrder,
    HeaderSwing,
    Instrument,
    rounded,
)

# source: noise budget of the project: per tag white and hourly standard deviation, .6 from hour to hour
BUDGET = [
    ("discharge_temperature", 400.0, 0.5, 1.0),
    ("suction_temperature", 300.0, 0.5, 1.0),
    ("suction_pressure", 30e5, 0.0005 * 30e5, 0.001 * 30e5),
    ("discharge_pressure", 70e5, 0.0005 * 70e5, 0.001 * 70e5),
    ("flow", 250.0, 0.005 * 250.0, 0.007 * 250.0),
    ("electrical_power", 660e3, 0.003 * 660e3, 0.005 * 660e3),
]


@pytest.mark.parametrize(("quantity", "value", "white", "hourly"), BUDGET)
def test_noise_has_the_budgeted_deviations(quantity: str, value: float, white: float, hourly: float) -> None:
    """The difference of neighbouring samples shows the white part, samples hours apart show both."""
    instrument = Instrument(quantity, "7/test")
    readings = [instrument.update(value, 1.0) - value for _ in range(4000)]
    neighbours = [b - a for a, b in pairwise(readings)]
    # in a second the slow part moves by sqrt(2 (1 - .6^(1/3600))) = 1.7 % of its deviation: no matter
    # 4000 samples know a deviation within 1.2 % (one sigma); 5 % is four of them
    assert statistics.stdev(neighbours) / math.sqrt(2) == pytest.approx(white, rel=0.05)

    instrument = Instrument(quantity, "8/test")
    spaced = [instrument.update(value, 20 * HOUR_S) - value for _ in range(4000)]
    assert statistics.stdev(spaced) == pytest.approx(math.hypot(white, hourly), rel=0.05)


def test_slow_part_keeps_six_tenths_from_one_hour_to_the_next() -> None:
    instrument = Instrument("discharge_temperature", "9/test")
    x = [instrument.update(400.0, HOUR_S) - 400.0 for _ in range(6000)]
    mean = statistics.fmean(x)
    lag_one = sum((a - mean) * (b - mean) for a, b in pairwise(x)) / len(x)
    # hand: .6 of the hourly variance 1.0; sampling error about .02
    assert lag_one == pytest.approx(0.6 * 1.0, abs=0.08)


def test_slow_part_is_stationary_whatever_the_step() -> None:
    """A hurried plant has the same noise: 1500 plants, looked at after a minute in steps of 1 s or 10 s."""
    for step in (1.0, 10.0):
        last = []
        for seed in range(1500):
            instrument = Instrument("discharge_temperature", f"{seed}/{step}")
            for _ in range(3):
                reading = instrument.update(400.0, step)
            last.append(reading - 400.0)
        # hand: sqrt(.5^2 + 1^2); 1500 samples know it within 1.8 %
        assert statistics.stdev(last) == pytest.approx(1.118, rel=0.08)


def test_same_seed_gives_the_same_readings_and_another_seed_others() -> None:
    def readings(seed: str) -> list[float]:
        instrument = Instrument("flow", seed)
        return [instrument.update(100.0, 1.0) for _ in range(5)]

    assert readings("1/FT") == readings("1/FT")
    assert readings("1/FT") != readings("2/FT")


def test_reset_starts_the_same_readings_again() -> None:
    instrument = Instrument("flow", "1/FT")
    first = [instrument.update(100.0, 1.0) for _ in range(5)]
    instrument.reset()
    assert [instrument.update(100.0, 1.0) for _ in range(5)] == first


@pytest.mark.parametrize("step", [1.0, 7.0, 60.0])
def test_lag_reaches_63_percent_after_one_time_constant_in_any_step(step: float) -> None:
    lag = FirstOrder(60.0)
    lag.update(0.0, 0.0)
    elapsed = 0.0
    while elapsed < 420.0:
        value = lag.update(1.0, step)
        elapsed += step
        assert value == pytest.approx(
            1 - math.exp(-elapsed / 60.0)
        )  # hand: step response of a first-order lag


def test_lag_starts_settled_and_none_follows_at_once() -> None:
    assert FirstOrder(60.0).update(5.0, 1.0) == 5.0
    quick = FirstOrder(0.0)
    quick.update(1.0, 1.0)
    assert quick.update(2.0, 1.0) == 2.0


def test_negative_time_constant_is_refused() -> None:
    with pytest.raises(ValueError, match="negative"):
        FirstOrder(-1.0)


def test_thermowells_are_the_slow_ones() -> None:
    assert BUDGETS["discharge_temperature"].lag_s == 60.0  # common practice: 30 to 60 s in a thermowell
    assert max(b.lag_s for q, b in BUDGETS.items() if "temperature" not in q) <= 5.0


def test_standing_shaft_reads_no_speed() -> None:
    instrument = Instrument("speed", "1/ST")
    assert [instrument.update(0.0, 1.0) for _ in range(20)] == [0.0] * 20


@pytest.mark.parametrize(
    ("value", "unit", "shown"),
    [
        (28.8466, "barg", 28.85),
        (100.449, "degC", 100.4),
        (20383.4, "Nm3/h", 20383.0),
        (661.6, "kW", 662.0),
        (899.96, "rpm", 900.0),
        (-0.004, "barg", 0.0),
        (1.23456, "furlong", 1.23456),
    ],
)
def test_readings_have_the_digits_of_their_sender(value: float, unit: str, shown: float) -> None:
    assert rounded(value, unit) == shown  # hand


def test_rounding_never_moves_a_value_by_more_than_half_a_digit() -> None:
    for unit, step in RESOLUTION.items():
        for k in range(500):
            value = k * 0.377
            assert abs(rounded(value, unit) - value) <= step / 2 + 1e-9


def test_header_swing_stays_within_its_amplitude_and_has_no_mean() -> None:
    swing = HeaderSwing(0.003, "1/K-110/suction")
    factors = [swing.factor(float(t)) for t in range(240 * 97)]  # both periods end together
    assert max(abs(f - 1) for f in factors) <= 0.0045 + 1e-12  # hand: 1.5 amplitudes
    assert max(factors) > 1.003
    assert statistics.fmean(factors) == pytest.approx(1.0, abs=1e-9)
