"""Noise follows its budget, lags lag, and senders show the digits they have."""

import math
import statistics
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from simulator import instruments
from simulator.instruments import (
    BUDGETS,
    HOUR_S,
    RESOLUTION,
    FirstOrder,
    HeaderSwing,
    Instrument,
    rounded,
)

# source: the job's noise budget: per tag white and hourly standard deviation, .6 from hour to hour
BUDGET = [
    ("discharge_temperature", 400.0, 0.5, 1.0),
    ("suction_temperature", 300.0, 0.5, 1.0),
    ("suction_pressure", 30e5, 0.0005 * 30e5, 0.001 * 30e5),
    ("discharge_pressure", 70e5, 0.0005 * 70e5, 0.001 * 70e5),
    ("flow", 250.0, 0.005 * 250.0, 0.007 * 250.0),
    ("electrical_power", 660e3, 0.003 * 660e3, 0.005 * 660e3),
]


def normal(instrument: Instrument, value: float, step_s: float, count: int) -> NDArray[np.float64]:
    return instrument.readings(np.full(count, value), step_s)[0] - value


@pytest.mark.parametrize(("quantity", "value", "white", "hourly"), BUDGET)
def test_noise_has_the_budgeted_deviations(quantity: str, value: float, white: float, hourly: float) -> None:
    """The difference of neighbouring samples shows the white part, samples hours apart show both."""
    count = 40_000
    # In a second the slow part moves by sqrt(2 (1 - .6^(1/3600))) = 1.7 % of its deviation, at most 2 white
    # ones: .06 % of the figure. Neighbouring differences share a sample: the variance of the estimate is
    # (1 + 2 * .25) / 2n of the figure squared, so its relative deviation is sqrt(.75 / n); five of them.
    found = np.diff(normal(Instrument(quantity, "7/test"), value, 1.0, count)).std() / math.sqrt(2)
    assert found == pytest.approx(white, rel=5 * math.sqrt(0.75 / count) + 0.0012)

    # Twenty hours apart .6^20 of the slow part is left: independent. The deviation of n normal numbers is
    # known within 1 / sqrt(2 n); five of them.
    spaced = normal(Instrument(quantity, "8/test"), value, 20 * HOUR_S, count)
    assert spaced.std() == pytest.approx(math.hypot(white, hourly), rel=5 / math.sqrt(2 * count))
    assert abs(spaced.mean()) < 5 * math.hypot(white, hourly) / math.sqrt(count)


@pytest.mark.parametrize(("quantity", "value", "white", "hourly"), BUDGET)
def test_slow_part_keeps_six_tenths_from_one_hour_to_the_next(
    quantity: str, value: float, white: float, hourly: float
) -> None:
    """Readings an hour apart: what they share is the slow part's."""
    count = 40_000
    x = normal(Instrument(quantity, "9/test"), value, HOUR_S, count)
    x = x - x.mean()
    lagged = [float((x[k:] * x[: count - k]).mean()) for k in (1, 2)]
    # source: noise budget: .6. Hand: covariance at k hours is .6^k of the slow variance, white adds none.
    # Its deviation (Bartlett) is below sqrt((1 + 2 * .36 / .64) * 2 / n) of the whole variance; five of them.
    wide = 5 * math.sqrt(2 * (1 + 2 * 0.36 / 0.64) / count) * (white**2 + hourly**2)
    assert lagged[0] == pytest.approx(0.6 * hourly**2, abs=wide)
    assert lagged[1] == pytest.approx(0.36 * hourly**2, abs=wide)


def test_slow_part_is_stationary_whatever_the_step() -> None:
    """A hurried plant has the same noise: 1500 plants, looked at after a minute in steps of 1 s or 10 s."""
    for step in (1.0, 10.0):
        last = []
        for seed in range(1500):
            instrument = Instrument("discharge_temperature", f"{seed}/{step}")
            reading, _ = instrument.readings(np.full(3, 400.0), step)
            last.append(float(reading[-1]) - 400.0)
        # hand: sqrt(.5^2 + 1^2); 1500 samples know it within 1.8 %
        assert statistics.stdev(last) == pytest.approx(1.118, rel=0.08)


def test_same_seed_gives_the_same_readings_and_another_seed_others() -> None:
    def readings(seed: str) -> list[float | None]:
        instrument = Instrument("flow", seed)
        return [instrument.update(100.0, 1.0)[0] for _ in range(5)]

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


def test_a_thermowell_in_metal_follows_with_two_time_constants(monkeypatch: pytest.MonkeyPatch) -> None:
    """A step of the gas, without noise: hand, partial fractions of a well behind a share led by the metal."""
    budget = BUDGETS["discharge_temperature"]
    monkeypatch.setattr(
        instruments, "BUDGETS", {"discharge_temperature": replace(budget, white=0.0, hourly=0.0)}
    )
    instrument = Instrument("discharge_temperature", "1/TT")
    instrument.update(300.0, 0.0)
    step = 0.5
    found, _ = instrument.readings(np.full(8000, 400.0), step)
    t = np.arange(1, 8001) * step
    w, m, a = budget.lag_s, budget.soak_s, budget.soak_share
    expected = 400.0 - 100 * (
        (1 - a) * np.exp(-t / w) + a * (m * np.exp(-t / m) - w * np.exp(-t / w)) / (m - w)
    )
    assert (
        np.abs(found - expected).max() < 100 * step / w
    )  # the gas is held over each step: half a step at most
    assert 356.5 < found[int(w / step)] < 358.5  # hand: .9 (1 - 1/e) and .1 of a fortieth
    assert 3.8 < 400 - found[int(m / step)] < 4.1  # hand: .1 of 900/840 of 1/e; the well has long settled


def test_thermowells_are_the_slow_ones() -> None:
    for quantity in ("suction_temperature", "discharge_temperature"):
        budget = BUDGETS[quantity]
        assert 30.0 <= budget.lag_s <= 60.0  # common practice: 30 to 60 s in a thermowell
        assert 600.0 <= budget.soak_s <= 1500.0  # common practice: metal soaks for 10 to 25 minutes
    assert max(b.lag_s for q, b in BUDGETS.items() if "temperature" not in q) <= 5.0


def test_standing_shaft_reads_no_speed() -> None:
    instrument = Instrument("speed", "1/ST")
    assert [instrument.update(0.0, 1.0)[0] for _ in range(20)] == [0.0] * 20


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
