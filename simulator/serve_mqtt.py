"""The field bus: one MQTT topic per tag, JSON, at least once (QoS 1), by its own client.

Payload: ``{"value": 29.01, "time": "2026-12-01T05:22:00.400Z", "quality": "good", "simulated": true}``.
A ledger, if asked for, gets one JSON line for each message that the broker confirmed, and none for others.
"""

import json
import queue
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import TextIO
from urllib.parse import urlsplit

from paho.mqtt.client import Client, ConnectFlags, DisconnectFlags
from paho.mqtt.enums import CallbackAPIVersion, MQTTErrorCode, MQTTProtocolVersion
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from simulator.sample import Sample

CLIENT_ID = "ostmere-field-bus"
KEPT_S = 600  # what is kept while the broker is away; the newest messages are refused after that


class MqttWire:
    """Publishes samples; connects again by itself for as long as it is open."""

    def __init__(
        self, address: str, *, tags: int, ledger: Path | None = None, client_id: str = CLIENT_ID
    ) -> None:
        url = urlsplit(address)
        if url.scheme != "mqtt" or not url.hostname:
            raise ValueError(f"{address!r} is not mqtt://host:port")
        self._host, self._port = url.hostname, url.port or 1883
        self._ledger_path = ledger
        self._ledger: TextIO | None = None
        # Confirmations come on paho's thread while it holds its own lock; they are only noted there.
        self._confirmed: queue.SimpleQueue[int] = queue.SimpleQueue()
        self._unconfirmed: dict[int, Sample] = {}
        self._up = False
        self.refused = 0
        client = Client(
            CallbackAPIVersion.VERSION2, client_id=client_id, protocol=MQTTProtocolVersion.MQTTv311
        )
        client.max_queued_messages_set(tags * KEPT_S)
        client.reconnect_delay_set(min_delay=1, max_delay=5)
        client.on_connect = self._on_connect
        client.on_disconnect = self._on_disconnect
        client.on_publish = self._on_publish
        self._client = client

    @property
    def up(self) -> bool:
        return self._up

    def open(self) -> None:
        if self._ledger_path is not None:
            self._ledger = self._ledger_path.open("a", encoding="utf-8")
        self._client.connect_async(self._host, self._port, keepalive=15)
        self._client.loop_start()

    def publish(self, samples: Sequence[Sample]) -> None:
        for sample in samples:
            info = self._client.publish(sample.tag.address, payload(sample), qos=1)
            if info.rc == MQTTErrorCode.MQTT_ERR_QUEUE_SIZE:
                self.refused += 1
            elif self._ledger is not None:
                self._unconfirmed[info.mid] = sample
        self.note_confirmed()

    def note_confirmed(self) -> None:
        """Write what the broker confirmed since the last call to the ledger."""
        if self._ledger is None:
            return
        while not self._confirmed.empty():
            sample = self._unconfirmed.pop(self._confirmed.get(), None)
            if sample is not None:
                row = {"topic": sample.tag.address, "time": sample.time, "value": sample.value}
                self._ledger.write(json.dumps(row) + "\n")
        self._ledger.flush()

    def close(self) -> None:
        connected = self._up
        self._client.disconnect()
        if connected:  # else its thread may sleep for a second before it looks; it ends by itself
            self._client.loop_stop()
        self.note_confirmed()
        if self._ledger is not None:
            self._ledger.close()
            self._ledger = None

    def _on_connect(
        self,
        client: Client,
        userdata: object,
        flags: ConnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del client, userdata, flags, properties
        self._up = not reason.is_failure

    def _on_disconnect(
        self,
        client: Client,
        userdata: object,
        flags: DisconnectFlags,
        reason: ReasonCode,
        properties: Properties | None,
    ) -> None:
        del client, userdata, flags, reason, properties
        self._up = False

    def _on_publish(
        self, client: Client, userdata: object, mid: int, reason: ReasonCode, properties: Properties | None
    ) -> None:
        del client, userdata, properties
        if self._ledger_path is not None and not reason.is_failure:
            self._confirmed.put(mid)


def payload(sample: Sample) -> str:
    """One message."""
    when = datetime.fromtimestamp(sample.time, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
    quality = "bad" if sample.value is None else "good"
    return json.dumps({"value": sample.value, "time": when, "quality": quality, "simulated": True})
