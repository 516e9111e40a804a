"""The field gateway: an MQTT Sparkplug B 3.0 edge node, one device per machine, at most once (QoS 0).

Births name every metric and its alias; data carries the alias alone. A death will stands with the broker,
tied to its birth by bdSeq. While the broker is away samples are kept, and sent as historical after the next
birth.

The node bears itself anew every `REBIRTH_S` seconds and whenever a host application asks for it, so that a
listener who came later learns the names.
"""

import math
import threading
import time
from collections import deque
from collections.abc import Iterable, Mapping, Sequence
from types import MappingProxyType
from typing import Final

from paho.mqtt.client import Client, MQTTMessage

from agent.siteplan.plan import Input
from agent.sparkplug.wire import (
    BDSEQ,
    QUALITY,
    REBIRTH,
    SEQUENCE,
    SIMULATED,
    UNCERTAIN,
    DataType,
    MessageType,
    Metric,
    Payload,
    PropertySet,
    PropertyValue,
    QualityCode,
    Topic,
    parsed,
)
from simulator.broker_link import BrokerLink
from simulator.instrument_faults import SampleQuality
from simulator.sample import Sample

CLIENT_ID = "ostmere-field-gateway"
KEPT_S = 600  # samples kept while the broker is away; the oldest go after that
REBIRTH_S = 5.0

_AT_LEAST_ONCE: Final = 1  # the will and commands; data goes at most once


class SparkplugWire:
    """Publishes samples; connects again by itself for as long as it is open."""

    def __init__(
        self,
        address: str,
        *,
        group: str,
        tags: Sequence[Input],
        client_id: str = CLIENT_ID,
        rebirth_s: float = REBIRTH_S,
    ) -> None:
        self._book = _Book(group, tags)
        self._kept: deque[Sequence[Sample]] = deque(maxlen=KEPT_S)
        self._newest: dict[str, Sample] = {}  # what a birth says of each tag
        self._rebirth_s = rebirth_s
        self._born_at = -math.inf
        self._birth_due = threading.Event()
        self._link = BrokerLink(
            address,
            client_id=client_id,
            before_connecting=self._before_connecting,
            connected=self._bear_anew,
        )
        self._link.client.on_message = self._on_command

    @property
    def up(self) -> bool:
        return self._link.up

    @property
    def is_cut(self) -> bool:
        return self._link.is_cut

    def open(self) -> None:
        self._link.open()

    def cut(self) -> None:
        """Lose the connection: the broker tells the node's death."""
        self._link.cut()

    def restore(self) -> None:
        """Connect again: the next samples are a birth."""
        self._link.restore()

    def publish(self, samples: Sequence[Sample]) -> None:
        """Send samples: as a birth if one is due, else as data; keep them if the broker is away."""
        if not samples:
            return
        if not self.up:
            self._kept.append(samples)
            return
        past = [s for s in samples if s.historical]
        present = [s for s in samples if not s.historical]
        if present and self._birth_is_due(max(s.time for s in present)):
            self._birth_due.clear()
            self._newest.update((s.tag.address, s) for s in sorted(present, key=_time))
            self._born_at = max(s.time for s in present)
            self._send(self._book.births(list(self._newest.values())))
            while self._kept:
                self._send_past(self._kept.popleft())
            told = {id(s) for s in self._newest.values()}
            present = [s for s in present if id(s) not in told]
        for lot in _lots(present):
            self._send(self._book.data(lot))
            self._newest.update((s.tag.address, s) for s in lot)
        if past and self._birth_due.is_set():  # nothing has a name yet
            self._kept.append(past)
        else:
            self._send_past(past)

    def _birth_is_due(self, at: float) -> bool:
        return self._birth_due.is_set() or abs(at - self._born_at) >= self._rebirth_s

    def close(self) -> None:
        """Say farewell with the node's own death, as an intended disconnect drops the will."""
        if self.up:
            topic, payload = self._book.death()
            self._link.client.publish(str(topic), payload.SerializeToString(), qos=_AT_LEAST_ONCE)
        self._link.close()

    def _send(self, messages: Iterable[tuple[Topic, Payload]]) -> None:
        for topic, payload in messages:
            self._link.client.publish(str(topic), payload.SerializeToString(), qos=0)

    def _send_past(self, samples: Sequence[Sample]) -> None:
        for lot in _lots(samples):
            self._send(self._book.data(lot, historical=True))

    # on paho's thread

    def _before_connecting(self, client: Client) -> None:
        self._book.next_session()
        topic, payload = self._book.death()
        client.will_set(str(topic), payload.SerializeToString(), qos=_AT_LEAST_ONCE)

    def _bear_anew(self, client: Client) -> None:
        client.subscribe(str(self._book.topic(MessageType.NODE_COMMAND)), qos=_AT_LEAST_ONCE)
        self._birth_due.set()

    def _on_command(self, client: Client, userdata: object, message: MQTTMessage) -> None:
        """The one command an edge node must follow: to bear itself anew."""
        del client, userdata
        payload = parsed(bytes(message.payload))
        if payload is not None and any(m.name == REBIRTH and m.boolean_value for m in payload.metrics):
            self._birth_due.set()


class _Book:
    """Names, aliases and sequence numbers of one edge node, and the messages made with them."""

    def __init__(self, group: str, tags: Sequence[Input]) -> None:
        if not group or not tags:
            raise ValueError("an edge node has a group and tags")
        names = {tag.address: tuple(tag.address.split("/", 2)) for tag in tags}
        nodes = {name[0] for name in names.values()}
        if len(nodes) != 1 or any(len(name) != 3 or not all(name) for name in names.values()):
            raise ValueError("the addresses of one edge node are <edge node>/<device>/<metric>")
        self._group, self._node = group, nodes.pop()
        self._devices: Mapping[str, tuple[Input, ...]] = {
            device: tuple(t for t in tags if names[t.address][1] == device)
            for device in dict.fromkeys(name[1] for name in names.values())
        }
        self._aliases = {tag.address: alias for alias, tag in enumerate(tags, start=1)}
        self._bdseq = -1
        self._sequence = 0
        self._told: dict[str, tuple[float | bool | str | None, SampleQuality]] = {}  # last sent of each tag

    def topic(self, kind: MessageType, device: str = "") -> Topic:
        return Topic(group=self._group, type=kind, node=self._node, device=device)

    def next_session(self) -> None:
        self._bdseq = (self._bdseq + 1) % SEQUENCE

    def death(self) -> tuple[Topic, Payload]:
        payload = Payload(timestamp=_milliseconds(time.time()), metrics=[self._session()])
        return self.topic(MessageType.NODE_DEATH), payload

    def births(self, samples: Sequence[Sample]) -> list[tuple[Topic, Payload]]:
        """The node and all its devices, with the values of now; counts from 0."""
        at = _milliseconds(max(s.time for s in samples))
        self._sequence = 0
        own = [
            self._session(at),
            Metric(name=REBIRTH, timestamp=at, datatype=DataType.BOOLEAN, boolean_value=False),
            Metric(name="Simulated", timestamp=at, datatype=DataType.BOOLEAN, boolean_value=True),
        ]
        messages = [(self.topic(MessageType.NODE_BIRTH), Payload(timestamp=at, seq=0, metrics=own))]
        self._told = {}
        by_tag = {s.tag.address: s for s in samples}
        for device, tags in self._devices.items():
            metrics = [self._birth_metric(tag, by_tag.get(tag.address), at) for tag in tags]
            messages.append(self._next(MessageType.DEVICE_BIRTH, device, at, metrics))
        return messages

    def data(self, samples: Sequence[Sample], *, historical: bool = False) -> list[tuple[Topic, Payload]]:
        """One message per device; a tag sent on change is left out while it stays the same."""
        at = _milliseconds(max(s.time for s in samples))
        by_tag = {s.tag.address: s for s in samples}
        messages = []
        for device, tags in self._devices.items():
            metrics = []
            for tag in tags:
                sample = by_tag.get(tag.address)
                if sample is None or (not historical and self._is_told(sample)):
                    continue
                metric = Metric(alias=self._aliases[tag.address], timestamp=_milliseconds(sample.time))
                if historical:
                    metric.is_historical = True
                else:
                    self._told[tag.address] = (sample.value, sample.stated_quality)
                put_value(metric, sample.value, data_type(tag))
                put_properties(metric, sample.stated_quality)
                metrics.append(metric)
            if metrics:
                messages.append(self._next(MessageType.DEVICE_DATA, device, at, metrics))
        return messages

    def _birth_metric(self, tag: Input, sample: Sample | None, at: int) -> Metric:
        kind = data_type(tag)
        when = at if sample is None else _milliseconds(sample.time)
        metric = Metric(
            name=tag.address.split("/", 2)[2],
            alias=self._aliases[tag.address],
            timestamp=when,
            datatype=kind,
            properties=PropertySet(
                keys=["engUnit"], values=[PropertyValue(type=DataType.STRING, string_value=tag.unit)]
            ),
        )
        value = None if sample is None else sample.value
        quality = SampleQuality.BAD if sample is None else sample.stated_quality
        self._told[tag.address] = (value, quality)
        put_value(metric, value, kind)
        put_properties(metric, quality)
        return metric

    def _is_told(self, sample: Sample) -> bool:
        address = sample.tag.address
        return sample.tag.on_change and self._told.get(address) == (sample.value, sample.stated_quality)

    def _next(
        self, kind: MessageType, device: str, at: int, metrics: Sequence[Metric]
    ) -> tuple[Topic, Payload]:
        self._sequence = (self._sequence + 1) % SEQUENCE
        return self.topic(kind, device), Payload(timestamp=at, seq=self._sequence, metrics=metrics)

    def _session(self, at: int | None = None) -> Metric:
        return Metric(name=BDSEQ, timestamp=at, datatype=DataType.INT64, long_value=self._bdseq)


_FIELDS: Final = MappingProxyType(
    {
        DataType.FLOAT: "float_value",
        DataType.DOUBLE: "double_value",
        DataType.BOOLEAN: "boolean_value",
        DataType.STRING: "string_value",
    }
)


def data_type(tag: Input) -> DataType:
    """Transmitters are single precision, what a controller computes is double."""
    if tag.quantity == "load_step":
        return DataType.STRING
    if tag.quantity == "run_signal":
        return DataType.BOOLEAN
    return DataType.DOUBLE if tag.subject == "unit" else DataType.FLOAT


def put_value(metric: Metric, value: float | bool | str | None, kind: DataType) -> None:
    """Write a value into its field; what is none, or no number, is null."""
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        metric.is_null = True
    else:
        setattr(metric, _FIELDS[kind], value)


def put_properties(metric: Metric, quality: SampleQuality) -> None:
    """Say of a value how good it is, and that it is invented.

    The specification knows good, bad and stale alone; uncertain is good with a property of our own.
    """
    code = QualityCode.BAD if quality is SampleQuality.BAD else QualityCode.GOOD
    said = [
        (QUALITY, PropertyValue(type=DataType.INT32, int_value=code)),
        (SIMULATED, PropertyValue(type=DataType.BOOLEAN, boolean_value=True)),
    ]
    if quality is SampleQuality.UNCERTAIN:
        said.append((UNCERTAIN, PropertyValue(type=DataType.BOOLEAN, boolean_value=True)))
    for key, value in said:
        metric.properties.keys.append(key)
        metric.properties.values.append(value)


def _lots(samples: Iterable[Sample]) -> list[list[Sample]]:
    """Samples in groups in which no tag stands twice, the later ones of a tag in the later groups."""
    lots: list[list[Sample]] = []
    count: dict[str, int] = {}
    for sample in sorted(samples, key=_time):
        place = count.get(sample.tag.address, 0)
        count[sample.tag.address] = place + 1
        if place == len(lots):
            lots.append([])
        lots[place].append(sample)
    return lots


def _time(sample: Sample) -> float:
    return sample.time


def _milliseconds(seconds: float) -> int:
    return round(seconds * 1000)
