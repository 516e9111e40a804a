"""Plant tags over MQTT Sparkplug B 3.0. Subscribes, no more: it never asks for a birth.

Data is sent at most once (QoS 0), so there is nothing to acknowledge and no session worth keeping: what was
sent while the agent was away is gone. After each connection the inputs wait for the birth of their edge node.
It comes when the node connects, when another application asks for it, or by the node's own timer; a plant
whose nodes do none of these needs one of them arranged.
"""

import asyncio
from collections.abc import Iterable, Sequence
from typing import Final

from agent.acquisition.mqtt_link import Link, Message, MqttSource
from agent.acquisition.sparkplug_nodes import BIRTH_GRACE_S, EdgeNodes, NodeState, Outcome
from agent.clock import Clock
from agent.records import Receipt
from agent.siteplan.plan import Input, Source
from agent.sparkplug.wire import NAMESPACE, Payload, Topic, parsed, topic_of

LARGEST_PAYLOAD: Final = 1024 * 1024  # the birth of a large node

_Parcel = tuple[Message, Topic | None, Payload | None]


class MqttSparkplugSource(MqttSource[_Parcel]):
    def __init__(self, source: Source, inputs: Sequence[Input], clock: Clock) -> None:
        if not source.group or set(source.group) & set("+/#"):
            raise ValueError(f"source {source.name}: {source.group!r} is no Sparkplug group")
        super().__init__(source, [f"{NAMESPACE}/{source.group}/#"], clock, session_expiry_s=0)
        self._nodes = EdgeNodes(source.name, inputs, takes_simulated=source.takes_simulated)
        self._on_change = frozenset(i.address for i in inputs if i.on_change)

    def acknowledge(self, receipts: Iterable[Receipt]) -> None:
        """Nothing to do: readings carry no receipts."""

    def _notes(self) -> tuple[str, ...]:
        states = self._nodes.states().items()
        return tuple(f"edge node {n}: {s.value}" for n, s in states if s is not NodeState.ALIVE)

    def _begun(self) -> None:
        for mark in self._nodes.begin(self._clock.now()):
            self._queue.put(mark)

    def _read(self, message: Message) -> _Parcel:
        usable = len(message.payload) <= LARGEST_PAYLOAD
        return message, topic_of(message.topic), parsed(message.payload) if usable else None

    def _take(self, link: Link, number: int | None, parcel: _Parcel) -> None:
        link.settle(number)
        message, topic, payload = parcel
        if topic is None:
            self._reject(message.topic, "no topic of an edge node or device")
        elif message.retained:
            self._reject(message.topic, "a retained message: nobody knows whether it still holds")
        else:
            self._pass_on(self._nodes.accept(topic, payload, message.received_time))

    def _pass_on(self, outcome: Outcome) -> None:
        for address, reason in outcome.refused:
            self._reject(address, reason)
        for reading in outcome.readings:
            self._deliver(reading, times_the_clock=reading.address not in self._on_change)
        for mark in outcome.marks:
            self._queue.put(mark)
        if outcome.node_born:
            # A little later than due: the loop's clock and the agent's are not the same one.
            asyncio.get_running_loop().call_later(BIRTH_GRACE_S + 0.1, self._look_for_devices)

    def _look_for_devices(self) -> None:
        for mark in self._nodes.overdue(self._clock.now()):
            self._queue.put(mark)
