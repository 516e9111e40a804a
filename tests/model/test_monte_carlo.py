"""Random draws beside slopes, and the same draws for the same frame."""

import math

import numpy as np
import pytest

from model.evaluate import Corrections, Evaluation, InputAccuracy, Measured, evaluate
from model.evaluation import Column
from model.jacobian import JacobianKeeper, bending
from model.monte_carlo import draw_frames, drawn, seed_of
from model.uncertainty import MODEL_ERRORS, with_uncertainty
from tests.model.nameplates import (
    BOOSTER_FRAME,
    BOOSTER_INPUTS,
    BOOSTER_LIMITS,
    MAKE_UP_FRAME,
    MAKE_UP_INPUTS,
    MAKE_UP_LIMITS,
    RPM,
    booster,
    make_up,
)
from tests.model.surfaces import hydrogen_rich, natural_gas

ACCURACY = InputAccuracy.from_limits(BOOSTER_INPUTS, BOOSTER_LIMITS)


def run_booster(measured: Measured) -> Evaluation:
    return evaluate(booster(), natural_gas(), Corrections.nominal(), measured)


def booster_frame(**changes: float) -> Measured:
    frame = BOOSTER_FRAME.copy()
    for name, value in changes.items():
        frame[BOOSTER_INPUTS.index(name.replace("__", "."))] = value
    return Measured.from_inputs(booster(), BOOSTER_INPUTS, frame)


FEEBLE = {"unit__load_step": 2.0, "unit__speed": 300 * RPM, "stage1__suction_pressure": 24e5}
"""Crank ends held open at a third of the speed: gas load alone, which hardly reverses."""


def test_the_same_frame_draws_the_same_numbers() -> None:
    one, other = booster_frame(), booster_frame(unit__speed=899 * RPM)
    first, second = (draw_frames(one, ACCURACY, 50).values for _ in range(2))
    assert np.array_equal(first, second)
    assert seed_of(one.values[0]) != seed_of(other.values[0])
    assert seed_of(np.array([np.nan, 0.0])) == seed_of(np.array([-np.nan, -0.0]))


def test_draws_stay_within_the_limits_of_error_and_fill_them() -> None:
    frames = draw_frames(booster_frame(), ACCURACY, 2000).values
    assert np.array_equal(frames[0], BOOSTER_FRAME)
    off = np.abs(frames[1:] - BOOSTER_FRAME).max(axis=0)
    limits = np.array(BOOSTER_LIMITS)
    assert (off <= limits * (1 + 1e-12)).all()
    assert (off >= 0.99 * limits).all()  # hand: 2 000 even draws miss the outer 1 % with probability 2e-9


def test_inputs_of_one_transmitter_are_drawn_together() -> None:
    two = ("stage1.discharge_pressure", "stage2.suction_pressure")
    shared = InputAccuracy.from_limits(
        MAKE_UP_INPUTS, MAKE_UP_LIMITS,
        ["P2" if n in two else n for n in MAKE_UP_INPUTS],
    )  # fmt: skip
    frames = draw_frames(Measured.from_inputs(make_up(), MAKE_UP_INPUTS, MAKE_UP_FRAME), shared, 100).values
    a, b = (MAKE_UP_INPUTS.index(n) for n in two)
    assert np.corrcoef(frames[:, a], frames[:, b])[0, 1] == pytest.approx(1)
    c = MAKE_UP_INPUTS.index("stage2.discharge_pressure")
    assert abs(np.corrcoef(frames[:, a], frames[:, c])[0, 1]) < 0.4


def test_a_spread_that_has_a_closed_form() -> None:
    """Ratio of two pressures: even draws, both small."""

    def ratio(measured: Measured) -> Evaluation:
        values = measured.values[:, 1] / measured.values[:, 0]
        column = Column(values=values, verdicts=np.zeros(values.size, np.uint8))
        return Evaluation(frames=values.size, columns={"stage1.stage_ratio": column})

    found = drawn(ratio, booster_frame(), ACCURACY, ("stage1.stage_ratio",), 4000)["stage1.stage_ratio"]
    ps, pd = BOOSTER_FRAME[0], BOOSTER_FRAME[1]
    # hand: relative uncertainties in quadrature; 3 %, the statistical error of 4 000 even draws being 1 %
    expected = pd / ps * math.hypot(15e3 / ps, 25e3 / pd) / math.sqrt(3)
    assert found.standard == pytest.approx(expected, rel=0.03)
    assert found.deviations.mean() == pytest.approx(0, abs=0.05 * expected)


def test_a_load_that_hardly_reverses_is_drawn_and_no_other() -> None:
    for changes, some in (({}, False), (FEEBLE, True)):
        measured = booster_frame(**changes)
        evaluation = run_booster(measured)
        names = tuple(evaluation.columns)
        values = np.array([evaluation.columns[n].values[0] for n in names])
        assert bool(bending(names, values)) is some


def test_where_a_load_hardly_reverses_the_keeper_uses_the_draws() -> None:
    measured = booster_frame(**FEEBLE)
    keeper = JacobianKeeper(run_booster, ACCURACY, draws=400)
    found = keeper.update(measured)
    again = JacobianKeeper(run_booster, ACCURACY, draws=400).update(measured)
    degrees = "cylinder1.reversal_degrees"
    assert 0 <= found.column(degrees).values[0] < math.radians(25)
    error = MODEL_ERRORS["reversal_degrees"].absolute
    u = found.column(f"{degrees}.u").values[0]
    assert error <= u < math.radians(5)
    for name in (f"{degrees}.u", f"{degrees}_margin.p", "cylinder1.reversal_percent_margin.p"):
        assert found.column(name).values[0] == again.column(name).values[0]
    # hand: limits of 20 degrees and 5 % are passed
    assert found.column(f"{degrees}_margin").values[0] < 0
    assert found.column(f"{degrees}_margin.p").values[0] > 0.9


def test_probability_of_a_small_reversal_runs_from_one_to_nothing_with_its_limit() -> None:
    """At the very limit about one in two, whatever the shape of the draws."""
    keeper = JacobianKeeper(run_booster, ACCURACY, draws=400)
    speeds = np.linspace(300, 900, 25) * RPM
    frames = np.tile(booster_frame(**FEEBLE).values, (speeds.size, 1))
    frames[:, BOOSTER_INPUTS.index("unit.speed")] = speeds
    found = keeper.update(Measured.from_inputs(booster(), BOOSTER_INPUTS, frames))
    left = found.column("cylinder1.reversal_degrees_margin").values
    p = found.column("cylinder1.reversal_degrees_margin.p").values
    u = found.column("cylinder1.reversal_degrees.u").values
    assert left[0] < 0 < left[-1]
    assert (p[left < -3 * u] > 0.99).all()
    assert (p[left > 3 * u] < 0.01).all()
    assert ((p > 0.5) == (left < 0))[np.abs(left) > 0.3 * u].all()


U1 = ("stage1.volumetric_efficiency", "stage1.expected_discharge_temperature", "unit.mass_flow", "unit.power")


@pytest.mark.slow
@pytest.mark.parametrize("step", [0, 1, 2])
@pytest.mark.parametrize("plant", ["booster", "make-up"])
def test_slopes_agree_with_4000_draws_while_loads_reverse_well(plant: str, step: int) -> None:
    if plant == "booster":
        unit, gas, inputs, frame, limits = (
            booster(), natural_gas(), BOOSTER_INPUTS, BOOSTER_FRAME, BOOSTER_LIMITS,
        )  # fmt: skip
    else:
        unit, gas, inputs, frame, limits = (
            make_up(), hydrogen_rich(), MAKE_UP_INPUTS, MAKE_UP_FRAME, MAKE_UP_LIMITS,
        )  # fmt: skip
    accuracy = InputAccuracy.from_limits(inputs, limits)
    frame = frame.copy()
    frame[inputs.index("unit.load_step")] = step
    measured = Measured.from_inputs(unit, inputs, frame)

    def run(frames: Measured) -> Evaluation:
        return evaluate(unit, gas, Corrections.nominal(), frames)

    found = with_uncertainty(run, measured, accuracy)
    names = [*U1, *(f"{c.subject}.reversal_degrees" for c in unit.cylinders)]
    spread = drawn(run, measured, accuracy, names, 4000)
    for name in names:
        value = found.column(name).values[0]
        if name.endswith("reversal_degrees") and value <= math.radians(25):
            continue
        error = MODEL_ERRORS[name.partition(".")[2]]
        floor = math.hypot(error.absolute, error.relative * value)
        instruments = math.sqrt(found.column(f"{name}.u").values[0] ** 2 - floor**2)
        ratio = instruments / spread[name].standard
        print(f"{plant} step {step} {name}: slopes / draws {ratio:.3f}")
        # bar: 10 %, the statistical error of 4 000 draws being 1 %
        assert ratio == pytest.approx(1, abs=0.1), name


@pytest.mark.slow
def test_draws_kept_for_a_cell_serve_every_frame_of_it() -> None:
    """Against draws of each frame's own, four times as many."""
    rng = np.random.default_rng(4)
    frames = np.tile(booster_frame(**FEEBLE).values, (8, 1))
    frames[:, :2] *= 1 + 0.06 * rng.uniform(-1, 1, (8, 2))
    frames[:, BOOSTER_INPUTS.index("unit.speed")] *= 1 + 0.5 * rng.uniform(0, 1, 8)
    measured = Measured.from_inputs(booster(), BOOSTER_INPUTS, frames)
    kept = JacobianKeeper(run_booster, ACCURACY).update(measured)
    for key in ("reversal_degrees", "reversal_percent"):
        name = f"cylinder1.{key}"
        floor = MODEL_ERRORS[key].absolute
        for k in range(8):
            one = measured.like(measured.values[k : k + 1])
            own = math.hypot(drawn(run_booster, one, ACCURACY, (name,), 4000)[name].standard, floor)
            assert kept.column(f"{name}.u").values[k] == pytest.approx(own, rel=0.05)
