"""Errors of the model.

ModelError
├── OutOfRange          a value lies outside the range a formula was made for
├── CompositionError    a gas that cannot be tabulated as entered
├── GasBuildError       the property library refused a state of the domain
├── NotEvaluatedError   a frame that cannot be evaluated, with the verdict
├── CalibrationHeldError      a fit was asked for while a finding is open
├── CalibrationRefusedError   a fit that blames the machine for what the nameplate has wrong
├── CalibrationMisfitError    readings that no set of corrections explains
└── TooFewFramesError         a fit on too little
"""

from model.verdicts import Verdict


class ModelError(ValueError):
    """Anything the model refuses."""


class OutOfRange(ModelError):  # noqa: N818 - says what is wrong, not that something is
    """A value lies outside the range a formula was made for."""

    def __init__(self, name: str, value: float, low: float, high: float) -> None:
        super().__init__(f"{name} = {value:g} is not in {low:g} to {high:g}")
        self.name = name
        self.value = value
        self.low = low
        self.high = high


class CompositionError(ModelError):
    """A gas that cannot be tabulated as entered."""


class GasBuildError(ModelError):
    """The property library refused a state of the domain."""

    def __init__(self, temperature_k: float, pressure_pa: float, cause: str) -> None:
        super().__init__(f"no gas properties at {temperature_k:.2f} K and {pressure_pa:.0f} Pa: {cause}")
        self.temperature_k = temperature_k
        self.pressure_pa = pressure_pa
        self.cause = cause


class NotEvaluatedError(ModelError):
    """A frame that cannot be evaluated."""

    def __init__(self, verdict: Verdict) -> None:
        super().__init__(f"not evaluated: {verdict.name.lower().replace('_', ' ')}")
        self.verdict = verdict


class CalibrationHeldError(ModelError):
    """A fit was asked for while a finding is open."""

    def __init__(self, unit: str, findings: tuple[str, ...]) -> None:
        super().__init__(f"{unit}: no calibration while a finding is open: {', '.join(findings)}")
        self.unit = unit
        self.findings = findings


class CalibrationRefusedError(ModelError):
    """A fit that would blame the machine for what the nameplate has wrong."""

    def __init__(self, unit: str, correction: str, value: float, sigmas: float, suspect: str) -> None:
        super().__init__(
            f"{unit}: calibration refused: {correction} would be {value:.4g}, {sigmas:.1f} standard"
            f" deviations from what such machines have; check {suspect}"
        )
        self.unit = unit
        self.correction = correction
        self.value = value
        self.sigmas = sigmas
        self.suspect = suspect


class CalibrationMisfitError(ModelError):
    """Readings that no set of corrections explains: a fault, or a wrong instrument."""

    def __init__(self, unit: str, misfit: float, readings: int, worst: str) -> None:
        super().__init__(
            f"{unit}: calibration refused: its readings contradict each other (chi-square {misfit:.0f} for"
            f" {readings} numbers), most of all the {worst}; the machine may not be healthy, or an instrument"
            " is wrong"
        )
        self.unit = unit
        self.misfit = misfit
        self.readings = readings
        self.worst = worst


class TooFewFramesError(ModelError):
    """A fit on too little."""

    def __init__(self, unit: str, needed: int) -> None:
        super().__init__(f"{unit}: no load step has {needed} usable steady frames")
        self.unit = unit
        self.needed = needed
