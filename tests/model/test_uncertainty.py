"""Central differences against random draws, and the floors."""

import math

import numpy as np
import pytest

from model.evaluate import Corrections, InputAccuracy, Measured, evaluate, evaluate_with_uncertainty
from model.quantities import QUANTITIES
from model.uncertainty import MODEL_ERRORS
from model.verdicts import Verdict
from tests.model.nameplates import BOOSTER_FRAME, BOOSTER_INPUTS, BOOSTER_LIMITS, booster
from tests.model.surfaces import natural_gas

NOMINAL = Corrections.nominal()
ACCURACY = InputAccuracy.from_limits(BOOSTER_INPUTS, BOOSTER_LIMITS)


def test_a_limit_of_error_is_a_uniform_distribution() -> None:
    # hand
    assert ACCURACY.standard["stage1.suction_temperature"] == pytest.approx(1 / math.sqrt(3))
    assert "unit.load_step" not in ACCURACY.standard


@pytest.mark.parametrize("step", [0.0, 1.0])
def test_central_differences_agree_with_random_draws(step: float) -> None:
    unit, gas = booster(), natural_gas()
    frame = BOOSTER_FRAME.copy()
    frame[BOOSTER_INPUTS.index("unit.load_step")] = step
    found = evaluate_with_uncertainty(
        unit, gas, NOMINAL, Measured.from_inputs(unit, BOOSTER_INPUTS, frame), ACCURACY
    )
    rng = np.random.default_rng(11)
    draws = np.tile(frame, (4000, 1))
    for place, name in enumerate(BOOSTER_INPUTS):
        draws[:, place] += ACCURACY.standard.get(name, 0.0) * rng.uniform(-1, 1, 4000) * math.sqrt(3)
    drawn = evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, BOOSTER_INPUTS, draws))
    for name in (
        "stage1.volumetric_efficiency", "cylinder1.reversal_degrees", "stage1.expected_discharge_temperature",
        "stage1.isentropic_discharge_temperature", "unit.mass_flow", "unit.power", "stage1.stage_ratio",
        "cylinder1.pin_load_compression", "cylinder1.gas_load_tension", "cylinder1.reversal_percent",
        "unit.capacity_residual", "stage1.measured_volumetric_efficiency",
        "stage1.discharge_temperature_residual",
    ):  # fmt: skip
        model = MODEL_ERRORS.get(name.partition(".")[2])
        value, u = (float(found.column(n).values[0]) for n in (name, f"{name}.u"))
        floor = math.hypot(model.absolute, model.relative * value) if model else 0.0
        instruments = math.sqrt(u**2 - floor**2)
        # bar: 10 %, the statistical error of 4 000 draws being 1 to 2 %
        assert instruments == pytest.approx(drawn.column(name).values.std(), rel=0.1), name


def test_no_uncertainty_is_smaller_than_the_error_of_the_model() -> None:
    exact = InputAccuracy(standard={})
    unit, gas = booster(), natural_gas()
    measured = Measured.from_inputs(unit, BOOSTER_INPUTS, BOOSTER_FRAME)
    found = evaluate_with_uncertainty(unit, gas, NOMINAL, measured, exact)

    def u(name: str) -> float:
        return float(found.column(f"{name}.u").values[0])

    # hand: the floors asked for
    assert u("cylinder1.reversal_degrees") == pytest.approx(math.radians(1))
    assert u("stage1.volumetric_efficiency") == pytest.approx(0.005)
    assert u("stage1.expected_discharge_temperature") == pytest.approx(0.6)
    load = float(found.column("cylinder1.pin_load_tension").values[0])
    assert u("cylinder1.pin_load_tension") == pytest.approx(0.02 * load)
    assert u("stage1.stage_ratio") == 0


def test_every_floor_names_its_reason_and_a_quantity_with_uncertainty() -> None:
    for key, error in MODEL_ERRORS.items():
        assert QUANTITIES[key].has_uncertainty
        assert error.reason
        assert error.absolute > 0 or error.relative > 0


def test_values_are_those_of_the_plain_evaluation() -> None:
    unit, gas = booster(), natural_gas()
    measured = Measured.from_inputs(unit, BOOSTER_INPUTS, np.tile(BOOSTER_FRAME, (3, 1)))
    plain = evaluate(unit, gas, NOMINAL, measured)
    full = evaluate_with_uncertainty(unit, gas, NOMINAL, measured, ACCURACY)
    for name, column in plain.columns.items():
        assert np.array_equal(full.column(name).values, column.values, equal_nan=True)
        assert np.array_equal(full.column(name).verdicts, column.verdicts)


def test_at_the_edge_of_the_range_one_side_stands_for_both() -> None:
    unit, gas = booster(), natural_gas()
    frame = BOOSTER_FRAME.copy()
    frame[BOOSTER_INPUTS.index("stage1.suction_temperature")] = unit.domain.low_temperature_k + 0.1
    measured = Measured.from_inputs(unit, BOOSTER_INPUTS, frame)
    found = evaluate_with_uncertainty(unit, gas, NOMINAL, measured, ACCURACY)
    inner = frame.copy()
    inner[BOOSTER_INPUTS.index("stage1.suction_temperature")] += 2.0
    beside = evaluate_with_uncertainty(
        unit, gas, NOMINAL, Measured.from_inputs(unit, BOOSTER_INPUTS, inner), ACCURACY
    )
    name = "stage1.isentropic_discharge_temperature.u"
    assert found.column(name).values == pytest.approx(beside.column(name).values, rel=0.03)


def test_a_value_that_is_missing_has_no_uncertainty_for_the_same_reason() -> None:
    unit, gas = booster(), natural_gas()
    frame = BOOSTER_FRAME.copy()
    frame[0] = np.nan
    measured = Measured.from_inputs(unit, BOOSTER_INPUTS, frame)
    column = evaluate_with_uncertainty(unit, gas, NOMINAL, measured, ACCURACY).column("unit.power.u")
    assert np.isnan(column.values[0])
    assert column.verdicts[0] == Verdict.INPUT_MISSING
