"""What steady frames of a healthy machine say about its corrections, and how much each reading weighs."""

import math
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.evaluate import evaluate
from model.evaluation import Evaluation
from model.machine import Unit
from model.measured import Measured
from model.surface import GasSurface
from model.uncertainty import MODEL_ERRORS, InputAccuracy

Array = NDArray[np.float64]

MOST_FRAMES: Final = 120
"""Frames of a load step that are used, evenly spread over those given: more teach nothing new."""
_CONDITION: Final = 0.15  # change of a ratio or the speed, natural logarithm, that makes another condition
_MOSTLY: Final = 0.9  # a reading that fewer frames have is left out


@dataclass(frozen=True, slots=True, kw_only=True)
class PowerFactor:
    """Indicated over electrical power: one number a unit, as far as a motor has one."""

    log_mean: float
    log_standard: float
    suspect: str


POWER_FACTOR: Final = PowerFactor(
    log_mean=math.log(0.94), log_standard=0.03,
    suspect="the electrical power tag (span, unit) or the efficiency of the driver",
)  # fmt: skip
"""Before it is learned: 0.94 within 3 %, friction and motor of a machine near its full load."""


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Teaching:
    """Usable frames of one load step."""

    measured: Measured
    stages: tuple[str, ...]  # whose discharge temperatures are read
    balances: tuple[tuple[str, str], ...]  # neighbours that pass the same molar flow
    has_flow: bool
    has_power: bool
    condition: NDArray[np.intp]  # (frames,) which condition each frame belongs to
    root: Array  # lower triangular root of the covariance of all readings, conditions by channels

    @property
    def frames(self) -> int:
        return self.measured.frames

    @property
    def channels(self) -> int:
        return len(self.stages) + len(self.balances) + self.has_flow + self.has_power

    @property
    def readings(self) -> int:
        return int(self.root.shape[0])

    def differences(self, evaluation: Evaluation, log_power_factor: float) -> Array:
        """Measured less expected, (channels, frames): kelvins, then shares."""
        return _differences(self, evaluation, self.measured, log_power_factor)

    def farthest(self, differences: Array) -> tuple[str, float]:
        """The reading that lies farthest off on average, in words, and by how many uncertainties."""
        names = [f"discharge temperature of {stage}" for stage in self.stages]
        names += [f"balance of {a} and {b}" for a, b in self.balances]
        names += ["flow"] * self.has_flow + ["electrical power"] * self.has_power
        off = np.abs(self._means(differences)) / np.sqrt((self.root**2).sum(axis=1))
        worst = int(np.argmax(off))
        return names[worst % self.channels], float(off[worst])

    def whitened(self, differences: Array) -> Array:
        """The same as independent numbers in standard uncertainties: frames of a condition weigh as one."""
        return np.asarray(np.linalg.solve(self.root, self._means(differences)))

    def _means(self, differences: Array) -> Array:
        rows = [differences[:, self.condition == k].mean(axis=1) for k in range(self.condition.max() + 1)]
        return np.concatenate(rows)


def teach(
    unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, accuracy: InputAccuracy
) -> dict[int, Teaching]:
    """Sort frames by load step and weigh their readings.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    corrections : Corrections
        Corrections to weigh by; the weights hardly depend on them.
    measured : Measured
        The frames.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]

    Returns
    -------
    dict
        By load step, those with a usable frame.

    Notes
    -----
    A reading is compared with what the model expects from other readings: the covariance of these
    differences holds every transmitter on both sides, and the model's own error, stage by stage. What a
    transmitter reads wrong it reads wrong in every frame; the model errs anew only where a stage ratio or the
    speed is another by 15 %. So frames under one condition weigh as one reading, however many they are.

    References
    ----------
    JCGM 102:2011, 6.2 (covariance of several results of the same inputs).
    """
    found = {}
    step = measured.column("unit.load_step")
    for entry in unit.load_steps:
        rows = np.flatnonzero(step == entry.index)
        if rows.size:
            teaching = _teach_step(unit, gas, corrections, measured.like(measured.values[rows]), accuracy)
            if teaching is not None:
                found[entry.index] = teaching
    return found


def _teach_step(
    unit: Unit, gas: GasSurface, corrections: Corrections, measured: Measured, accuracy: InputAccuracy
) -> Teaching | None:
    evaluation = evaluate(unit, gas, corrections, measured)
    every = Teaching(
        measured=measured,
        stages=tuple(s.subject for s in unit.stages),
        balances=tuple((a.subject, b.subject) for a, b in zip(unit.stages, unit.stages[1:], strict=False)),
        has_flow=True, has_power=True, condition=np.zeros(measured.frames, np.intp), root=np.eye(1),
    )  # fmt: skip
    table = _differences(every, evaluation, measured, POWER_FACTOR.log_mean)
    there = np.isfinite(table).mean(axis=1) >= _MOSTLY
    if not there.any():
        return None
    stages, balances = len(every.stages), len(every.balances)
    usable = np.flatnonzero(np.isfinite(table[there]).all(axis=0))
    if usable.size == 0:
        return None
    kept = usable[np.unique(np.linspace(0, usable.size - 1, MOST_FRAMES).round().astype(np.intp))]
    shape = Teaching(
        measured=measured.like(measured.values[kept]),
        stages=tuple(s for s, yes in zip(every.stages, there[:stages], strict=True) if yes),
        balances=tuple(
            b for b, yes in zip(every.balances, there[stages : stages + balances], strict=True) if yes
        ),
        has_flow=bool(there[-2]), has_power=bool(there[-1]),
        condition=_conditions(unit, measured.like(measured.values[kept])), root=np.eye(1),
    )  # fmt: skip
    covariance = _covariance(unit, gas, corrections, shape, accuracy)
    return replace(shape, root=np.asarray(np.linalg.cholesky(covariance), np.float64))


def _conditions(unit: Unit, measured: Measured) -> NDArray[np.intp]:
    """Number frames by ratio of each stage and speed, counted from their means."""
    rows = [measured.column("unit.speed")]
    for stage in unit.stages:
        ps, pd = (measured.column(f"{stage.subject}.{side}_pressure") for side in ("suction", "discharge"))
        rows.append(pd / ps)
    logs = np.log(np.where(np.isfinite(np.stack(rows)), np.stack(rows), 1.0))
    places = np.floor((logs - logs.mean(axis=1, keepdims=True)) / _CONDITION + 0.5)
    _, condition = np.unique(places, axis=1, return_inverse=True)
    return np.asarray(condition.ravel(), np.intp)


def _differences(
    teaching: Teaching, evaluation: Evaluation, measured: Measured, log_power_factor: float
) -> Array:
    def value(name: str) -> Array:
        return evaluation.column(name).values

    def log(x: Array) -> Array:
        return np.log(np.where(x > 0, x, np.nan))

    rows = [value(f"{stage}.discharge_temperature_residual") for stage in teaching.stages]
    # what the later stage draws more than the earlier one delivers, read backwards: no tag stands between
    rows += [
        log(value(f"{a}.stage_capacity")) - log(value(f"{b}.stage_capacity")) for a, b in teaching.balances
    ]
    if teaching.has_flow:
        rows.append(log(measured.column("unit.flow")) - log(value("unit.capacity")))
    if teaching.has_power:
        electrical = log(measured.column("unit.electrical_power"))
        rows.append(log_power_factor + electrical - log(value("unit.power")))
    return np.stack(rows) if rows else np.zeros((0, measured.frames))


def _covariance(
    unit: Unit, gas: GasSurface, corrections: Corrections, teaching: Teaching, accuracy: InputAccuracy
) -> Array:
    """Of the mean differences: what each transmitter moves under all conditions, and the model under each."""
    sources = accuracy.sources(teaching.measured.names)
    places = range(teaching.condition.max() + 1)
    middles = np.stack([np.median(teaching.measured.values[teaching.condition == k], axis=0) for k in places])
    sheets = [source.moved(middles, sign) for source in sources for sign in (1.0, -1.0)]
    stacked = teaching.measured.like(np.concatenate(sheets or [middles]))
    found = _differences(teaching, evaluate(unit, gas, corrections, stacked), stacked, POWER_FACTOR.log_mean)
    found = found.reshape(teaching.channels, -1, len(places))
    parts = [((found[:, 2 * k] - found[:, 2 * k + 1]) / 2).T.ravel() for k in range(len(sources))]
    own = _model_parts(unit, teaching)
    for k in places:
        for row in own:
            part = np.zeros((len(places), teaching.channels))
            part[k] = row
            parts.append(part.ravel())
    table = np.stack(parts)
    return np.asarray((table[:, :, None] * table[:, None, :]).sum(axis=0))


def _model_parts(unit: Unit, teaching: Teaching) -> list[Array]:
    """Independent errors of the model under one condition, each as it moves the channels."""
    capacity, power = MODEL_ERRORS["capacity"].relative, MODEL_ERRORS["power"].relative
    parts = []
    for k in range(len(teaching.stages)):
        row = np.zeros(teaching.channels)
        row[k] = MODEL_ERRORS["discharge_temperature_residual"].absolute
        parts.append(row)
    first = len(teaching.stages)
    for stage in unit.stages:
        row = np.zeros(teaching.channels)
        for k, (a, b) in enumerate(teaching.balances):
            row[first + k] = capacity * ((stage.subject == a) - (stage.subject == b))
        if teaching.has_flow and stage is unit.stages[0]:
            row[first + len(teaching.balances)] = -capacity
        parts.append(row)
    if teaching.has_power:
        row = np.zeros(teaching.channels)
        row[-1] = power
        parts.append(row)
    return parts
