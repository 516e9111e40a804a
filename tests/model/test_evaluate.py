"""The one door: every quantity filled, reasons where there is none, the same answer however frames arrive."""

import math
import time
from dataclasses import replace

import numpy as np
import pytest

from model.evaluate import (
    Corrections,
    Evaluation,
    InputAccuracy,
    Measured,
    evaluate,
    evaluate_with_uncertainty,
)
from model.machine import Unit
from model.quantities import QUANTITIES, UNCERTAINTY_SUFFIX, Kind, Scope, series_name
from model.surface import GasSurface
from model.verdicts import Verdict
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

NOMINAL = Corrections.nominal()
Plant = tuple[Unit, GasSurface, tuple[str, ...], np.ndarray, tuple[float, ...]]


def plant(name: str) -> Plant:
    if name == "booster":
        return booster(), natural_gas(), BOOSTER_INPUTS, BOOSTER_FRAME, BOOSTER_LIMITS
    return make_up(), hydrogen_rich(), MAKE_UP_INPUTS, MAKE_UP_FRAME, MAKE_UP_LIMITS


def result_names(unit: Unit, *, uncertainty: bool = True) -> list[str]:
    subjects = {
        Scope.UNIT: ("unit",),
        Scope.STAGE: tuple(s.subject for s in unit.stages),
        Scope.CYLINDER: tuple(c.subject for c in unit.cylinders),
    }
    names = []
    for quantity in QUANTITIES.values():
        if quantity.kind is Kind.MEASURED or quantity.key == "run_state":
            continue
        for subject in subjects[quantity.scope]:
            name = series_name(subject, quantity.key)
            names += [name, name + UNCERTAINTY_SUFFIX] if uncertainty and quantity.has_uncertainty else [name]
    return names


def one(name: str, **changes: float) -> tuple[Evaluation, Unit]:
    unit, gas, inputs, frame, _ = plant(name)
    values = frame.copy()
    for key, value in changes.items():
        subject, _, quantity = key.partition("__")
        values[inputs.index(f"{subject}.{quantity}")] = value
    return evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, inputs, values)), unit


def value(evaluation: Evaluation, name: str) -> float:
    return float(evaluation.column(name).values[0])


def verdict(evaluation: Evaluation, name: str) -> Verdict:
    return Verdict(int(evaluation.column(name).verdicts[0]))


@pytest.mark.parametrize("name", ["booster", "make up"])
def test_every_result_of_the_glossary_is_filled(name: str) -> None:
    unit, gas, inputs, frame, accuracies = plant(name)
    accuracy = InputAccuracy.from_limits(inputs, accuracies)
    measured = Measured.from_inputs(unit, inputs, frame)
    names = result_names(unit)
    values, verdicts = evaluate_with_uncertainty(unit, gas, NOMINAL, measured, accuracy).table(names)
    empty = [
        n
        for n, v, q in zip(names, values[0], verdicts[0], strict=True)
        if q != Verdict.GOOD or not np.isfinite(v)
    ]
    # the make-up machine has no limits entered, so no margins
    assert empty == [n for n in names if n.endswith("_margin") and not unit.limits]
    assert (verdicts[0][[names.index(n) for n in empty]] == Verdict.NO_LIMIT).all()


def test_the_running_state_is_left_to_the_agent() -> None:
    found, _ = one("booster")
    values, verdicts = found.table(["unit.run_state", "unit.power.u"])
    assert np.isnan(values).all()
    assert (verdicts == Verdict.INPUT_MISSING).all()


def test_an_unknown_name_is_refused() -> None:
    found, _ = one("booster")
    with pytest.raises(KeyError):
        found.table(["stage1.happiness"])


def test_totals_hang_together() -> None:
    found, unit = one("make up")
    powers = [value(found, f"{stage.subject}.stage_power") for stage in unit.stages]
    # hand
    assert value(found, "unit.power") == pytest.approx(sum(powers))
    assert value(found, "unit.capacity") == value(found, "stage1.stage_capacity")
    mass = hydrogen_rich().molar_mass_kg_mol
    assert value(found, "unit.mass_flow") == pytest.approx(value(found, "unit.capacity") * mass)


def test_measured_flow_gives_the_measured_efficiency_of_every_stage() -> None:
    found, unit = one("make up", unit__flow=360.0)
    for stage in unit.stages:
        expected = value(found, f"{stage.subject}.volumetric_efficiency")
        capacity = value(found, f"{stage.subject}.stage_capacity")
        # hand: the same flow through every stage
        assert value(found, f"{stage.subject}.measured_volumetric_efficiency") == pytest.approx(
            expected * 360.0 / capacity
        )
    assert value(found, "unit.capacity_residual") == pytest.approx(360.0 / value(found, "unit.capacity") - 1)


def test_residual_and_margin_of_the_discharge_temperature_use_the_measured_one() -> None:
    found, _ = one("booster", stage1__discharge_temperature=390.0)
    # hand: the limit is 403.15 K
    assert value(found, "stage1.discharge_temperature_margin") == pytest.approx(13.15)
    assert value(found, "stage1.discharge_temperature_residual") == pytest.approx(
        390.0 - value(found, "stage1.expected_discharge_temperature")
    )


def test_margins_are_what_is_left_to_the_entered_limits() -> None:
    found, _ = one("booster")
    # hand
    assert value(found, "cylinder2.gas_load_compression_margin") == pytest.approx(
        170e3 - value(found, "cylinder2.gas_load_compression")
    )
    assert value(found, "cylinder1.reversal_degrees_margin") == pytest.approx(
        value(found, "cylinder1.reversal_degrees") - math.radians(20)
    )


def frames(name: str, count: int) -> tuple[Unit, GasSurface, tuple[str, ...], np.ndarray]:
    unit, gas, inputs, frame, _ = plant(name)
    rng = np.random.default_rng(3)
    table = frame * (1 + 0.02 * rng.standard_normal((count, frame.size)))
    table[:, inputs.index("unit.load_step")] = rng.integers(0, len(unit.load_steps), count)
    for row in range(0, count, 9):
        table[row, rng.integers(0, frame.size)] = np.nan
    return unit, gas, inputs, table


@pytest.mark.parametrize("name", ["booster", "make up"])
@pytest.mark.parametrize("chunk", [1, 7])
def test_chunking_changes_no_answer(name: str, chunk: int) -> None:
    unit, gas, inputs, table = frames(name, 200)
    names = result_names(unit, uncertainty=False)

    def table_of(rows: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        return evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, inputs, rows)).table(names)

    whole, whole_verdicts = table_of(table)
    pieces = [table_of(table[start : start + chunk]) for start in range(0, len(table), chunk)]
    values = np.concatenate([piece[0] for piece in pieces])
    assert np.array_equal(np.concatenate([piece[1] for piece in pieces]), whole_verdicts)
    assert np.array_equal(np.isnan(values), np.isnan(whole))
    assert np.allclose(values, whole, rtol=1e-9, atol=1e-9, equal_nan=True)
    assert np.isfinite(whole).mean() > 0.5 * (name == "booster") + 0.3


def test_single_precision_frames_are_taken() -> None:
    unit, gas, inputs, frame, _ = plant("booster")
    single = Measured.from_inputs(unit, inputs, frame.astype(np.float32)[None])
    double = Measured.from_inputs(unit, inputs, frame[None])
    a, b = (value(evaluate(unit, gas, NOMINAL, m), "unit.power") for m in (single, double))
    assert a == pytest.approx(b, rel=1e-5)


def test_a_wrong_shape_is_refused() -> None:
    with pytest.raises(ValueError, match="for 9 inputs"):
        Measured.from_inputs(booster(), BOOSTER_INPUTS, np.zeros((3, 8)))


@pytest.mark.parametrize(
    ("missing", "lost", "kept"),
    [
        ("stage1__suction_pressure", "stage1.stage_ratio", "stage1.discharge_temperature_margin"),
        ("stage1__suction_temperature", "stage1.stage_power", "stage1.stage_ratio"),
        ("unit__speed", "cylinder1.reversal_degrees", "stage1.isentropic_discharge_temperature"),
        ("unit__load_step", "unit.capacity", "stage1.isentropic_discharge_temperature"),
        ("unit__flow", "stage1.measured_volumetric_efficiency", "stage1.volumetric_efficiency"),
        ("unit__flow", "unit.capacity_residual", "unit.capacity"),
        ("stage1__discharge_temperature", "stage1.discharge_temperature_residual",
         "stage1.expected_discharge_temperature"),
        ("stage1__discharge_temperature", "stage1.discharge_temperature_margin", "unit.power"),
        ("unit__electrical_power", "unit.run_state", "unit.power"),
    ],
)  # fmt: skip
def test_a_missing_input_blinds_what_needs_it_and_nothing_else(missing: str, lost: str, kept: str) -> None:
    found, _ = one("booster", **{missing: math.nan})
    assert verdict(found, lost) is Verdict.INPUT_MISSING
    assert math.isnan(value(found, lost))
    assert verdict(found, kept) is Verdict.GOOD
    assert math.isfinite(value(found, kept))


def test_a_stage_without_its_input_leaves_its_neighbours_to_see() -> None:
    found, unit = one("make up", stage2__suction_pressure=math.nan)
    for key in ("stage_power", "expected_discharge_temperature", "volumetric_efficiency"):
        assert verdict(found, f"stage2.{key}") is Verdict.INPUT_MISSING
        for stage in ("stage1", "stage3"):
            assert verdict(found, f"{stage}.{key}") is Verdict.GOOD
    assert verdict(found, "cylinder3.pin_load_tension") is Verdict.INPUT_MISSING
    assert verdict(found, "cylinder4.pin_load_tension") is Verdict.GOOD
    assert verdict(found, "unit.power") is Verdict.INPUT_MISSING
    assert verdict(found, "unit.capacity") is Verdict.GOOD
    assert len(unit.stages) == 3


@pytest.mark.parametrize(
    ("changes", "why"),
    [
        ({"stage1__suction_pressure": 70.46e5}, "no compression"),
        ({"stage1__discharge_pressure": 96e5}, "above the tabulated pressure"),
        ({"stage1__suction_pressure": -1e5}, "below nothing"),
        ({"stage1__suction_temperature": 260.0}, "colder than tabulated"),
        ({"stage1__suction_pressure": 12e5}, "hotter at discharge than tabulated"),
        ({"unit__speed": 0.0}, "at rest"),
    ],
    ids=lambda x: x if isinstance(x, str) else "",
)
def test_outside_its_range_the_model_says_so(changes: dict[str, float], why: str) -> None:
    found, _ = one("booster", **changes)
    for name in (
        "stage1.stage_power",
        "cylinder1.pin_load_tension",
        "unit.capacity",
        "stage1.stage_capacity",
    ):
        assert verdict(found, name) is Verdict.OUT_OF_MODEL, why
        assert math.isnan(value(found, name))


@pytest.mark.parametrize("step", [4.0, -1.0, 0.5])
def test_an_unknown_load_step_is_named(step: float) -> None:
    found, _ = one("booster", unit__load_step=step)
    assert verdict(found, "cylinder1.reversal_degrees") is Verdict.UNKNOWN_WORD
    assert verdict(found, "stage1.stage_ratio") is Verdict.GOOD


def test_without_through_flow_there_is_no_temperature_to_judge_but_loads_there_are() -> None:
    found, _ = one("booster", unit__load_step=3.0)
    for name in ("expected_discharge_temperature", "discharge_temperature_residual", "volumetric_efficiency",
                 "measured_volumetric_efficiency"):  # fmt: skip
        assert verdict(found, f"stage1.{name}") is Verdict.NO_THROUGH_FLOW
    assert verdict(found, "unit.capacity_residual") is Verdict.NO_THROUGH_FLOW
    assert value(found, "unit.capacity") == 0
    assert value(found, "cylinder1.pin_load_tension") > 0


def test_a_unit_without_a_speed_input_runs_at_its_rated_speed() -> None:
    unit, gas, inputs, frame, _ = plant("booster")
    keep = [i for i, name in enumerate(inputs) if name != "unit.speed"]
    names = tuple(inputs[i] for i in keep)
    without = evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, names, frame[keep]))
    assert value(without, "unit.power") == value(one("booster", unit__speed=900 * RPM)[0], "unit.power")


def test_a_unit_with_several_steps_and_no_step_input_is_not_evaluated() -> None:
    unit, gas, inputs, frame, _ = plant("booster")
    keep = [i for i, name in enumerate(inputs) if name != "unit.load_step"]
    names = tuple(inputs[i] for i in keep)
    found = evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, names, frame[keep]))
    assert verdict(found, "unit.power") is Verdict.INPUT_MISSING
    single = replace(unit, load_steps=unit.load_steps[:1])
    found = evaluate(single, gas, NOMINAL, Measured.from_inputs(single, names, frame[keep]))
    assert verdict(found, "unit.power") is Verdict.GOOD


def test_no_frames_give_no_rows() -> None:
    unit, gas, inputs, _, _ = plant("booster")
    found = evaluate(unit, gas, NOMINAL, Measured.from_inputs(unit, inputs, np.empty((0, len(inputs)))))
    assert found.table(["unit.power"])[0].shape == (0, 1)


def test_a_live_tick_of_both_units_with_uncertainty_is_quick() -> None:
    """Bar 0.1 s for both on an idle core; the best of several tries, as others share the cores."""
    work = []
    for name in ("booster", "make up"):
        unit, gas, inputs, frame, accuracies = plant(name)
        work.append(
            (
                unit,
                gas,
                Measured.from_inputs(unit, inputs, frame),
                InputAccuracy.from_limits(inputs, accuracies),
            )
        )
    best = math.inf
    for _ in range(5):
        start = time.perf_counter()
        for unit, gas, measured, accuracy in work:
            evaluate_with_uncertainty(unit, gas, NOMINAL, measured, accuracy)
        best = min(best, time.perf_counter() - start)
    assert best < 0.1
