"""What flows through the agent: frozen values, one file."""

from collections.abc import Sequence
from dataclasses import dataclass
from enum import IntEnum, StrEnum

import numpy as np
from numpy.typing import NDArray


class Quality(IntEnum):
    """Why a stored number may or may not be believed; stored as one byte beside it.

    Numbers are never renumbered: old rows carry them. Everything above UNCERTAIN has no usable number.
    """

    GOOD = 0
    UNCERTAIN = 1  # the source says so; shown, not used for the higher alarms
    BAD = 2  # the source says so
    STALE = 3  # the last reading is older than the stale limit
    NEVER = 4  # nothing received yet
    OUT_OF_SPAN = 5  # outside the transmitter's span by more than 2 %
    SOURCE_LOST = 6  # the connection is down
    NOT_RUNNING = 7  # the machine stands: nothing to judge
    OUT_OF_MODEL = 8  # outside the range the model was built for
    INPUT_MISSING = 9  # an input it needs has no usable number
    UNKNOWN_WORD = 10  # a load-step word that the truth table does not hold
    NO_LIMIT = 11  # no limit entered: there is no margin to state
    NO_THROUGH_FLOW = 12  # the cylinder passes too little gas to judge its temperature

    @property
    def usable(self) -> bool:
        return self <= Quality.UNCERTAIN

    @property
    def words(self) -> str:
        return _QUALITY_WORDS[self]


_QUALITY_WORDS = {
    Quality.GOOD: "good",
    Quality.UNCERTAIN: "uncertain at the source",
    Quality.BAD: "bad at the source",
    Quality.STALE: "stale",
    Quality.NEVER: "nothing received yet",
    Quality.OUT_OF_SPAN: "outside its span",
    Quality.SOURCE_LOST: "source lost",
    Quality.NOT_RUNNING: "machine not running",
    Quality.OUT_OF_MODEL: "outside the range of the model",
    Quality.INPUT_MISSING: "an input is missing",
    Quality.UNKNOWN_WORD: "unknown load step",
    Quality.NO_LIMIT: "no limit entered",
    Quality.NO_THROUGH_FLOW: "no through-flow",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Receipt:
    """What a source needs to acknowledge a message once it is committed."""

    source: str
    connection: int  # counts connections: a receipt of an old one is worthless on a new one
    message: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """One value of one tag, as the plant sent it (plant unit, not SI).

    ``value`` is None where the source says bad and gives none. ``word`` carries text tags (load step).
    """

    source: str
    address: str  # topic or node id, as the site file names it
    source_time: float  # unix seconds, UTC
    received_time: float
    value: float | None
    word: str | None
    quality: Quality
    receipt: Receipt | None = None


class LinkState(StrEnum):
    CONNECTING = "connecting"
    UP = "up"
    DOWN = "down"


@dataclass(frozen=True, slots=True, kw_only=True)
class SourceStatus:
    """How a source is doing; counters run since the agent started."""

    source: str
    state: LinkState
    since: float
    detail: str  # last cause, in words
    received: int
    rejected: int  # payloads that could not become a reading
    last_rejection: str  # topic and reason, "" if none
    dropped: int  # readings lost to a full queue
    connections: int
    clock_offset_s: float  # received minus source time, smoothed; nan if unknown


class RunState(IntEnum):
    """Stored as a series of its own; numbers are never renumbered."""

    NOT_KNOWN = 0
    STOPPED = 1
    STARTING = 2  # running, not yet settled
    RUNNING = 3

    @property
    def words(self) -> str:
        return {0: "state not known", 1: "stopped", 2: "starting", 3: "running"}[int(self)]


@dataclass(frozen=True, slots=True, kw_only=True)
class Frame:
    """All inputs of one unit at one tick, in SI and absolute, in the order of the unit's input list.

    ``values`` (n,) float32 with NaN where unusable; ``quality`` (n,) uint8; ``ages`` (n,) float32, seconds
    from source time to tick, NaN where none was ever received. A load step is its place in the truth table.
    """

    unit: str
    tick: int
    values: NDArray[np.float32]
    quality: NDArray[np.uint8]
    ages: NDArray[np.float32]


@dataclass(frozen=True, slots=True, kw_only=True)
class DerivedRow:
    """All results of one unit at one tick, in the order of its result list (SI, NaN where there is none)."""

    unit: str
    tick: int
    configuration: int  # which stored configuration computed it
    values: NDArray[np.float32]
    quality: NDArray[np.uint8]


@dataclass(frozen=True, slots=True, kw_only=True)
class SeriesDef:
    """One column of a unit's rows. ``index`` is append-only and never reused."""

    index: int
    name: str
    unit: str


class Priority(IntEnum):
    """Two of the standard's priorities are in use; a Notice has no sound and is not an alarm."""

    NOTICE = 0
    LOW = 1
    MEDIUM = 2
    HIGH = 3

    @property
    def words(self) -> str:
        return self.name.capitalize()


class AlarmState(StrEnum):
    """States of IEC 62682, the first four."""

    NORMAL = "normal"
    UNACKNOWLEDGED = "unacknowledged"
    ACKNOWLEDGED = "acknowledged"
    RETURNED = "returned, unacknowledged"


class EventKind(StrEnum):
    RAISED = "raised"
    CLEARED = "cleared"
    ACKNOWLEDGED = "acknowledged"
    BLIND = "not evaluated"
    SIGHTED = "evaluated again"
    REFUSED = "request refused"


@dataclass(frozen=True, slots=True, kw_only=True)
class AlarmEvent:
    """One line of the journal. (unit, alarm, tick, kind) is unique."""

    unit: str
    alarm: str  # key of the catalogue
    tick: int
    kind: EventKind
    state: AlarmState  # after the event
    text: str  # what happened, with numbers, in words an operator can read aloud
    value: float = float("nan")  # SI
    limit: float = float("nan")  # SI
    subject: str = ""  # e.g. "cylinder2", the worst one
    actor: str = ""
    reason: str = ""
    request: str = ""  # id of the request it answers


@dataclass(frozen=True, slots=True, kw_only=True)
class Request:
    """What a person asked for on a page; only the agent turns it into an event."""

    id: str
    at: float
    unit: str
    alarm: str
    kind: EventKind
    actor: str
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Commit:
    """All that one tick writes to the series store, in one transaction."""

    frames: Sequence[Frame]
    derived: Sequence[DerivedRow]
    sources: Sequence[SourceStatus]
