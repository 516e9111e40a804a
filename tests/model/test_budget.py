"""Where an uncertainty comes from, line by line."""

import math

import numpy as np
import pytest

from model.budget import budget
from model.evaluate import Corrections, Evaluation, InputAccuracy, Measured, evaluate
from model.uncertainty import with_uncertainty
from tests.model.nameplates import (
    BOOSTER_FRAME,
    BOOSTER_INPUTS,
    BOOSTER_LIMITS,
    MAKE_UP_FRAME,
    MAKE_UP_INPUTS,
    MAKE_UP_LIMITS,
    booster,
    make_up,
)
from tests.model.surfaces import hydrogen_rich, natural_gas

ACCURACY = InputAccuracy.from_limits(BOOSTER_INPUTS, BOOSTER_LIMITS)
MEASURED = Measured.from_inputs(booster(), BOOSTER_INPUTS, BOOSTER_FRAME)


def run(measured: Measured) -> Evaluation:
    return evaluate(booster(), natural_gas(), Corrections.nominal(), measured)


def test_a_ratio_has_two_lines() -> None:
    lines = budget(run, MEASURED, ACCURACY, "stage1.stage_ratio")
    ps, pd = BOOSTER_FRAME[0], BOOSTER_FRAME[1]
    # hand
    parts = {"stage1.suction_pressure": pd / ps**2 * 15e3, "stage1.discharge_pressure": 25e3 / ps}
    whole = sum(p**2 for p in parts.values())
    assert [line.source for line in lines] == sorted(parts, key=lambda n: -parts[n])
    for line in lines:
        assert line.standard == pytest.approx(parts[line.source] / math.sqrt(3), rel=1e-4)
        assert line.share == pytest.approx(parts[line.source] ** 2 / whole, rel=1e-4)


@pytest.mark.parametrize(
    "name", ["unit.power", "cylinder1.reversal_degrees_margin", "unit.capacity_residual"]
)
def test_lines_add_up_to_the_published_uncertainty(name: str) -> None:
    lines = budget(run, MEASURED, ACCURACY, name)
    published = with_uncertainty(run, MEASURED, ACCURACY).column(f"{name}.u").values[0]
    assert sum(line.share for line in lines) == pytest.approx(1)
    assert math.hypot(*(line.standard for line in lines)) == pytest.approx(published)
    assert [line.share for line in lines] == sorted((line.share for line in lines), reverse=True)
    assert next(line for line in lines if line.source == "model").reason


def test_expected_temperature_of_the_booster() -> None:
    lines = {
        line.source: line for line in budget(run, MEASURED, ACCURACY, "stage1.expected_discharge_temperature")
    }
    # independent code: 0.63 to 0.69 K from Ts, 0.22 to 0.35 from Ps, 0.17 to 0.26 from Pd, for these spans
    assert lines["stage1.suction_temperature"].standard == pytest.approx(0.66, abs=0.04)
    assert lines["stage1.suction_pressure"].standard == pytest.approx(0.285, abs=0.08)
    assert lines["stage1.discharge_pressure"].standard == pytest.approx(0.215, abs=0.06)
    assert lines["model"].standard == pytest.approx(0.6)


def test_a_transmitter_that_serves_two_stages_is_one_line() -> None:
    """As discharge pressure of one stage and suction pressure of the next it moves the power twice."""
    two = ("stage1.discharge_pressure", "stage2.suction_pressure")
    words = ["P2" if n in two else n for n in MAKE_UP_INPUTS]
    own = InputAccuracy.from_limits(MAKE_UP_INPUTS, MAKE_UP_LIMITS)
    shared = InputAccuracy.from_limits(MAKE_UP_INPUTS, MAKE_UP_LIMITS, words)
    measured = Measured.from_inputs(make_up(), MAKE_UP_INPUTS, MAKE_UP_FRAME)

    def train(frames: Measured) -> Evaluation:
        return evaluate(make_up(), hydrogen_rich(), Corrections.nominal(), frames)

    apart, joined = (budget(train, measured, a, "unit.power") for a in (own, shared))
    part = {line.source: line.standard for line in apart}
    together = {line.source: line.standard for line in joined}
    name = " and ".join(two)
    # more pressure after stage 1 costs power, more before stage 2 saves it: the two work against each other
    assert together[name] == pytest.approx(abs(part[two[0]] - part[two[1]]), rel=0.05)
    assert together[name] < max(part[n] for n in two)
    u = [with_uncertainty(train, measured, a).column("unit.power.u").values[0] for a in (own, shared)]
    assert u[1] < u[0]


def test_what_is_not_evaluated_has_no_budget_and_what_is_unknown_is_refused() -> None:
    blind = MEASURED.like(np.where(np.arange(len(BOOSTER_INPUTS)) == 0, np.nan, MEASURED.values))
    assert budget(run, blind, ACCURACY, "unit.power") == ()
    with pytest.raises(KeyError):
        budget(run, MEASURED, ACCURACY, "unit.speed")
