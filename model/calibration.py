"""What a healthy machine teaches: the few corrections of a unit, fitted once, then frozen.

A calibration is fitted on steady frames of a machine somebody calls healthy, and never changes by itself: a
leak that grows for days cannot become the new normal. While a finding is open the calibration is held, and a
new fit is refused.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.corrections import Corrections
from model.errors import (
    CalibrationHeldError,
    CalibrationMisfitError,
    CalibrationRefusedError,
    TooFewFramesError,
)
from model.evaluate import evaluate
from model.machine import Unit
from model.measured import Measured
from model.surface import GasSurface
from model.teaching import POWER_FACTOR, Teaching, teach
from model.uncertainty import InputAccuracy

Array = NDArray[np.float64]

ENOUGH_FRAMES: Final = 30
"""Steady frames a load step needs before it teaches anything."""
FARTHEST: Final = 3.0
"""Prior standard deviations beyond which a number of the nameplate is likely wrong."""
_ITERATIONS: Final = 30
_SETTLED: Final = 1e-5  # step of the fit, in prior standard deviations
_DIFFERENCE: Final = 0.05  # step of the differences, in the same


@dataclass(frozen=True, slots=True, kw_only=True)
class Prior:
    """What is believed of a correction before anything was measured."""

    mean: float
    standard: float
    lowest: float  # below it the formulas do not hold
    suspect: str  # what of the nameplate is then likely wrong, if a fit leaves it


_NOMINAL: Final = Corrections.nominal()

PRIORS: Final[Mapping[str, Prior]] = MappingProxyType(
    {
        "preheat": Prior(
            mean=_NOMINAL.preheat, standard=0.02, lowest=0.0,
            suspect="the thermowell (place and depth) or the gas composition",
        ),
        "valve_loss": Prior(
            mean=_NOMINAL.valve_loss, standard=0.3, lowest=0.05, suspect="the effective valve area"
        ),
        "heat_loss": Prior(
            mean=_NOMINAL.heat_loss, standard=0.02, lowest=-0.5,
            suspect="the thermowell (place and depth) or the gas composition",
        ),
        "volumetric_deficit": Prior(
            mean=_NOMINAL.volumetric_deficit, standard=0.02, lowest=-0.5,
            suspect="the clearance of the ends, or the flow meter",
        ),
        "valve_full_lift": Prior(
            mean=_NOMINAL.valve_full_lift, standard=0.01, lowest=_NOMINAL.valve_preload + 5e-4,
            suspect="the springs or the lift of the valves",
        ),
    }
)  # fmt: skip
"""The corrections that are learned, one set a load step. The exponents stay at one: they cannot be told from
the others by slow tags, and neither can the valve losses of suction and discharge."""

CORRECTIONS: Final = tuple(PRIORS)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class Calibration:
    """A fit, frozen. Arrays are in the order of `CORRECTIONS`."""

    version: int
    corrections: Mapping[int, Corrections]  # by load step
    covariance: Mapping[int, Array]  # (corrections, corrections) by load step
    frames: Mapping[int, int]  # how many taught each load step
    power_factor: float | None  # indicated over electrical power; None where there is no such tag
    power_factor_standard: float | None
    misfit: float  # chi-square of the readings
    readings: int  # how many numbers it is the sum of
    first: float  # period of the frames, unix seconds
    last: float
    who: str
    when: float
    why: str
    held_by: tuple[str, ...] = ()  # open findings

    def step(self, load_step: int) -> int | None:
        """Which load step speaks for this one: itself, else the one with most frames, if any."""
        if load_step in self.corrections:
            return load_step
        return max(self.frames, key=lambda s: (self.frames[s], -s), default=None)

    def corrections_of(self, load_step: int) -> Corrections:
        """Corrections of a load step, those of the best-known one where it was never seen."""
        found = self.step(load_step)
        return _NOMINAL if found is None else self.corrections[found]

    def covariance_of(self, load_step: int) -> Array:
        """Their covariance; that of a load step never seen is wider by the priors."""
        found = self.step(load_step)
        wide = np.diag([PRIORS[name].standard ** 2 for name in CORRECTIONS])
        if found is None:
            return wide
        return self.covariance[found] if found == load_step else self.covariance[found] + wide

    def held(self, finding: str) -> "Calibration":
        """The same, held while a finding is open."""
        return self if finding in self.held_by else replace(self, held_by=(*self.held_by, finding))

    def released(self, finding: str) -> "Calibration":
        """The same, once a finding is closed."""
        return replace(self, held_by=tuple(f for f in self.held_by if f != finding))


def fit_calibration(
    unit: Unit,
    gas: GasSurface,
    measured: Measured,
    accuracy: InputAccuracy,
    *,
    times: Sequence[float],
    who: str,
    when: float,
    why: str,
    previous: Calibration | None = None,
    enough_frames: int = ENOUGH_FRAMES,
) -> Calibration:
    """Fit the corrections of a unit on healthy steady frames.

    Parameters
    ----------
    unit : Unit
        The nameplate.
    gas : GasSurface
        Its gas.
    measured : Measured
        The frames, of any load steps.
    accuracy : InputAccuracy
        Standard uncertainty of each input. [SI]
    times : sequence of float
        When each frame was. [unix s]
    who : str
        Who asked for it.
    when : float
        When. [unix s]
    why : str
        Why, in words.
    previous : Calibration or None
        The one in force.
    enough_frames : int
        Usable frames without which a load step teaches nothing. [-]

    Returns
    -------
    Calibration
        Frozen, its version one above the previous.

    Raises
    ------
    CalibrationHeldError
        A finding is open on the unit.
    TooFewFramesError
        No load step has enough usable frames.
    CalibrationRefusedError
        A correction left its prior by more than three standard deviations.
    CalibrationMisfitError
        The readings contradict each other: one time in a thousand by chance.

    Notes
    -----
    Maximum of the posterior density by Gauss-Newton with Levenberg's damping; covariance by Laplace's
    approximation. Taught by discharge temperatures, by flow and electrical power where there are such tags
    (power through one factor a unit), and by the balance between stages. Frames under one condition
    weigh as one reading (`model.teaching.teach`).

    References
    ----------
    A. Gelman et al., *Bayesian Data Analysis*, 3rd ed., 4.1 (normal approximation); D. W. Marquardt,
    *J. SIAM* 11 (1963) 431.
    """
    if previous is not None and previous.held_by:
        raise CalibrationHeldError(unit.id, previous.held_by)
    teachings = teach(unit, gas, _NOMINAL, measured, accuracy)
    teachings = {step: t for step, t in teachings.items() if t.frames >= enough_frames}
    if not teachings:
        raise TooFewFramesError(unit.id, enough_frames)
    steps = sorted(teachings)
    has_power = any(t.has_power for t in teachings.values())
    names = [(s, name) for s in steps for name in CORRECTIONS]
    mean = np.array([PRIORS[name].mean for _, name in names] + [POWER_FACTOR.log_mean] * has_power)
    scale = np.array([PRIORS[name].standard for _, name in names] + [POWER_FACTOR.log_standard] * has_power)
    lowest = np.array([PRIORS[name].lowest for _, name in names] + [-np.inf] * has_power)

    def readings(theta: Array) -> Array:
        """Whitened differences between measured and expected."""
        factor = float(theta[-1]) if has_power else POWER_FACTOR.log_mean
        parts = []
        for place, step in enumerate(steps):
            block = theta[place * len(CORRECTIONS) : (place + 1) * len(CORRECTIONS)]
            teaching = teachings[step]
            evaluation = evaluate(unit, gas, corrections_from(block), teaching.measured)
            parts.append(teaching.whitened(teaching.differences(evaluation, factor)).ravel())
        return np.concatenate(parts)

    theta, curvature = _maximum(readings, mean, scale, lowest)
    covariance: Array = np.asarray(np.linalg.inv(curvature) * np.outer(scale, scale), np.float64)
    _refuse_far(unit, names, theta, mean, scale, has_power=has_power)
    misfit = _refuse_misfit(unit, gas, teachings, theta, has_power=has_power)
    return Calibration(
        version=1 if previous is None else previous.version + 1,
        corrections=MappingProxyType(
            {s: corrections_from(theta[_block(k)]) for k, s in enumerate(steps)}
        ),
        covariance=MappingProxyType({s: covariance[_block(k), _block(k)] for k, s in enumerate(steps)}),
        frames=MappingProxyType({s: teachings[s].frames for s in steps}),
        power_factor=float(np.exp(theta[-1])) if has_power else None,
        power_factor_standard=(
            float(np.exp(theta[-1]) * np.sqrt(covariance[-1, -1])) if has_power else None
        ),
        misfit=misfit,
        readings=sum(t.readings for t in teachings.values()),
        first=min(times), last=max(times), who=who, when=when, why=why,
    )  # fmt: skip


def corrections_from(values: Sequence[float] | Array) -> Corrections:
    """Corrections from numbers in the order of `CORRECTIONS`, never below where the formulas hold.

    Parameters
    ----------
    values : sequence of float
        One number a correction. [-]

    Returns
    -------
    Corrections
        With all others nominal.

    References
    ----------
    `PRIORS`.
    """
    pairs = zip(CORRECTIONS, values, strict=True)
    return replace(_NOMINAL, **{name: max(float(v), PRIORS[name].lowest) for name, v in pairs})


def _block(place: int) -> slice:
    return slice(place * len(CORRECTIONS), (place + 1) * len(CORRECTIONS))


def _maximum(
    readings: Callable[[Array], Array], mean: Array, scale: Array, lowest: Array
) -> tuple[Array, Array]:
    """The most probable numbers, and the curvature there in units of the priors."""
    floor = (lowest - mean) / scale
    z = np.zeros(mean.size)
    r = readings(mean)
    cost, damping = float((r**2).sum()), 1e-3
    slopes = _slopes(readings, mean, scale, z, r)
    for _ in range(_ITERATIONS):
        curvature = slopes.T @ slopes + np.eye(z.size)
        gradient = slopes.T @ r + z
        step = -np.linalg.solve(curvature + damping * np.diag(np.diagonal(curvature)), gradient)
        trial = np.maximum(z + step, floor)
        found = readings(mean + scale * trial)
        better = float((found**2).sum() + (trial**2).sum())
        if better <= cost:
            settled = float(np.abs(trial - z).max()) < _SETTLED
            z, r, cost, damping = trial, found, better, damping / 10
            slopes = _slopes(readings, mean, scale, z, r)
            if settled:
                break
        elif damping > 1e8 or float(np.abs(step).max()) < _SETTLED:
            break
        else:
            damping *= 10
    return mean + scale * z, slopes.T @ slopes + np.eye(z.size)


def _slopes(readings: Callable[[Array], Array], mean: Array, scale: Array, z: Array, here: Array) -> Array:
    columns = []
    for k in range(z.size):
        moved = z.copy()
        moved[k] += _DIFFERENCE
        columns.append((readings(mean + scale * moved) - here) / _DIFFERENCE)
    return np.stack(columns, axis=1)


def _refuse_far(
    unit: Unit, names: Sequence[tuple[int, str]], theta: Array, mean: Array, scale: Array, *, has_power: bool
) -> None:
    far = np.abs(theta - mean) / scale
    worst = int(np.argmax(far))
    if far[worst] <= FARTHEST:
        return
    if has_power and worst == theta.size - 1:
        raise CalibrationRefusedError(
            unit.id, "power factor", float(np.exp(theta[worst])), float(far[worst]), POWER_FACTOR.suspect
        )
    step, name = names[worst]
    words = next((s.word for s in unit.load_steps if s.index == step), str(step))
    raise CalibrationRefusedError(
        unit.id, f"{name} of load step {words}", float(theta[worst]), float(far[worst]), PRIORS[name].suspect
    )


def _refuse_misfit(
    unit: Unit, gas: GasSurface, teachings: Mapping[int, Teaching], theta: Array, *, has_power: bool
) -> float:
    """Chi-square of the readings, if it is one that healthy readings may have."""
    factor = float(theta[-1]) if has_power else POWER_FACTOR.log_mean
    misfit, readings, worst, farthest = 0.0, 0, "", 0.0
    for place, step in enumerate(sorted(teachings)):
        teaching = teachings[step]
        evaluation = evaluate(unit, gas, corrections_from(theta[_block(place)]), teaching.measured)
        differences = teaching.differences(evaluation, factor)
        misfit += float((teaching.whitened(differences) ** 2).sum())
        readings += teaching.readings
        name, sigmas = teaching.farthest(differences)
        if sigmas > farthest:
            worst, farthest = name, sigmas
    # Wilson and Hilferty's approximation of the quantile that one in a thousand exceeds
    spread = 2 / (9 * readings)
    if misfit > readings * (1 - spread + 3.09 * spread**0.5) ** 3:
        raise CalibrationMisfitError(unit.id, misfit, readings, worst)
    return misfit


__all__ = [
    "CORRECTIONS", "PRIORS", "Calibration", "Prior", "Teaching", "corrections_from", "fit_calibration",
]  # fmt: skip
