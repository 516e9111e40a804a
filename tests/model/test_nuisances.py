"""The gas and the calibration as things that are not known exactly."""

import numpy as np
import pytest

from model.budget import budget
from model.calibration import CORRECTIONS, Calibration
from model.corrections import Corrections
from model.errors import CompositionError
from model.evaluate import InputAccuracy, Measured, evaluate
from model.jacobian import JacobianKeeper
from model.nuisances import (
    CALIBRATION,
    GAS,
    calibrated,
    calibration_nuisances,
    gas_nuisance,
    gas_standard,
    shifted_composition,
    shifted_gases,
)
from model.uncertainty import with_uncertainty
from tests.model.nameplates import (
    BOOSTER_FRAME,
    BOOSTER_INPUTS,
    BOOSTER_LIMITS,
    HYDROGEN_RICH,
    MAKE_UP_FRAME,
    MAKE_UP_INPUTS,
    booster,
    make_up,
)
from tests.model.surfaces import hydrogen_rich, natural_gas

ACCURACY = InputAccuracy.from_limits(BOOSTER_INPUTS, BOOSTER_LIMITS)


def calibration(**standards: float) -> Calibration:
    """Two load steps, of different corrections."""
    variance = np.diag([standards.get(name, 1e-9) ** 2 for name in CORRECTIONS])
    return Calibration(
        version=1,
        corrections={0: Corrections(volumetric_deficit=0.01), 1: Corrections(volumetric_deficit=0.03)},
        covariance={0: variance, 1: variance}, frames={0: 50, 1: 40}, power_factor=None,
        power_factor_standard=None, misfit=1.0, readings=3, first=0.0, last=1.0, who="a", when=1.0, why="b",
    )  # fmt: skip


def mixed() -> Measured:
    rows = np.tile(BOOSTER_FRAME, (6, 1))
    rows[:, BOOSTER_INPUTS.index("unit.load_step")] = [0, 1, 2, 1, np.nan, 9]
    return Measured.from_inputs(booster(), BOOSTER_INPUTS, rows)


def test_frames_of_several_load_steps_each_get_their_own_corrections() -> None:
    fit, measured = calibration(), mixed()
    found = calibrated(booster(), natural_gas(), fit)(measured)
    for k in range(measured.frames):
        step = measured.column("unit.load_step")[k]
        corrections = fit.corrections_of(int(step) if step in {0, 1, 2} else 0)
        alone = evaluate(booster(), natural_gas(), corrections, measured.like(measured.values[k : k + 1]))
        for name, column in alone.columns.items():
            assert found.columns[name].verdicts[k] == column.verdicts[0], name
            assert found.columns[name].values[k] == pytest.approx(column.values[0], rel=1e-12, nan_ok=True)


def test_nobody_calibrated_is_nominal() -> None:
    measured = Measured.from_inputs(booster(), BOOSTER_INPUTS, BOOSTER_FRAME)
    a = calibrated(booster(), natural_gas(), None)(measured)
    b = evaluate(booster(), natural_gas(), Corrections.nominal(), measured)
    assert a.column("unit.power").values == b.column("unit.power").values


def test_a_deficit_known_to_a_point_widens_the_efficiency_by_a_point() -> None:
    fit = calibration(volumetric_deficit=0.01)
    run = calibrated(booster(), natural_gas(), fit)
    measured = Measured.from_inputs(booster(), BOOSTER_INPUTS, BOOSTER_FRAME)
    plain = with_uncertainty(run, measured, ACCURACY).column("stage1.volumetric_efficiency.u").values
    nuisances = calibration_nuisances(booster(), natural_gas(), fit)
    wide = (
        with_uncertainty(run, measured, ACCURACY, nuisances).column("stage1.volumetric_efficiency.u").values
    )
    assert wide == pytest.approx(np.hypot(plain, 0.01), rel=1e-4)  # hand
    kept = JacobianKeeper(run, ACCURACY, nuisances).update(measured)
    assert kept.column("stage1.volumetric_efficiency.u").values == pytest.approx(wide, rel=0.05)
    lines = budget(run, measured, ACCURACY, "stage1.volumetric_efficiency", nuisances)
    assert lines[0].source == CALIBRATION
    assert lines[0].standard == pytest.approx(0.01, rel=1e-4)


def test_correlated_corrections_count_as_they_go_together() -> None:
    """Two corrections that always cancel in the temperature leave it as certain as none did."""
    measured = Measured.from_inputs(booster(), BOOSTER_INPUTS, BOOSTER_FRAME)
    name = "stage1.expected_discharge_temperature"

    def temperature(**changes: float) -> float:
        corrections = Corrections(volumetric_deficit=0.01, **changes)
        return float(evaluate(booster(), natural_gas(), corrections, measured).column(name).values[0])

    base = temperature()
    by_preheat = (temperature(preheat=0.051) - base) / 0.001
    by_heat = (temperature(heat_loss=0.001) - base) / 0.001
    p, h = CORRECTIONS.index("preheat"), CORRECTIONS.index("heat_loss")
    sd = 0.005
    other = -by_preheat / by_heat * sd
    covariance = np.diag([1e-18] * len(CORRECTIONS))
    covariance[p, p], covariance[h, h], covariance[p, h], covariance[h, p] = (
        sd**2 + 1e-18, other**2 + 1e-18, sd * other, sd * other,
    )  # fmt: skip
    fit = calibration()
    for step in (0, 1):
        fit.covariance[step][:] = covariance
    run, exact = calibrated(booster(), natural_gas(), fit), InputAccuracy(standard={})
    together = with_uncertainty(run, measured, exact, calibration_nuisances(booster(), natural_gas(), fit))
    for step in (0, 1):
        fit.covariance[step][p, h] = fit.covariance[step][h, p] = 0.0
    apart = with_uncertainty(run, measured, exact, calibration_nuisances(booster(), natural_gas(), fit))
    # hand: 0.6 K is the model's own; apart, each adds its part
    assert together.column(f"{name}.u").values == pytest.approx(0.6, abs=0.02)
    assert apart.column(f"{name}.u").values == pytest.approx(
        np.hypot(0.6, np.hypot(by_preheat * sd, by_heat * other)), rel=0.02
    )


def test_a_shift_keeps_the_sum_and_the_proportions_of_the_rest() -> None:
    shifted = shifted_composition(HYDROGEN_RICH, 0.02)
    # hand: hydrogen .90 to .88, the tenth of the others grows by a fifth
    assert shifted["hydrogen"] == pytest.approx(0.88)
    assert shifted["methane"] == pytest.approx(0.07 * 1.2)
    assert sum(shifted.values()) == pytest.approx(1)
    with pytest.raises(CompositionError):
        shifted_composition({"hydrogen": 1.0}, 0.01)


def test_a_gas_that_may_have_shifted_widens_the_mass_flow() -> None:
    unit = make_up()
    accuracy = InputAccuracy(standard={})
    above, below = shifted_gases(unit.composition, unit.domain)
    nuisance = gas_nuisance(unit, None, above, below, standard=0.02)
    run = calibrated(unit, hydrogen_rich(), None)
    measured = Measured.from_inputs(unit, MAKE_UP_INPUTS, np.tile(MAKE_UP_FRAME, (2, 1)))
    keeper = JacobianKeeper(run, accuracy, (nuisance,))
    found = keeper.update(measured)
    flow = found.column("unit.mass_flow")
    own = np.sqrt((found.column("unit.mass_flow.u").values / flow.values) ** 2 - 0.006**2)
    # hand: molar mass 3.889 g/mol; two hundredths of hydrogen (2.016) give way to the others (20.745 on
    # average), so 0.375 g/mol or 9.63 %; the molar flow hardly moves
    assert own == pytest.approx(0.0963, abs=0.002)
    lines = {line.source: line for line in budget(run, measured, accuracy, "unit.power", (nuisance,))}
    # independent code: power nearly independent of the gas
    assert lines[GAS].standard < 0.003 * found.column("unit.power").values[0]
    aged = keeper.update(measured, {GAS: gas_standard([0.0, 36000.0], fresh=0.02, growth_per_hour=0.002)})
    wide = np.sqrt((aged.column("unit.mass_flow.u").values / flow.values) ** 2 - 0.006**2)
    assert wide[0] == pytest.approx(own[0])
    assert wide[1] == pytest.approx(2 * own[1], rel=1e-6)  # hand: 0.02 + 10 h x 0.002


def test_the_age_of_an_analysis_only_ever_widens() -> None:
    # hand
    assert gas_standard([-5.0, 0.0, 7200.0], fresh=0.01, growth_per_hour=0.001) == pytest.approx(
        [0.01, 0.01, 0.012]
    )
