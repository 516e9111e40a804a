"""The field bus: one MQTT topic per tag, JSON, at least once (QoS 1), by its own client.

Payload: ``{"value": 29.01, "time": "2026-12-01T05:22:00.400Z", "quality": "good", "simulated": true}``; what
was kept while the link was lost says ``"historical": true`` as well.
A ledger, if asked for, gets one JSON line for each message that the broker confirmed, and none for others.
"""

import json
import queue
from collections.abc import Sequence
from datetime import UTC, datetime
from pathlib import Path
from typing import TextIO

from paho.mqtt.client import Client
from paho.mqtt.enums import MQTTErrorCode
from paho.mqtt.properties import Properties
from paho.mqtt.reasoncodes import ReasonCode

from simulator.broker_link import BrokerLink
from simulator.sample import Sample

CLIENT_ID = "ostmere-field-bus"
KEPT_S = 600  # what is kept while the broker is away; the newest messages are refused after that


class MqttWire:
    """Publishes samples; connects again by itself for as long as it is open."""

    def __init__(
        self, address: str, *, tags: int, ledger: Path | None = None, client_id: str = CLIENT_ID
    ) -> None:
        self._ledger_path = ledger
        self._ledger: TextIO | None = None
        # Confirmations come on paho's thread while it holds its own lock; they are only noted there.
        self._confirmed: queue.SimpleQueue[int] = queue.SimpleQueue()
        self._unconfirmed: dict[int, Sample] = {}
        self.refused = 0
        self._link = BrokerLink(address, client_id=client_id)
        self._link.client.max_queued_messages_set(tags * KEPT_S)
        self._link.client.on_publish = self._on_publish

    @property
    def up(self) -> bool:
        return self._link.up

    @property
    def is_cut(self) -> bool:
        return self._link.is_cut

    def open(self) -> None:
        if self._ledger_path is not None:
            self._ledger = self._ledger_path.open("a", encoding="utf-8")
        self._link.open()

    def cut(self) -> None:
        """Lose the connection; what is published meanwhile is kept for `KEPT_S`."""
        self._link.cut()

    def restore(self) -> None:
        self._link.restore()

    def publish(self, samples: Sequence[Sample]) -> None:
        for sample in samples:
            info = self._link.client.publish(sample.tag.address, payload(sample), qos=1)
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
        self._link.close()
        self.note_confirmed()
        if self._ledger is not None:
            self._ledger.close()
            self._ledger = None

    def _on_publish(
        self, client: Client, userdata: object, mid: int, reason: ReasonCode, properties: Properties | None
    ) -> None:
        del client, userdata, properties
        if self._ledger_path is not None and not reason.is_failure:
            self._confirmed.put(mid)


def payload(sample: Sample) -> str:
    """One message."""
    when = datetime.fromtimestamp(sample.time, UTC).isoformat(timespec="milliseconds").replace("+00:00", "Z")
    fields = {
        "value": sample.value,
        "time": when,
        "quality": sample.stated_quality.value,
        "simulated": True,
    }
    if sample.historical:
        fields["historical"] = True
    return json.dumps(fields)
