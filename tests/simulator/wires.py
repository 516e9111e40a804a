"""A broker and what listens to it, for tests of the wires."""

import queue
import socket
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from paho.mqtt.client import Client, MQTTMessage
from paho.mqtt.enums import CallbackAPIVersion

from agent.sparkplug.wire import DataType, Metric, Payload

ROOT = Path(__file__).resolve().parents[2]


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def until(ready: Callable[[], Any], seconds: float = 20.0) -> Any:
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if found := ready():
            return found
        time.sleep(0.02)
    raise AssertionError("not in time")


class Broker:
    def __init__(self) -> None:
        self.port = free_port()
        self.start()

    @property
    def address(self) -> str:
        return f"mqtt://127.0.0.1:{self.port}"

    def start(self) -> None:
        command = [sys.executable, "-P", "-m", "simulator.broker_main", "--port", str(self.port)]
        self.process = subprocess.Popen(command, stdout=subprocess.PIPE, cwd=ROOT)
        assert self.process.stdout is not None
        assert self.process.stdout.readline() == b"broker up\n"

    def stop(self) -> int:
        self.process.terminate()
        code = self.process.wait(10)
        assert self.process.stdout is not None
        self.process.stdout.close()
        return code


class Subscriber:
    """Hears what is published on a topic filter."""

    def __init__(self, port: int, topics: str, name: str = "test-reader") -> None:
        self.messages: queue.SimpleQueue[MQTTMessage] = queue.SimpleQueue()
        subscribed: queue.SimpleQueue[bool] = queue.SimpleQueue()
        self.client = Client(CallbackAPIVersion.VERSION2, client_id=name)
        self.client.on_connect = lambda *_: self.client.subscribe(topics, qos=1)
        self.client.on_message = lambda _c, _u, message: self.messages.put(message)
        self.client.on_subscribe = lambda *_: subscribed.put(True)
        self.client.connect("127.0.0.1", port)
        self.client.loop_start()
        subscribed.get(timeout=20)

    def messages_of(self, count: int) -> list[MQTTMessage]:
        return [self.messages.get(timeout=20) for _ in range(count)]

    def close(self) -> None:
        self.client.disconnect()
        self.client.loop_stop()


class Host(Subscriber):
    """A host application of Sparkplug: hears the group, may ask for a birth."""

    def __init__(self, port: int, group: str = "g") -> None:
        super().__init__(port, f"spBv1.0/{group}/#", "host")

    def take(self, count: int) -> list[tuple[str, Payload]]:
        found = []
        for message in self.messages_of(count):
            assert not message.retain
            found.append((message.topic, Payload.FromString(message.payload)))
        return found

    def ask_for_birth(self, at: int) -> None:
        metric = Metric(name="Node Control/Rebirth", datatype=DataType.BOOLEAN, boolean_value=True)
        command = Payload(timestamp=at, metrics=[metric]).SerializeToString()
        self.client.publish("spBv1.0/g/NCMD/gw", command, qos=1).wait_for_publish(20)
        assert self.take(1)[0][0] == "spBv1.0/g/NCMD/gw"  # its own
