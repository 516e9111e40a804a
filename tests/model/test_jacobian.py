"""The keeper of slopes: close to slopes of each frame, the same in any batch, and rarely at work."""

import time

import numpy as np
import pytest

from model.evaluate import Corrections, Evaluation, InputAccuracy, Measured, evaluate
from model.jacobian import JacobianKeeper, cell_middles
from model.quantities import PROBABILITY_SUFFIX, UNCERTAINTY_SUFFIX
from model.uncertainty import Nuisance, with_uncertainty
from model.verdicts import Verdict
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

SETS = {
    "booster": (booster, natural_gas, BOOSTER_INPUTS, BOOSTER_FRAME, BOOSTER_LIMITS),
    "make-up": (make_up, hydrogen_rich, MAKE_UP_INPUTS, MAKE_UP_FRAME, MAKE_UP_LIMITS),
}


class Rig:
    def __init__(self, name: str, *, nuisances: tuple[Nuisance, ...] = ()) -> None:
        make, gas, self.inputs, self.frame, limits = SETS[name]
        self.unit, self.gas = make(), gas()
        self.accuracy = InputAccuracy.from_limits(self.inputs, limits)
        self.keeper = JacobianKeeper(self.run, self.accuracy, nuisances, draws=200)

    def run(self, measured: Measured) -> Evaluation:
        return evaluate(self.unit, self.gas, Corrections.nominal(), measured)

    def measured(self, frames: np.ndarray) -> Measured:
        return Measured.from_inputs(self.unit, self.inputs, frames)

    def scattered(self, count: int, share: float, *, steps: int = 1) -> np.ndarray:
        """Frames about the design point; load steps and the running signal stay whole."""
        rng = np.random.default_rng(5)
        frames = self.frame * (1 + share * rng.uniform(-1, 1, (count, self.frame.size)))
        for place, name in enumerate(self.inputs):
            if "temperature" in name:
                frames[:, place] = self.frame[place] + 300 * share * rng.uniform(-1, 1, count)
            if name in {"unit.load_step", "unit.run_signal"}:
                frames[:, place] = rng.integers(0, steps, count) if name == "unit.load_step" else 1.0
        return frames


def _reuse(name: str, count: int, steps: int) -> None:
    """A load under a hundredth of the one the other way is no load: its tenths of a kilonewton pass."""
    rig = Rig(name)
    measured = rig.measured(rig.scattered(count, 0.06, steps=steps))
    kept = rig.keeper.update(measured)
    direct = with_uncertainty(rig.run, measured, rig.accuracy)
    worst = {}
    for series in direct.columns:
        base = series.removesuffix(UNCERTAINTY_SUFFIX).removesuffix("_margin")
        if not series.endswith(UNCERTAINTY_SUFFIX):
            continue
        ours, theirs = kept.column(series), direct.column(series)
        assert np.array_equal(ours.verdicts, theirs.verdicts), series
        counts = theirs.verdicts == Verdict.GOOD
        if "load" in base:
            other = base.replace("tension", "?").replace("compression", "tension").replace("?", "compression")
            counts &= direct.column(base).values > 0.01 * direct.column(other).values
        if counts.any():
            worst[series] = np.abs(ours.values[counts] / theirs.values[counts] - 1).max()
    assert len(worst) > 20
    assert max(worst.values()) <= 0.05, max(worst, key=lambda s: worst[s])
    assert rig.keeper.refreshed < 2 * count + 1


@pytest.mark.parametrize("name", SETS)
def test_reuse_costs_at_most_a_twentieth_of_each_uncertainty(name: str) -> None:
    _reuse(name, 20, 1)


@pytest.mark.slow
@pytest.mark.parametrize("name", SETS)
def test_reuse_over_all_load_steps(name: str) -> None:
    _reuse(name, 400, 3)


@pytest.mark.parametrize("name", SETS)
@pytest.mark.parametrize("size", [7, 24])
def test_any_batch_gives_the_same_numbers(name: str, size: int) -> None:
    one_by_one, in_parts = Rig(name), Rig(name)
    frames = one_by_one.scattered(24, 0.01, steps=2)
    frames[11, 0] = np.nan
    single = [one_by_one.keeper.update(one_by_one.measured(frame)) for frame in frames]
    parts = [
        in_parts.keeper.update(in_parts.measured(frames[k : k + size])) for k in range(0, len(frames), size)
    ]
    for series in single[0].columns:
        a = np.concatenate([e.columns[series].values for e in single])
        b = np.concatenate([e.columns[series].values for e in parts])
        assert a == pytest.approx(b, rel=1e-9, abs=1e-12, nan_ok=True), series
        codes = [np.concatenate([e.columns[series].verdicts for e in es]) for es in (single, parts)]
        assert np.array_equal(*codes), series


def test_the_order_of_frames_and_what_came_before_change_nothing() -> None:
    rig = Rig("booster")
    frames = rig.scattered(30, 0.05, steps=3)
    forth = rig.keeper.update(rig.measured(frames))
    rig.keeper.reset()
    rig.keeper.update(rig.measured(frames[:3] * 1.01))
    back = rig.keeper.update(rig.measured(frames[::-1]))
    for series, column in forth.columns.items():
        assert column.values == pytest.approx(back.columns[series].values[::-1], rel=1e-9, nan_ok=True)


def test_slopes_are_taken_once_for_frames_that_lie_close() -> None:
    rig = Rig("make-up")
    middle = cell_middles(rig.measured(rig.frame), rig.accuracy)[0]
    near = np.tile(middle, (50, 1)) * (1 + 1e-4 * np.random.default_rng(2).uniform(-1, 1, (50, middle.size)))
    near[:, -2:] = middle[-2:]
    for frame in near:
        rig.keeper.update(rig.measured(frame))
    assert rig.keeper.refreshed == 1
    stepped = near[0].copy()
    stepped[rig.inputs.index("unit.load_step")] = 1.0
    rig.keeper.update(rig.measured(stepped))
    assert rig.keeper.refreshed == 2
    moved = near[0].copy()
    moved[0] *= 1.03
    rig.keeper.update(rig.measured(moved))
    assert rig.keeper.refreshed == 3


def test_a_frame_whose_cell_leaves_the_range_stands_for_itself() -> None:
    rig = Rig("booster")
    frame = rig.frame.copy()
    place = rig.inputs.index("stage1.discharge_pressure")
    high = rig.unit.domain.high_pressure_pa
    frame[place] = high * 0.9995
    assert cell_middles(rig.measured(frame), rig.accuracy)[0, place] > high  # the frame itself lies below
    measured = rig.measured(frame)
    kept, direct = rig.keeper.update(measured), with_uncertainty(rig.run, measured, rig.accuracy)
    name = "stage1.expected_discharge_temperature"
    assert direct.column(name).verdicts[0] == Verdict.GOOD
    assert kept.column(f"{name}.u").values == pytest.approx(direct.column(f"{name}.u").values, rel=1e-9)
    assert rig.keeper.refreshed == 2


def test_margins_have_an_uncertainty_and_a_probability() -> None:
    rig = Rig("booster")
    hot = rig.frame.copy()
    hot[rig.inputs.index("stage1.discharge_temperature")] = 403.15
    found = rig.keeper.update(rig.measured(np.stack([rig.frame, hot])))
    name = "stage1.discharge_temperature_margin"
    u = found.column(name + UNCERTAINTY_SUFFIX).values
    assert u == pytest.approx([1 / 3**0.5] * 2)  # hand: the transmitter's limit of error of 1 K, nothing else
    # hand: at the limit one in two; 28.85 K before it never
    assert found.column(name + PROBABILITY_SUFFIX).values == pytest.approx([0, 0.5], abs=1e-12)
    load = found.column("cylinder1.pin_load_compression_margin" + UNCERTAINTY_SUFFIX).values
    assert load == pytest.approx(found.column("cylinder1.pin_load_compression" + UNCERTAINTY_SUFFIX).values)
    none = Rig("make-up")
    blank = none.keeper.update(none.measured(none.frame)).column(name + PROBABILITY_SUFFIX)
    assert blank.verdicts[0] == Verdict.NO_LIMIT
    assert np.isnan(blank.values[0])


def test_a_nuisance_counts_with_the_uncertainty_it_has_now() -> None:
    """A correction that is known to 0.02 of volumetric efficiency, and to twice that on the next frame."""

    def shifted(by: float) -> Evaluation:
        def run(measured: Measured) -> Evaluation:
            return evaluate(rig.unit, rig.gas, Corrections(volumetric_deficit=by), measured)

        return run

    rig = Rig("booster")
    nuisance = Nuisance(name="deficit", above=shifted(0.01), below=shifted(-0.01), step=0.01, standard=0.02)
    keeper = JacobianKeeper(rig.run, rig.accuracy, (nuisance,))
    frames = rig.measured(np.stack([rig.frame, rig.frame]))
    name = "stage1.volumetric_efficiency.u"
    plain = rig.keeper.update(frames).column(name).values
    usual = keeper.update(frames).column(name).values
    # hand: 0.02 in quadrature
    assert usual == pytest.approx(np.hypot(plain, 0.02), rel=1e-6)
    aged = keeper.update(frames, {"deficit": np.array([0.02, 0.04])}).column(name).values
    assert aged == pytest.approx(np.hypot(plain, [0.02, 0.04]), rel=1e-6)


def test_too_few_draws_are_refused() -> None:
    rig = Rig("booster")
    with pytest.raises(ValueError, match="50 draws"):
        JacobianKeeper(rig.run, rig.accuracy, draws=50)


@pytest.mark.slow
def test_twelve_units_cost_less_than_half_a_core() -> None:
    """A third of them one-stage, the others three-stage: harder than the mix of the demo site."""
    rigs = [Rig("booster"), Rig("make-up"), Rig("make-up")]
    frames = [rig.scattered(120, 2e-3) for rig in rigs]
    for rig, rows in zip(rigs, frames, strict=True):
        rig.keeper.update(rig.measured(rows[:20]))
    started = time.process_time()
    for rig, rows in zip(rigs, frames, strict=True):
        for row in rows[20:]:
            rig.keeper.update(rig.measured(row))
    a_tick = (time.process_time() - started) / 100 / len(rigs)
    print(f"{a_tick * 1e3:.1f} ms of CPU a unit and tick")
    assert 12 * a_tick <= 0.5
