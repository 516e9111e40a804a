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
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from agent.siteplan.plan import Input
from agent.sparkplug.wire import (
    BDSEQ,
    REBIRTH,
    SEQUENCE,
    DataType,
    MessageType,
    Metric,
    Payload,
    PropertySet,
    PropertyValue,
    Topic,
    parsed,
)
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
        url = urlsplit(address)
        if url.scheme != "mqtt" or not url.hostname:
            raise ValueError(f"{address!r} is not mqtt://host:port")
        self._host, self._port = url.hostname, url.port or 1883
        self._book = _Book(group, tags)
        self._kept: deque[Sequence[Sample]] = deque(maxlen=KEPT_S)
        self._rebirth_s = rebirth_s
        self._born_at = -math.inf
        self._connected = threading.Event()
        self._birth_due = threading.Event()
        client = Client(
            CallbackAPIVersion.VERSION2, client_id=client_id, protocol=MQTTProtocolVersion.MQTTv311
        )
        client.reconnect_delay_set(min_delay=1, max_delay=5)
        client.on_pre_connect = self._before_connecting
        client.on_connect = self._on_connect
        client.on_disconnect = self._on_disconnect
        client.on_message = self._on_command
        self._client = client

    @property
    def up(self) -> bool:
        return self._connected.is_set()

    def open(self) -> None:
        self._client.connect_async(self._host, self._port, keepalive=15)
        self._client.loop_start()

    def publish(self, samples: Sequence[Sample]) -> None:
        """Send one instant: as a birth if one is due, else as data; keep it if the broker is away."""
        if not samples:
            return
        if not self._connected.is_set():
            self._kept.append(samples)
            return
        at = max(s.time for s in samples)
        if self._birth_due.is_set() or not 0 <= at - self._born_at < self._rebirth_s:
            self._birth_due.clear()
            self._born_at = at
            self._send(self._book.births(samples))
            while self._kept:
                self._send(self._book.data(self._kept.popleft(), historical=True))
        else:
            self._send(self._book.data(samples))

    def close(self) -> None:
        """Say farewell with the node's own death, as an intended disconnect drops the will."""
        connected = self.up
        if connected:
            topic, payload = self._book.death()
            self._client.publish(str(topic), payload.SerializeToString(), qos=_AT_LEAST_ONCE)
        self._client.disconnect()
        if connected:  # else its thread may sleep for a second before it looks; it ends by itself
            self._client.loop_stop()

    def _send(self, messages: Iterable[tuple[Topic, Payload]]) -> None:
        for topic, payload in messages:
            self._client.publish(str(topic), payload.SerializeToString(), qos=0)

    # on paho's thread

    def _before_connecting(self, client: Client, userdata: object) -> None:
        del userdata
        self._book.next_session()
        topic, payload = self._book.death()
        client.will_set(str(topic), payload.SerializeToString(), qos=_AT_LEAST_ONCE)

    def _on_connect(
        self,
        client: Client,
        userdata: object,
        flags: ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del userdata, flags, properties
        if reason.is_failure:
            return
        client.subscribe(str(self._book.topic(MessageType.NODE_COMMAND)), qos=_AT_LEAST_ONCE)
        self._birth_due.set()
        self._connected.set()

    def _on_disconnect(
        self,
        client: Client,
        userdata: object,
        flags: DisconnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del client, userdata, flags, reason, properties
        self._connected.clear()

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
        self._told: dict[str, float | bool | str | None] = {}  # what was last sent of each tag

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
                    self._told[tag.address] = sample.value
                put_value(metric, sample.value, data_type(tag))
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
        self._told[tag.address] = value
        put_value(metric, value, kind)
        return metric

    def _is_told(self, sample: Sample) -> bool:
        address = sample.tag.address
        return sample.tag.on_change and address in self._told and self._told[address] == sample.value

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


def _milliseconds(seconds: float) -> int:
    return round(seconds * 1000)
