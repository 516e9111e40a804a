"""The one door: frames of a unit in, everything the model says about it out.

Each stage is judged at its own measured pressures, so a stage whose transmitter is lost blinds itself and
leaves its neighbours to see.
"""

from dataclasses import dataclass, fields
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.evaluation import Codes, Column, Evaluation
from model.machine import Stage, Unit
from model.margins import margin
from model.measured import Measured
from model.quantities import LOWER_LIMITS, QUANTITIES, UPPER_LIMITS, Scope, series_name
from model.stage import (
    LOWEST_RATIO,
    LOWEST_SPEED_SHARE,
    StageState,
    isentropic_discharge_temperature,
    run_stage,
    stage_ratio,
)
from model.surface import GasSurface
from model.throw import ANGLES, Throw
from model.uncertainty import InputAccuracy, with_uncertainty
from model.verdicts import Verdict

__all__ = [
    "Corrections",
    "Evaluation",
    "InputAccuracy",
    "Measured",
    "evaluate",
    "evaluate_with_uncertainty",
]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

CHUNK: Final = 128
"""Frames evaluated at once: more fall out of the processor's cache and take three times as long each."""

_THROW_KEYS: Final = {
    "gas_load_tension": "gas_tension_n",
    "gas_load_compression": "gas_compression_n",
    "pin_load_tension": "pin_tension_n",
    "pin_load_compression": "pin_compression_n",
    "rod_load_tension": "rod_tension_n",
    "rod_load_compression": "rod_compression_n",
    "reversal_degrees": "reversal_rad",
    "reversal_percent": "reversal_share",
    "reversal_crossings": "crossings",
}


def evaluate(
    unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, *, angles: int = ANGLES
) -> Evaluation:
    """Evaluate frames of a unit.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    measured : Measured
        The frames.
    angles : int
        Steps of a turn, even. [-]

    Returns
    -------
    Evaluation
        Every estimate and margin of the glossary, without uncertainties.

    Notes
    -----
    A stage gives no numbers where the pressure ratio is under 1.02, the speed under a tenth of the rated
    one, or the gas outside its tabulated domain or under its dew line. Capacity of the unit is that of its
    first stage: without side streams every stage passes the same molar flow.

    References
    ----------
    See the formulas: `model.cycle`, `model.stage`, `model.rodload`.
    """
    columns: dict[str, Column] = {}
    stages = [_stage_columns(unit, stage, gas, corrections, measured, angles=angles) for stage in unit.stages]
    for part in stages:
        columns |= part
    columns |= _unit_columns(unit, gas, measured, columns)
    columns |= _margin_columns(unit, measured, columns)
    return Evaluation(frames=measured.frames, columns=columns)


def evaluate_with_uncertainty(
    unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, accuracy: InputAccuracy
) -> Evaluation:
    """Evaluate frames of a unit, each estimate with its standard uncertainty.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]

    Returns
    -------
    Evaluation
        As of `evaluate`, and beside each estimate its ``.u``.

    References
    ----------
    JCGM 100:2008 (GUM), 5.1. See `model.uncertainty`.
    """

    def run(frames: Measured) -> Evaluation:
        return evaluate(unit, gas, corrections, frames)

    return with_uncertainty(run, measured, accuracy)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class StageInputs:
    """Inputs of a stage (frames,) and which frames may be evaluated, or why not."""

    ps: Array
    pd: Array
    ts: Array
    speed: Array
    step: Array
    codes: Codes  # of everything that needs the whole cycle

    @property
    def usable(self) -> Mask:
        return np.asarray(self.codes == Verdict.GOOD)


def stage_inputs(unit: Unit, stage: Stage, measured: Measured) -> StageInputs:
    """Take the inputs of a stage out of frames and say which frames may be evaluated."""
    ps, pd, ts = (
        measured.column(series_name(stage.subject, key))
        for key in ("suction_pressure", "discharge_pressure", "suction_temperature")
    )
    speed, step = measured.column("unit.speed"), measured.column("unit.load_step")
    codes = np.full(measured.frames, Verdict.GOOD, np.uint8)
    slow = ~(speed >= LOWEST_SPEED_SHARE * unit.rated_speed_rad_s)
    codes[slow | ~(stage_ratio(ps, pd) >= LOWEST_RATIO)] = Verdict.OUT_OF_MODEL
    codes[~np.isfinite(np.stack([ps, pd, ts, speed, step])).all(axis=0)] = Verdict.INPUT_MISSING
    known = np.isin(step, np.arange(len(unit.load_steps)))
    codes[np.isfinite(step) & ~known] = Verdict.UNKNOWN_WORD
    return StageInputs(ps=ps, pd=pd, ts=ts, speed=speed, step=step, codes=codes)


def _stage_columns(
    unit: Unit, stage: Stage, gas: GasSurface, corrections: Corrections, measured: Measured, *, angles: int
) -> dict[str, Column]:
    inputs = stage_inputs(unit, stage, measured)
    missing = {
        "pressures": ~np.isfinite(inputs.ps + inputs.pd),
        "states": ~np.isfinite(inputs.ps + inputs.pd + inputs.ts),
    }
    results = _run_unique(unit, stage, gas, corrections, inputs, angles=angles)
    td = measured.column(series_name(stage.subject, "discharge_temperature"))
    flow = measured.column("unit.flow")
    codes = inputs.codes
    temperature_codes = np.where(
        (codes == Verdict.GOOD) & (results["passes"] == 0), Verdict.NO_THROUGH_FLOW, codes
    ).astype(np.uint8)
    expected = _column(results["temperature"], temperature_codes)
    isentropic = isentropic_discharge_temperature(gas, inputs.ts, _positive(inputs.ps), _positive(inputs.pd))
    swept = np.where(results["swept"] > 0, results["swept"], np.nan)
    # an end that passes nothing has no share of nothing: the verdict is the one of the temperature
    throughput = np.where((codes == Verdict.GOOD) & (results["swept"] == 0), Verdict.NO_THROUGH_FLOW, codes)
    throughput = throughput.astype(np.uint8)
    mass = gas.molar_mass_kg_mol
    stage_columns = {
        "stage_ratio": _column(stage_ratio(inputs.ps, inputs.pd), _missing(missing["pressures"])),
        "isentropic_discharge_temperature": _column(isentropic, _missing(missing["states"])),
        "expected_discharge_temperature": expected,
        "discharge_temperature_residual": _column(td - expected.values, _first(expected.verdicts, td)),
        "volumetric_efficiency": _column(results["flow"] / swept, throughput),
        "measured_volumetric_efficiency": _column(flow * mass / swept, _first(throughput, flow)),
        "stage_capacity": _column(results["flow"] / mass, codes),
        "stage_power": _column(results["power"], codes),
    }
    columns = {series_name(stage.subject, key): column for key, column in stage_columns.items()}
    for cylinder in stage.cylinders:
        for key, part in _THROW_KEYS.items():
            name = series_name(cylinder.subject, key)
            columns[name] = _column(results[f"{cylinder.number}.{part}"], codes)
    return columns


def _run_unique(
    unit: Unit, stage: Stage, gas: GasSurface, corrections: Corrections, inputs: StageInputs, *, angles: int
) -> dict[str, Array]:
    """Run a stage on the frames that differ, and hand the results back to all frames; NaN where unusable."""
    rows = np.stack([inputs.ps, inputs.pd, inputs.ts, inputs.speed, inputs.step], axis=1)[inputs.usable]
    unique, back = np.unique(rows, axis=0, return_inverse=True)
    whole = StageState(
        suction_pressure_pa=unique[:, 0], discharge_pressure_pa=unique[:, 1],
        suction_temperature_k=unique[:, 2], speed_rad_s=unique[:, 3], load_step=unique[:, 4].astype(np.intp),
    )  # fmt: skip
    names = ["flow", "swept", "power", "temperature", "passes"]
    names += [f"{c.number}.{f.name}" for c in stage.cylinders for f in fields(Throw)]
    results = {name: np.full(inputs.ps.size, np.nan) for name in names}
    if unique.shape[0] == 0:
        return results
    pieces: dict[str, list[Array]] = {name: [] for name in names}
    for start in range(0, unique.shape[0], CHUNK):
        run = run_stage(unit, stage, gas, corrections, whole.part(slice(start, start + CHUNK)), angles=angles)
        pieces["flow"].append(run.flow_kg_s)
        pieces["swept"].append(run.swept_mass_kg_s)
        pieces["power"].append(run.power_w)
        pieces["temperature"].append(run.discharge_temperature_k)
        pieces["passes"].append(run.passes_gas.astype(np.float64))
        for number, throw in run.throws.items():
            for field in fields(Throw):
                pieces[f"{number}.{field.name}"].append(getattr(throw, field.name))
    for name, parts in pieces.items():
        results[name][inputs.usable] = np.concatenate(parts)[back.ravel()]
    return results


def _unit_columns(
    unit: Unit, gas: GasSurface, measured: Measured, stages: dict[str, Column]
) -> dict[str, Column]:
    first = stages[series_name(unit.stages[0].subject, "stage_capacity")]
    powers = [stages[series_name(stage.subject, "stage_power")] for stage in unit.stages]
    worst = np.max([p.verdicts for p in powers], axis=0)
    flow = measured.column("unit.flow")
    passes = np.where(first.values > 0, first.values, np.nan)
    no_flow = np.where(first.values == 0, Verdict.NO_THROUGH_FLOW, first.verdicts).astype(np.uint8)
    return {
        "unit.capacity": first,
        "unit.mass_flow": _column(first.values * gas.molar_mass_kg_mol, first.verdicts),
        "unit.power": _column(np.sum([p.values for p in powers], axis=0), worst),
        "unit.capacity_residual": _column(flow / passes - 1, _first(no_flow, flow)),
    }


def _margin_columns(unit: Unit, measured: Measured, results: dict[str, Column]) -> dict[str, Column]:
    subjects = {
        Scope.STAGE: tuple(s.subject for s in unit.stages),
        Scope.CYLINDER: tuple(c.subject for c in unit.cylinders),
        Scope.UNIT: ("unit",),
    }
    columns = {}
    for key in sorted(UPPER_LIMITS | LOWER_LIMITS):
        for subject in subjects[QUANTITIES[key].scope]:
            name = series_name(subject, key)
            entered = unit.limit(subject, key)
            value = results.get(name) or _column(
                measured.column(name), _missing(~np.isfinite(measured.column(name)))
            )
            if entered is None:
                left = Column(
                    values=np.full(measured.frames, np.nan),
                    verdicts=np.full(measured.frames, Verdict.NO_LIMIT, np.uint8),
                )
            else:
                left = _column(margin(key, value.values, entered.value), value.verdicts)
            columns[f"{name}_margin"] = left
    return columns


def _column(values: Array, codes: Codes) -> Column:
    """A number without a reason against it that is none all the same left the range of the model."""
    lost = (codes == Verdict.GOOD) & ~np.isfinite(values)
    verdicts = np.where(lost, np.uint8(Verdict.OUT_OF_MODEL), codes)
    return Column(values=np.where(verdicts == Verdict.GOOD, values, np.nan), verdicts=verdicts)


def _missing(where: Mask) -> Codes:
    return np.where(where, np.uint8(Verdict.INPUT_MISSING), np.uint8(Verdict.GOOD))


def _first(codes: Codes, needed: Array) -> Codes:
    """The reason already found, else that a further input is missing."""
    lacks = (codes == Verdict.GOOD) & ~np.isfinite(needed)
    return np.where(lacks, np.uint8(Verdict.INPUT_MISSING), codes)


def _positive(pressure: Array) -> Array:
    return np.where(pressure > 0, pressure, np.nan)
