"""Plants in processes of their own, and what a test needs to listen to a source."""

import asyncio
import contextlib
import getpass
import json
import math
import os
import queue
import shutil
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import AsyncIterator, Callable, Iterator
from datetime import UTC, datetime
from pathlib import Path

import pytest
from paho.mqtt.client import Client
from paho.mqtt.enums import CallbackAPIVersion

from agent.acquisition.build import build_source
from agent.acquisition.source import PlantSource
from agent.clock import SystemClock
from agent.records import Quality, Reading
from agent.siteplan.plan import Input, MqttVersion, Source, SourceKind

HERE = Path(__file__).parent
START_DEADLINE_S = 30.0
DEADLINE_S = 20.0


@pytest.fixture
def make_input() -> Callable[..., Input]:
    def make(tag: str, *, unit: str = "barg", address: str | None = None, on_change: bool = False) -> Input:
        return Input(
            quantity="suction_pressure",
            subject="stage1",
            tag=tag,
            source="plant",
            address=address or f"site/{tag}",
            unit=unit,
            scale=1.0,
            offset=0.0,
            span_low=-math.inf,
            span_high=math.inf,
            accuracy=0.0,
            tap="somewhere",
            stale_after_s=10.0,
            on_change=on_change,
            required=True,
        )

    return make


class Listener:
    """Takes what an open source yields, so that a test can wait for it."""

    def __init__(self, source: PlantSource) -> None:
        self.source = source
        self.readings: list[Reading] = []
        self.ended = False

    async def run(self) -> None:
        async for batch in self.source:
            assert batch
            self.readings.extend(batch)
        self.ended = True

    def values(self, tag: str) -> list[float | None]:
        return [r.value for r in self.readings if r.address.endswith(tag)]


@contextlib.asynccontextmanager
async def _listening(source: PlantSource) -> AsyncIterator[Listener]:
    listener = Listener(source)
    async with asyncio.TaskGroup() as group, source:
        group.create_task(listener.run())
        yield listener


@pytest.fixture
def listening() -> Callable[[PlantSource], contextlib.AbstractAsyncContextManager[Listener]]:
    return _listening


async def _until(condition: Callable[[], object], what: str, deadline_s: float = DEADLINE_S) -> None:
    end = time.monotonic() + deadline_s
    while not condition():
        if time.monotonic() > end:
            pytest.fail(f"not within {deadline_s:.0f} s: {what}")
        await asyncio.sleep(0.01)


@pytest.fixture
def until() -> Callable[..., object]:
    """Poll until something is true; a test that waits in vain says for what."""
    return _until


class Child:
    """A process that says "up" when it serves."""

    def __init__(self, command: list[str], *, says_up: bool = True) -> None:
        self._command = command
        self._says_up = says_up
        self._process: subprocess.Popen[str] | None = None
        self._lines: queue.Queue[str] = queue.Queue()

    def start(self) -> None:
        environment = {k: v for k, v in os.environ.items() if k != "PYTHONPATH"}
        self._process = subprocess.Popen(
            self._command,
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            text=True,
            env=environment,
        )
        self._lines = queue.Queue()
        threading.Thread(target=self._read, args=(self._process, self._lines), daemon=True).start()
        if self._says_up:
            assert self.line() == "up"

    @staticmethod
    def _read(process: subprocess.Popen[str], lines: "queue.Queue[str]") -> None:
        assert process.stdout is not None
        for line in process.stdout:
            lines.put(line.strip())
        lines.put("ended")

    def line(self) -> str:
        return self._lines.get(timeout=START_DEADLINE_S)

    def tell(self, order: object) -> None:
        assert self._process is not None
        assert self._process.stdin is not None
        self._process.stdin.write(json.dumps(order) + "\n")
        self._process.stdin.flush()
        assert self.line() == "done"

    def signal(self, number: signal.Signals) -> None:
        assert self._process is not None
        self._process.send_signal(number)

    def kill(self) -> None:
        if self._process is None:
            return
        self._process.kill()
        self._process.wait()
        while self.line() != "ended":
            pass
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        with contextlib.suppress(BrokenPipeError):
            self._process.stdin.close()
        self._process.stdout.close()
        self._process = None


@pytest.fixture
def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


class Publisher:
    """The plant's side of a broker; `send_raw` returns once the broker has confirmed."""

    def __init__(self, port: int) -> None:
        self._client = Client(CallbackAPIVersion.VERSION2, client_id="the-plant")
        self._client.connect("127.0.0.1", port)
        self._client.loop_start()

    def send_raw(self, topic: str, payload: bytes, *, retain: bool = False) -> None:
        info = self._client.publish(topic, payload, qos=1, retain=retain)
        info.wait_for_publish(START_DEADLINE_S)
        assert info.is_published()

    def close(self) -> None:
        self._client.disconnect()
        self._client.loop_stop()


class MqttPlant:
    """A broker and a publisher. ``send`` speaks the payload form the source expects."""

    def __init__(self, child: Child, port: int, version: MqttVersion) -> None:
        self.child = child
        self.port = port
        self._version = version
        self._publisher: Publisher | None = None
        self.state_file: Path | None = None

    def start(self) -> None:
        self.child.start()
        self._wait_for_the_port()

    def _wait_for_the_port(self) -> None:
        end = time.monotonic() + START_DEADLINE_S
        while True:
            try:
                socket.create_connection(("127.0.0.1", self.port), timeout=1).close()
            except OSError:
                assert time.monotonic() < end, "the broker did not come up"
                time.sleep(0.02)
            else:
                return

    def kill(self) -> None:
        if self._publisher is not None:
            self._publisher.close()
            self._publisher = None
        self.child.kill()

    def send_raw(self, tag: str, payload: bytes, *, retain: bool = False) -> None:
        if self._publisher is None:
            self._publisher = Publisher(self.port)
        self._publisher.send_raw(self.address(tag), payload, retain=retain)

    def send(self, tag: str, value: object, at: float, quality: Quality = Quality.GOOD) -> None:
        moment = datetime.fromtimestamp(at, UTC).isoformat().replace("+00:00", "Z")
        content = {"value": value, "time": moment, "quality": quality.name.lower()}
        self.send_raw(tag, json.dumps(content).encode())

    def address(self, tag: str) -> str:
        return f"site/{tag}"

    def source(self, *inputs: Input) -> PlantSource:
        return build_source(
            Source(
                name="plant",
                kind=SourceKind.MQTT_JSON,
                address=f"mqtt://127.0.0.1:{self.port}",
                mqtt_version=self._version,
                client_id="throwline-test",
                topics=("site/#",),
            ),
            inputs,
            SystemClock(),
        )


_TYPES = {bool: "Boolean", str: "String", float: "Double", int: "Int32"}
_STATUS = {Quality.GOOD: 0, Quality.UNCERTAIN: 0x40000000, Quality.BAD: 0x80000000}


class OpcUaPlant:
    """An OPC UA server with the nodes PT, UY and XS and an index that is not the first."""

    def __init__(self, port: int) -> None:
        self.port = port
        script = str(HERE / "opcua_child.py")
        self.child = Child([sys.executable, "-P", script, str(port), "PT", "UY", "XS"])

    def start(self) -> None:
        self.child.start()

    def kill(self) -> None:
        self.child.kill()

    def write(
        self,
        tag: str,
        value: object,
        type_name: str,
        *,
        source: float | None,
        server: float | None,
        status: int = 0,
    ) -> None:
        self.child.tell(
            {
                "node": tag,
                "value": value,
                "type": type_name,
                "status": status,
                "source_time": source,
                "server_time": server,
            }
        )

    def send(self, tag: str, value: object, at: float, quality: Quality = Quality.GOOD) -> None:
        kept = "nan" if isinstance(value, float) and math.isnan(value) else value
        self.write(tag, kept, _TYPES[type(value)], source=at, server=None, status=_STATUS[quality])

    def address(self, tag: str) -> str:
        return f"nsu=urn:invented:plant;s={tag}"

    def source(self, *inputs: Input) -> PlantSource:
        return build_source(
            Source(name="plant", kind=SourceKind.OPCUA, address=f"opc.tcp://127.0.0.1:{self.port}/plant"),
            inputs,
            SystemClock(),
        )


@pytest.fixture
def amqtt_plant(free_port: int) -> Iterator[MqttPlant]:
    child = Child([sys.executable, "-P", str(HERE / "amqtt_child.py"), str(free_port)])
    plant = MqttPlant(child, free_port, MqttVersion.V311)
    plant.start()
    yield plant
    plant.kill()


@pytest.fixture
def opcua_plant(free_port: int) -> Iterator[OpcUaPlant]:
    plant = OpcUaPlant(free_port)
    plant.start()
    yield plant
    plant.kill()


@pytest.fixture(params=["amqtt_plant", "opcua_plant"])
def plant(request: pytest.FixtureRequest) -> MqttPlant | OpcUaPlant:
    """Each kind of plant in turn: what every source must do."""
    found = request.getfixturevalue(request.param)
    assert isinstance(found, MqttPlant | OpcUaPlant)
    return found


@pytest.fixture
def mosquitto(free_port: int, tmp_path: Path) -> Iterator[Callable[[MqttVersion], MqttPlant]]:
    """A Mosquitto with its default limits (20 in flight, 1,000 queued); only persistence is set."""
    wide = os.pathsep.join([os.environ.get("PATH", ""), "/usr/sbin", "/usr/local/sbin"])
    program = shutil.which("mosquitto", path=wide)
    assert program is not None
    settings = tmp_path / "mosquitto.conf"
    settings.write_text(
        f"user {getpass.getuser()}\n"  # else a root's broker may not write where it is told to
        f"listener {free_port} 127.0.0.1\nallow_anonymous true\n"
        f"persistence true\npersistence_location {tmp_path}/\n"
        "autosave_interval 1\nlog_dest none\n"
    )
    started: list[MqttPlant] = []

    def start(version: MqttVersion) -> MqttPlant:
        plant = MqttPlant(Child([program, "-c", str(settings)], says_up=False), free_port, version)
        plant.state_file = tmp_path / "mosquitto.db"
        plant.start()
        started.append(plant)
        return plant

    yield start
    for plant in started:
        plant.kill()
