"""What is known of the edge nodes of a Sparkplug group: who lives, which name an alias stands for.

Pure: messages in, readings and refusals out; no clock, no connection.

A birth names every metric; data says no more than the alias. So without an unbroken row of messages since
the birth no value has a name, and the agent never asks for another birth. Until one comes, the inputs are
bad: each that was told something gets a *mark*, a bad reading of our own.

Order: a mark bears the agent's time, or a moment after the input's newest reading if the plant's clock runs
ahead. An input sent on change takes the time of the message that says what holds now, and never an earlier
one than it had: the sequence numbers vouch for the order, the clocks do not.
"""

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum
from typing import Final

from agent.acquisition.rejection import SIMULATED, Rejection
from agent.acquisition.sparkplug_metric import is_simulated, reading_from, seconds, whole_number
from agent.records import Quality, Reading
from agent.siteplan.plan import Input
from agent.sparkplug.wire import BDSEQ, SEQUENCE, MessageType, Metric, Payload, Topic

BIRTH_GRACE_S: Final = 5.0  # after its node's birth a device has this long for its own
STEP_S: Final = 0.005  # tells two readings of one input apart; more than the rounding of a stored age

Subject = tuple[str, str, str]  # edge node, device ("" for the node itself), metric


class NodeState(StrEnum):
    UNKNOWN = "no birth since we listen"
    ALIVE = "alive"
    GAP = "a message is missing, waits for its next birth"
    DEAD = "dead"


@dataclass(slots=True, kw_only=True)
class _Node:
    state: NodeState = NodeState.UNKNOWN
    bdseq: int | None = None
    sequence: int = 0  # of its last message
    born_at: float = 0.0  # received time of its last birth
    devices: set[str] = field(default_factory=set)  # those born since, "" for the node itself
    types: dict[tuple[str, str], int] = field(default_factory=dict)  # (device, metric)
    names: dict[int, tuple[str, str]] = field(default_factory=dict)  # alias -> (device, metric)
    simulated: set[tuple[str, str]] = field(default_factory=set)  # those whose birth bears the mark


@dataclass(slots=True, kw_only=True)
class Outcome:
    """What came of one message."""

    readings: list[Reading] = field(default_factory=list)  # the plant's
    marks: list[Reading] = field(default_factory=list)  # our own
    refused: list[tuple[str, str]] = field(default_factory=list)  # what, and why
    node_born: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class _Step:
    """One readable message in hand."""

    topic: Topic
    node: _Node
    payload: Payload
    now: float
    outcome: Outcome
    birth: bool

    @property
    def stated_at(self) -> float | None:
        return seconds(self.payload.timestamp) if self.payload.HasField("timestamp") else None

    def refuse(self, reason: str, metric: str | None = None) -> None:
        what = str(self.topic) if metric is None else f"{self.topic.node}/{self.topic.device}/{metric}"
        self.outcome.refused.append((what, reason))


def subject_of(address: str) -> Subject:
    """The parts of an address of the site file.

    Raises
    ------
    ValueError
        It is not "<edge node>/<device>/<metric>".
    """
    parts = address.split("/", 2)  # a metric's name may hold slashes
    if len(parts) != 3 or not parts[0] or not parts[2]:
        raise ValueError(f"{address!r} is not <edge node>/<device>/<metric>")
    return parts[0], parts[1], parts[2]


class EdgeNodes:
    """All edge nodes that inputs are read from; others are passed over."""

    def __init__(self, source_name: str, inputs: Sequence[Input], *, takes_simulated: bool = False) -> None:
        self._source_name = source_name
        self._takes_simulated = takes_simulated
        self._inputs: Mapping[Subject, Input] = {subject_of(i.address): i for i in inputs}
        self._newest: dict[str, float] = {}  # address -> time of the newest reading or mark
        self.reset()

    def reset(self) -> None:
        self._nodes = {node: _Node() for node, _, _ in self._inputs}

    def states(self) -> Mapping[str, NodeState]:
        return {name: node.state for name, node in self._nodes.items()}

    def begin(self, now: float) -> list[Reading]:
        """A new connection: what was sent meanwhile is lost, so nothing is known. Returns the marks."""
        self.reset()
        return [m for node in self._nodes for m in self._marks(node, now)]

    def overdue(self, now: float) -> list[Reading]:
        """Marks for devices that did not follow the birth of their node."""
        return [
            mark
            for name, node in self._nodes.items()
            if node.state is NodeState.ALIVE and now >= node.born_at + BIRTH_GRACE_S
            for device in sorted({d for n, d, _ in self._inputs if n == name} - node.devices)
            for mark in self._marks(name, now, device)
        ]

    def accept(self, topic: Topic, payload: Payload | None, now: float) -> Outcome:
        """Take in one message; ``payload`` is None if it could not be read."""
        outcome = Outcome()
        node = self._nodes.get(topic.node)
        if node is None or topic.type in (MessageType.NODE_COMMAND, MessageType.DEVICE_COMMAND):
            return outcome
        if payload is None:
            # If it was one of the row, the next message shows the gap.
            outcome.refused.append((str(topic), "the payload is not a Sparkplug payload"))
            return outcome
        birth = topic.type in (MessageType.NODE_BIRTH, MessageType.DEVICE_BIRTH)
        step = _Step(topic=topic, node=node, payload=payload, now=now, outcome=outcome, birth=birth)
        if topic.type is MessageType.NODE_BIRTH:
            self._node_birth(step)
        elif topic.type is MessageType.NODE_DEATH:
            self._node_death(step)
        elif self._in_order(step):
            self._follow(step)
        return outcome

    # births and deaths

    def _node_birth(self, step: _Step) -> None:
        node, payload = step.node, step.payload
        bdseq = _bdseq(payload)
        if bdseq is None or not payload.HasField("seq") or payload.seq >= SEQUENCE:
            step.refuse("a birth without bdSeq or sequence number")
            return
        node.state = NodeState.ALIVE
        node.bdseq, node.sequence, node.born_at = bdseq, payload.seq, step.now
        node.devices, node.types, node.names, node.simulated = set(), {}, {}, set()
        step.outcome.node_born = True
        self._born(step)

    def _node_death(self, step: _Step) -> None:
        if step.node.state in (NodeState.UNKNOWN, NodeState.DEAD):
            return
        if _bdseq(step.payload) != step.node.bdseq:
            step.refuse("the death of another session (bdSeq)")
            return
        step.node.state = NodeState.DEAD
        step.outcome.marks += self._marks(step.topic.node, step.now)

    def _in_order(self, step: _Step) -> bool:
        """Whether a message follows the one before it; else the node waits for its next birth."""
        node = step.node
        if node.state is not NodeState.ALIVE:
            step.refuse(f"edge node {step.topic.node}: {node.state.value}")
            return False
        expected = (node.sequence + 1) % SEQUENCE
        if not step.payload.HasField("seq") or step.payload.seq != expected:
            node.state = NodeState.GAP
            step.refuse("a gap in the sequence numbers")
            step.outcome.marks += self._marks(step.topic.node, step.now)
            return False
        node.sequence = expected
        return True

    def _follow(self, step: _Step) -> None:
        topic, node = step.topic, step.node
        if topic.type is MessageType.DEVICE_BIRTH:
            self._born(step)
        elif topic.device not in node.devices:
            step.refuse("no birth of this device")
        elif topic.type is MessageType.DEVICE_DEATH:
            node.devices.discard(topic.device)
            step.outcome.marks += self._marks(topic.node, step.now, topic.device)
        else:
            for metric in step.payload.metrics:
                name = _name(step, metric)
                if name is None:
                    step.refuse("a metric that its birth does not name")
                else:
                    self._tell(step, name, metric)

    def _born(self, step: _Step) -> None:
        """The birth of a device, or of the node itself."""
        node, device = step.node, step.topic.device
        node.devices.add(device)
        node.types = {key: kind for key, kind in node.types.items() if key[0] != device}
        node.names = {alias: key for alias, key in node.names.items() if key[0] != device}
        node.simulated = {key for key in node.simulated if key[0] != device}
        for metric in step.payload.metrics:
            key = (device, metric.name)
            if not metric.HasField("name") or not metric.HasField("datatype"):
                step.refuse("a metric of a birth without name or datatype")
            elif metric.HasField("alias") and node.names.setdefault(metric.alias, key) != key:
                step.refuse("its alias is taken by another metric", metric.name)
            else:
                node.types[key] = metric.datatype
                if is_simulated(metric):
                    node.simulated.add(key)
                self._tell(step, metric.name, metric)
        gone = {m for n, d, m in self._inputs if (n, d) == (step.topic.node, device)}
        gone -= {m for d, m in node.types if d == device}
        step.outcome.marks += self._marks(step.topic.node, step.now, device, gone)

    # values

    def _tell(self, step: _Step, name: str, metric: Metric) -> None:
        """One metric of a message, if it is somebody's input."""
        entry = self._inputs.get((step.topic.node, step.topic.device, name))
        if entry is None or metric.is_transient:
            return
        key = (step.topic.device, name)
        if not self._takes_simulated and (key in step.node.simulated or is_simulated(metric)):
            step.refuse(SIMULATED, name)
            if not metric.is_historical:  # what was known before is no longer said by a real plant
                step.outcome.marks += self._marks(step.topic.node, step.now, step.topic.device, [name])
            return
        kind = step.node.types[key]
        if metric.HasField("datatype") and metric.datatype != kind:
            step.refuse("another datatype than its birth says", name)
            return
        told = reading_from(
            metric, kind, entry, self._source_name, payload_time=step.stated_at, received_time=step.now
        )
        if isinstance(told, Rejection):
            step.refuse(told.reason, name)
        elif metric.is_historical:
            step.outcome.readings.append(told)
        else:
            step.outcome.readings.append(self._current(entry, told, step.stated_at if step.birth else None))

    def _current(self, entry: Input, reading: Reading, stated_at: float | None) -> Reading:
        """A reading of what holds now, in its place in the row."""
        at = reading.source_time
        newest = self._newest.get(entry.address)
        if entry.on_change:
            if stated_at is not None and stated_at <= reading.received_time:
                at = max(at, stated_at)
            if newest is not None and at <= newest:
                at = newest + STEP_S
        self._newest[entry.address] = at if newest is None else max(at, newest)
        return replace(reading, source_time=at)

    def _marks(
        self, node: str, now: float, device: str | None = None, metrics: Iterable[str] | None = None
    ) -> list[Reading]:
        """Bad readings for all inputs of a node, of one device, or those of its metrics that are named."""
        wanted = None if metrics is None else set(metrics)
        marks = []
        for (n, d, m), entry in self._inputs.items():
            if n != node or device not in (None, d) or (wanted is not None and m not in wanted):
                continue
            newest = self._newest.get(entry.address)
            if newest is None:
                continue  # nothing was ever said, and nothing is what its frame shows
            at = max(now, newest + STEP_S)
            self._newest[entry.address] = at
            marks.append(
                Reading(
                    source=self._source_name, address=entry.address, source_time=at, received_time=now,
                    value=None, word=None, quality=Quality.BAD,
                )
            )  # fmt: skip
        return marks


def _name(step: _Step, metric: Metric) -> str | None:
    """The name of a metric of a data message; None if the birth does not tell it."""
    if metric.HasField("name"):
        return metric.name if (step.topic.device, metric.name) in step.node.types else None
    if not metric.HasField("alias"):
        return None
    device, name = step.node.names.get(metric.alias, (None, None))
    return name if device == step.topic.device else None


def _bdseq(payload: Payload) -> int | None:
    found = [whole_number(m) for m in payload.metrics if m.name == BDSEQ]
    return found[0] if len(found) == 1 else None
