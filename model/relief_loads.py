"""Loads of every rod with each stage at its relief setting and the lowest suction of the load step.

What the rods carry now says nothing of what they would carry the day a relief valve opens. This is the state
for which a machine's loads are rated.
"""

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np

from model.corrections import Corrections
from model.errors import OutOfRange
from model.machine import Cylinder, LoadStep, Stage, Unit
from model.margins import margin
from model.stage import LOWEST_RATIO, StageRun, StageState, run_stage
from model.surface import GasSurface

LOAD_FIELDS: Final[Mapping[str, str]] = MappingProxyType(
    {
        "gas_load_tension": "gas_tension_n",
        "gas_load_compression": "gas_compression_n",
        "pin_load_tension": "pin_tension_n",
        "pin_load_compression": "pin_compression_n",
        "rod_load_tension": "rod_tension_n",
        "rod_load_compression": "rod_compression_n",
        "reversal_degrees": "reversal_rad",
        "reversal_percent": "reversal_share",
    }
)
"""Field of `model.throw.Throw` of each load, by its key in the glossary."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LoadAtRelief:
    """One load of one cylinder in one load step."""

    step: str  # its word
    stage: int
    subject: str  # e.g. "cylinder1"
    quantity: str  # key of model.quantities
    suction_pressure_pa: float
    discharge_pressure_pa: float
    value: float  # SI
    left: float | None  # to the limit entered, below zero past it; None: no limit


def lowest_suction(stage: Stage, step: LoadStep) -> float | None:
    """Lowest permitted pressure before a stage in a load step; None if nobody entered one. [Pa]"""
    if stage.number == 1 and step.lowest_suction_pa is not None:
        return step.lowest_suction_pa
    return stage.lowest_suction_pa


def loads_at_relief(
    unit: Unit,
    gas: GasSurface,
    corrections: Corrections,
    *,
    suction_temperature_k: float,
    speed_rad_s: float | None = None,
    steps: tuple[str, ...] | None = None,
) -> tuple[LoadAtRelief, ...]:
    """Loads and what is left to their limits, stage by stage at its relief setting.

    Parameters
    ----------
    unit : Unit
        The nameplate, with relief settings and lowest suction pressures. A stage without either is left out.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        How its cylinders depart from the ideal cycle.
    suction_temperature_k : float
        Temperature before each stage; loads hang on it little. [K]
    speed_rad_s : float or None
        Speed of the crankshaft; None for the rated one. [rad/s]
    steps : tuple of str or None
        Words of the load steps asked for; None for those permitted.

    Returns
    -------
    tuple of LoadAtRelief
        Every load of every cylinder of such stages. [SI]

    Raises
    ------
    OutOfRange
        A stage whose relief setting is not above its lowest suction, or a state outside the gas tables.

    Notes
    -----
    Each stage is set to its relief pressure alone; stages do not reach it together.

    References
    ----------
    API Standard 618, 5th edition, section 6.6 (rating of rod and gas loads; wording not reproduced).
    """
    found = []
    for step in unit.load_steps:
        if step.word not in steps if steps is not None else not step.permitted:
            continue
        for stage in unit.stages:
            low, high = lowest_suction(stage, step), stage.relief_pressure_pa
            if low is None or high is None:
                continue
            if high < LOWEST_RATIO * low:
                raise OutOfRange(
                    f"{unit.id} {stage.subject} relief setting", high, LOWEST_RATIO * low, np.inf
                )
            state = StageState(
                suction_pressure_pa=np.array([low]), discharge_pressure_pa=np.array([high]),
                suction_temperature_k=np.array([suction_temperature_k]),
                speed_rad_s=np.array([unit.rated_speed_rad_s if speed_rad_s is None else speed_rad_s]),
                load_step=np.array([step.index], np.intp),
            )  # fmt: skip
            run = run_stage(unit, stage, gas, corrections, state)
            found += [load for c in stage.cylinders for load in _loads(unit, stage, step, run, c)]
    return tuple(found)


def _loads(
    unit: Unit, stage: Stage, step: LoadStep, run: StageRun, cylinder: Cylinder
) -> Iterator[LoadAtRelief]:
    for key, name in LOAD_FIELDS.items():
        value = float(getattr(run.throws[cylinder.number], name)[0])
        if not np.isfinite(value):
            hottest = unit.domain.high_temperature_k
            raise OutOfRange(f"{unit.id} {stage.subject} gas at its relief setting", value, 0.0, hottest)
        limit = unit.limit(cylinder.subject, key)
        yield LoadAtRelief(
            step=step.word, stage=stage.number, subject=cylinder.subject, quantity=key, value=value,
            left=None if limit is None else float(margin(key, value, limit.value)),
            suction_pressure_pa=lowest_suction(stage, step) or np.nan,
            discharge_pressure_pa=stage.relief_pressure_pa or np.nan,
        )  # fmt: skip
