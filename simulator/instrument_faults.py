"""What can be wrong between a true value and the agent: in the instrument, or on the link of its source."""

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray


class InstrumentFaultKind(StrEnum):
    """What an instrument does wrong."""

    BIAS = "bias"  # reads too high by the size; ramped it is a drift
    STUCK = "stuck"  # repeats its last reading exactly
    SPIKES = "spikes"  # now and then one or two readings leap by the size
    WRONG_SPAN = "wrong span"  # the distance of a reading from the low end of the span times the size
    BAD_QUALITY = "bad quality"  # the sender says bad, and may give no value
    UNCERTAIN_QUALITY = "uncertain quality"  # the sender says uncertain beside the value


@dataclass(frozen=True, slots=True, kw_only=True)
class InstrumentFault:
    """One fault of one instrument at one instant.

    ``size`` is a difference in SI (bias, spikes), a factor (wrong span) or 1.0 (the others). A size of 0, for
    the wrong span a factor of 1, means that the fault is absent.
    """

    kind: InstrumentFaultKind
    size: float

    @property
    def present(self) -> bool:
        return self.size != (1.0 if self.kind is InstrumentFaultKind.WRONG_SPAN else 0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class FaultTrack:
    """One fault of one instrument over a row of instants; ``sizes`` (n,) as in `InstrumentFault`."""

    kind: InstrumentFaultKind
    sizes: NDArray[np.float64]


class LinkFaultKind(StrEnum):
    """What the link of a source does wrong."""

    LOST = "lost"
    LATE = "late"
    OUT_OF_ORDER = "out of order"
    SKEWED = "skewed"


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkState:
    """The link of one source at one instant; the default is a link without fault."""

    lost: bool = False
    buffered: bool = False  # what a lost link does not carry is kept and sent afterwards
    delay_s: float = 0.0  # everything arrives so much later
    shuffled: bool = False  # samples of neighbouring seconds change places
    skew_s: float = 0.0  # the source's clock is ahead by so much; negative: behind


class SampleQuality(StrEnum):
    """What a sender says of its value."""

    GOOD = "good"
    UNCERTAIN = "uncertain"
    BAD = "bad"
