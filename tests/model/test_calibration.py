"""The fit of the corrections: what it finds, what it refuses, and that it never learns a fault."""

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from model.calibration import CORRECTIONS, PRIORS, Calibration, corrections_from, fit_calibration
from model.corrections import Corrections
from model.errors import (
    CalibrationHeldError,
    CalibrationMisfitError,
    CalibrationRefusedError,
    TooFewFramesError,
)
from model.evaluate import InputAccuracy, Measured, evaluate
from model.machine import Unit
from tests.model.nameplates import BOOSTER_FRAME, BOOSTER_INPUTS, BOOSTER_LIMITS, booster
from tests.model.surfaces import natural_gas

Array = NDArray[np.float64]

ACCURACY = InputAccuracy.from_limits(BOOSTER_INPUTS, BOOSTER_LIMITS)
TRUE_FACTOR = 0.92
DAY = 86400.0


def place(name: str) -> int:
    return BOOSTER_INPUTS.index(name)


def frames(count: int = 30, *, steps: tuple[float, ...] = (0.0,), spread: float = 2e-3) -> Array:
    rng = np.random.default_rng(8)
    rows = BOOSTER_FRAME * (1 + spread * rng.standard_normal((count, BOOSTER_FRAME.size)))
    rows[:, place("unit.load_step")] = np.resize(steps, count)
    rows[:, place("unit.run_signal")] = 1.0
    return rows


def healthy(rows: Array, corrections: Corrections, unit: Unit | None = None) -> Measured:
    """Frames as a machine with these corrections would send them."""
    made = unit or booster()
    found = evaluate(made, natural_gas(), corrections, Measured.from_inputs(made, BOOSTER_INPUTS, rows))
    rows = rows.copy()
    rows[:, place("stage1.discharge_temperature")] = found.column(
        "stage1.expected_discharge_temperature"
    ).values
    rows[:, place("unit.flow")] = found.column("unit.capacity").values
    rows[:, place("unit.electrical_power")] = found.column("unit.power").values / TRUE_FACTOR
    return Measured.from_inputs(made, BOOSTER_INPUTS, rows)


def fit(
    measured: Measured, *, previous: Calibration | None = None, accuracy: InputAccuracy = ACCURACY
) -> Calibration:
    return fit_calibration(
        booster(), natural_gas(), measured, accuracy,
        times=[100.0 + k for k in range(measured.frames)], who="B. Hale", when=500.0,
        why="first weeks of service", previous=previous,
    )  # fmt: skip


def without(measured: Measured, *names: str) -> Measured:
    values = measured.values.copy()
    for name in names:
        values[:, place(name)] = np.nan
    return measured.like(values)


def test_a_machine_as_believed_stays_as_believed() -> None:
    found = fit(healthy(frames(), Corrections.nominal()))
    for name in CORRECTIONS:
        off = getattr(found.corrections_of(0), name) - PRIORS[name].mean
        # hand: only the power factor differs from its prior (0.92 for 0.94); it pulls no correction by half
        assert abs(off) < 0.5 * PRIORS[name].standard, name
    assert found.misfit < 1
    assert found.readings == 3


def test_a_fit_explains_the_machine_it_was_made_on() -> None:
    special = Corrections(preheat=0.06, valve_loss=1.3, heat_loss=0.01, volumetric_deficit=0.02)
    measured = healthy(frames(), special)
    found = fit(measured)
    for corrections, share in ((Corrections.nominal(), None), (found.corrections_of(0), 0.5)):
        e = evaluate(booster(), natural_gas(), corrections, measured)
        flow = abs(e.column("unit.capacity_residual").values.mean())
        heat = abs(e.column("stage1.discharge_temperature_residual").values.mean())
        if share is None:
            before = (flow, heat)
        else:
            assert flow < share * before[0]
            assert heat < share * before[1]


def test_priors_are_left_only_as_far_as_readings_carry() -> None:
    """Less is read, less is known: standard deviations grow towards the priors and never beyond."""
    measured = healthy(frames(), Corrections(volumetric_deficit=0.02))
    full = fit(measured)
    poor = fit(without(measured, "unit.flow", "unit.electrical_power"))
    for k, name in enumerate(CORRECTIONS):
        known, less = (float(np.sqrt(c.covariance_of(0)[k, k])) for c in (full, poor))
        assert known <= less * (1 + 1e-6) <= PRIORS[name].standard * (1 + 2e-6)
    k = CORRECTIONS.index("volumetric_deficit")
    assert np.sqrt(full.covariance_of(0)[k, k]) < 0.7 * PRIORS["volumetric_deficit"].standard
    assert (poor.power_factor, poor.readings) == (None, 1)
    assert full.power_factor is not None


def test_one_reading_of_a_straight_line_has_a_closed_form() -> None:
    """Only the deficit moves the flow in proportion: its posterior against the formula of two normals."""
    measured = without(healthy(frames(), Corrections.nominal()), "unit.electrical_power")
    measured.values[:, place("stage1.discharge_temperature")] = np.nan
    measured.values[:, place("unit.flow")] *= 0.99
    found = fit(measured)
    # numerical: slopes of ln(flow) to each correction, then the posterior of a linear reading by hand
    base = measured.like(np.median(measured.values, axis=0)[None, :])

    def log_capacity(corrections: Corrections, frame: Measured = base) -> float:
        e = evaluate(booster(), natural_gas(), corrections, frame)
        return float(np.log(e.column("unit.capacity").values[0]))

    means, sds = (np.array([getattr(PRIORS[n], a) for n in CORRECTIONS]) for a in ("mean", "standard"))
    steps = np.diag(0.05 * sds)
    slope = np.array(
        [log_capacity(corrections_from(means + s)) - log_capacity(corrections_from(means)) for s in steps]
    )
    slope = slope / 0.05  # for one prior standard deviation each
    variance = 0.006**2
    for source in ACCURACY.sources(BOOSTER_INPUTS):
        moved = [base.like(source.moved(base.values, s)) for s in (1, -1)]
        ends = [
            np.log(m.values[0, place("unit.flow")]) - log_capacity(corrections_from(means), m) for m in moved
        ]
        variance += ((ends[0] - ends[1]) / 2) ** 2
    reading = np.log(0.99)
    expected = means + sds * slope * reading / (variance + slope @ slope)
    for k, name in enumerate(CORRECTIONS):
        assert getattr(found.corrections_of(0), name) == pytest.approx(expected[k], abs=0.02 * sds[k]), name
        # hand: posterior variance of a linear reading
        left = sds[k] ** 2 * (1 - slope[k] ** 2 / (variance + slope @ slope))
        assert found.covariance_of(0)[k, k] == pytest.approx(left, rel=0.02)


def test_another_condition_teaches_more_and_more_of_the_same_does_not() -> None:
    """A hundred frames of one hour are one reading; a second pressure ratio is a second one."""
    few, many = (healthy(frames(n), Corrections.nominal()) for n in (30, 90))
    rows = frames(60)
    rows[30:, place("stage1.suction_pressure")] *= 1.3
    two = fit(healthy(rows, Corrections.nominal()))
    one, same = fit(few), fit(many)
    assert (one.readings, same.readings, two.readings) == (3, 3, 6)
    trace = [float(np.log(np.linalg.det(c.covariance_of(0)))) for c in (one, same, two)]
    assert trace[1] == pytest.approx(trace[0], abs=0.02)
    assert trace[2] < trace[0] - 0.1


def test_each_load_step_has_its_own_and_one_never_seen_borrows() -> None:
    unit = booster()
    rows = frames(120, steps=(0.0, 0.0, 1.0))
    measured = healthy(rows, Corrections.nominal())
    second = healthy(rows, Corrections(volumetric_deficit=0.03))
    on_second = rows[:, place("unit.load_step")] == 1.0
    values = np.where(on_second[:, None], second.values, measured.values)
    found = fit(measured.like(values))
    assert dict(found.frames) == {0: 80, 1: 40}
    deficits = [found.corrections_of(k).volumetric_deficit for k in (0, 1)]
    assert deficits[1] > deficits[0] + 0.008
    assert found.corrections_of(2) == found.corrections_of(0)
    assert (np.diagonal(found.covariance_of(2)) > np.diagonal(found.covariance_of(0))).all()
    assert len(unit.load_steps) > 2


def test_what_is_written_beside_a_fit() -> None:
    first = fit(healthy(frames(), Corrections.nominal()))
    assert (first.version, first.first, first.last) == (1, 100.0, 129.0)
    assert (first.who, first.when, first.why) == ("B. Hale", 500.0, "first weeks of service")
    assert fit(healthy(frames(), Corrections.nominal()), previous=first).version == 2
    with pytest.raises(AttributeError):
        first.version = 3  # type: ignore[misc]


def test_the_same_frames_give_the_same_fit() -> None:
    measured = healthy(frames(), Corrections(valve_loss=1.2))
    assert fit(measured).corrections_of(0) == fit(measured).corrections_of(0)


def test_a_wrong_clearance_is_named() -> None:
    """The machine has 16 points more clearance than its nameplate."""
    real = booster()
    cylinders = tuple(
        replace(c, ends=tuple(replace(e, clearance=e.clearance + 0.16) for e in c.ends))
        for c in real.cylinders
    )
    real = replace(real, stages=(replace(real.stages[0], cylinders=cylinders),))
    with pytest.raises(CalibrationRefusedError, match="clearance") as caught:
        fit(healthy(frames(), Corrections.nominal(), real))
    assert "volumetric_deficit" in caught.value.correction
    assert caught.value.sigmas > 3
    assert "K-110" in str(caught.value)


def test_a_wrong_power_tag_is_named() -> None:
    measured = healthy(frames(), Corrections.nominal())
    measured.values[:, place("unit.electrical_power")] *= 1.25
    with pytest.raises(CalibrationRefusedError, match="electrical power tag"):
        fit(measured)


def test_a_thermowell_in_the_wrong_place_is_named() -> None:
    measured = healthy(frames(), Corrections.nominal())
    measured.values[:, place("stage1.discharge_temperature")] -= 15.0
    with pytest.raises(
        (CalibrationRefusedError, CalibrationMisfitError), match=r"thermowell|discharge temperature"
    ):
        fit(measured)


def test_too_little_is_refused() -> None:
    few = healthy(frames(29), Corrections.nominal())
    with pytest.raises(TooFewFramesError, match="30 usable"):
        fit(few)
    blind = healthy(frames(), Corrections.nominal())
    blind.values[:, 0] = np.nan
    with pytest.raises(TooFewFramesError):
        fit(blind)


def test_frames_that_cannot_be_used_are_left_out() -> None:
    measured = healthy(frames(60), Corrections.nominal())
    measured.values[3, place("stage1.discharge_temperature")] = np.nan
    measured.values[7, place("unit.flow")] = np.nan
    found = fit(measured)
    assert found.frames[0] == 58


def test_held_while_a_finding_is_open() -> None:
    first = fit(healthy(frames(), Corrections.nominal()))
    held = first.held("K-110-7 leak with heat, cylinder 1").held("K-110-9").held("K-110-9")
    assert held.version == first.version
    with pytest.raises(CalibrationHeldError, match="K-110-7 leak with heat, cylinder 1, K-110-9"):
        fit(healthy(frames(), Corrections.nominal()), previous=held)
    again = held.released("K-110-9").released("K-110-7 leak with heat, cylinder 1")
    assert again.held_by == ()
    assert fit(healthy(frames(), Corrections.nominal()), previous=again).version == 2


def test_a_leak_that_grows_for_five_days_is_never_learned() -> None:
    """A tenth of the capacity lost, hot gas displacing fresh gas; a fit is asked for daily and refused."""
    calibration = fit(healthy(frames(), Corrections(volumetric_deficit=0.01)))
    version, open_finding = calibration.version, "K-110-7"
    before = -1.0
    flows, temperatures = [], []
    for day in range(6):
        leaked = 0.10 * day / 5
        measured = healthy(frames(), Corrections(volumetric_deficit=0.01))
        values = measured.values.copy()
        values[:, place("unit.flow")] *= 1 - leaked
        # hand: the same work on less gas; 70 K of rise
        values[:, place("stage1.discharge_temperature")] += 70 * leaked
        measured = measured.like(values)
        if day == 1:
            calibration = calibration.held(open_finding)
        if day >= 1:
            with pytest.raises(CalibrationHeldError, match=open_finding):
                fit(measured, previous=calibration)
        found = evaluate(booster(), natural_gas(), calibration.corrections_of(0), measured)
        flows.append(float(found.column("unit.capacity_residual").values.mean()))
        temperatures.append(float(found.column("stage1.discharge_temperature_residual").values.mean()))
        assert calibration.version == version
        assert temperatures[-1] > before
        before = temperatures[-1]
    assert (np.diff(flows) < 0).all()
    assert (np.diff(temperatures) > 0).all()
    assert flows[-1] == pytest.approx(flows[0] - 0.10 * (1 + flows[0]), abs=1e-6)  # hand: all of it
    assert temperatures[-1] - temperatures[0] == pytest.approx(7.0, abs=1e-6)
