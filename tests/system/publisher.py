"""A plant of a test's own: publishes what it is told, good or garbage."""

import json
import threading
from datetime import UTC, datetime

import paho.mqtt.client as mqtt

from agent.siteplan.plan import UnitPlan

# Plant units; the values themselves do not matter, only that they are recognised again.
STEADY: dict[str, float | str] = {
    "PT-1101": 28.99,
    "PT-1102": 69.44,
    "TT-1101": 30.0,
    "TT-1102": 101.2,
    "ST-1101": 900.0,
    "FT-1101": 20300.0,
    "JT-1101": 690.0,
    "UY-1101": "100",
    "XS-1101": 1,
}


class Publisher:
    """Sends the steady values of K-110 once a second until stopped."""

    def __init__(self, plan: UnitPlan, port: int) -> None:
        self._topics = {i.tag: i.address for i in plan.inputs}
        self._client = mqtt.Client(mqtt.CallbackAPIVersion.VERSION2, client_id="test-plant")
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run, daemon=True)
        self._thread.start()

    def _run(self) -> None:
        while not self._stop.wait(1.0):
            now = datetime.now(UTC).isoformat()
            for tag, value in STEADY.items():
                self._client.publish(self._topics[tag], json.dumps({"value": value, "time": now}), qos=1)

    def send(self, tag: str, payload: bytes) -> None:
        self._client.publish(self._topics[tag], payload, qos=1).wait_for_publish(10)

    def stop(self) -> None:
        self._stop.set()
        self._thread.join(5)
        self._client.disconnect()
        self._client.loop_stop()
