"""Stages against each other without a flow meter."""

from dataclasses import replace

import numpy as np
import pytest

from model.corrections import Corrections
from model.relative_capacity import dry_capacities, relative_capacity
from model.stage import StageState, run_stage
from model.train import solve_train
from tests.model.nameplates import HYDROGEN_RICH, RPM, make_up
from tests.model.surfaces import hydrogen_rich
from tests.model.trains import LINES, held


def test_stages_that_agree_depart_from_nothing() -> None:
    found = relative_capacity([[380.0, 380.0, 380.0]])
    assert found.flow_mol_s[0] == pytest.approx(380.0)
    np.testing.assert_allclose(found.deviation, 0.0, atol=1e-12)
    assert not found.significant()[0]


def test_one_stage_by_hand() -> None:
    # hand: logarithms 0, 0, .09 of equal weight: mean .03, deviations -.03, -.03, .06 (as logarithms)
    found = relative_capacity([[100.0, 100.0, 100.0 * np.exp(0.09)]], uncertainty=0.01)
    assert found.flow_mol_s[0] == pytest.approx(100 * np.exp(0.03))
    np.testing.assert_allclose(np.log1p(found.deviation[0]), [-0.03, -0.03, 0.06])
    np.testing.assert_allclose(found.deviation_u[0], 0.01 * np.sqrt(2 / 3))
    assert found.worst_stage[0] == 2
    assert found.significant()[0]


def test_a_poor_stage_hardly_moves_the_mean() -> None:
    found = relative_capacity([[100.0, 100.0, 130.0]], uncertainty=np.array([0.01, 0.01, 0.2]))
    assert found.flow_mol_s[0] == pytest.approx(100.0, rel=2e-3)
    assert not found.significant()[0]


def test_recycles_and_losses_are_allowed_for() -> None:
    found = relative_capacity([[480.0, 380.0, 380.0]], passed_share=np.array([480 / 380, 1.0, 1.0]))
    np.testing.assert_allclose(found.deviation, 0.0, atol=1e-12)


def test_missing_stages_are_left_out() -> None:
    found = relative_capacity([[np.nan, 100.0, 102.0], [np.nan, 100.0, np.nan], [np.nan] * 3])
    assert np.isnan(found.deviation[0, 0])
    assert found.worst_stage.tolist()[1:] == [-1, -1]
    assert found.flow_mol_s[1] == pytest.approx(100.0)
    assert np.isnan(found.flow_mol_s[2])


def test_the_uncertainty_may_be_a_rule() -> None:
    found = relative_capacity([[100.0, 110.0]], uncertainty=lambda capacity: 1.0 / capacity)
    assert found.deviation_u[0, 0] > found.deviation_u[0, 1]


@pytest.mark.parametrize("sick", [0, 1, 2])
def test_the_stage_with_less_throughput_is_found_in_a_train(sick: int) -> None:
    """A machine one stage of which draws 4 % less, judged by a healthy model at its own pressures."""
    unit, gas, corrections = make_up(), hydrogen_rich(), Corrections.nominal()
    stages = tuple(
        replace(
            s, cylinders=tuple(replace(c, bore_m=c.bore_m * (0.98 if k == sick else 1)) for c in s.cylinders)
        )
        for k, s in enumerate(unit.stages)
    )
    real = solve_train(replace(unit, stages=stages), gas, corrections, held(), lines=LINES)
    capacity = np.empty((1, 3))
    for k, stage in enumerate(unit.stages):
        state = StageState(
            suction_pressure_pa=real.suction_pressure_pa[:, k],
            discharge_pressure_pa=real.discharge_pressure_pa[:, k],
            suction_temperature_k=real.suction_temperature_k[:, k], speed_rad_s=np.array([375 * RPM]),
            load_step=np.zeros(1, np.intp),
        )  # fmt: skip
        capacity[:, k] = run_stage(unit, stage, gas, corrections, state).flow_kg_s / gas.molar_mass_kg_mol
    dry = dry_capacities(
        gas, HYDROGEN_RICH, capacity, real.suction_temperature_k, real.suction_pressure_pa, saturation=1.0
    )
    found = relative_capacity(dry, uncertainty=0.005)
    assert found.worst_stage[0] == sick
    others = np.delete(found.deviation[0], sick)
    assert found.deviation[0, sick] - others.mean() == pytest.approx(0.042, abs=0.004)
    assert found.significant()[0]
