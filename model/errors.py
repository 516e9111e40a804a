"""Errors of the model.

ModelError
├── OutOfRange          a value lies outside the range a formula was made for
├── CompositionError    a gas that cannot be tabulated as entered
├── GasBuildError       the property library refused a state of the domain
└── NotEvaluatedError   a frame that cannot be evaluated, with the verdict
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
