"""The whole product as processes: broker, plant, agent and pages, started and ended by a test."""

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

ROOT = Path(__file__).resolve().parents[2]
DEMO_SITE = ROOT / "simulator" / "sites" / "ostmere.yaml"


def quick_alarms(folder: Path) -> Path:
    """The demo site with alarm delays of 3 s, so that a test need not wait a minute."""
    text = DEMO_SITE.read_text(encoding="utf-8")
    keys = ("gas_load_compression", "discharge_temperature", "reversal")
    delays = "".join(f"      {key}: {{on_delay: 3 s}}\n" for key in keys)
    path = folder / "site.yaml"
    path.write_text(
        text.replace("    load_steps:\n", f"    alarms:\n{delays}    load_steps:\n"), encoding="utf-8"
    )
    return path


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def wait_for(what: str, ready: Callable[[], Any], seconds: float = 30.0) -> Any:
    """Poll until ``ready`` returns something true; the value is returned."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        found = ready()
        if found:
            return found
        time.sleep(0.1)
    raise AssertionError(f"{what}: not within {seconds:g} s")


class Process:
    """A child of the test, its output kept in a file, killed at the end whatever happens."""

    def __init__(self, name: str, command: list[str], folder: Path) -> None:
        self.name = name
        self.command = command
        self.log = folder / f"{name}.log"
        self._child: subprocess.Popen[bytes] | None = None

    def start(self) -> "Process":
        with self.log.open("ab") as sink:
            self._child = subprocess.Popen(
                self.command, stdout=sink, stderr=sink, cwd=self.log.parent, start_new_session=True
            )
        return self

    @property
    def running(self) -> bool:
        return self._child is not None and self._child.poll() is None

    @property
    def child(self) -> subprocess.Popen[bytes]:
        assert self._child is not None
        return self._child

    def kill(self) -> None:
        """SIGKILL: no last words."""
        if self._child is not None:
            self._child.kill()
            self._child.wait(10)

    def signal(self, number: int) -> None:
        self.child.send_signal(number)

    def stop(self, seconds: float = 10.0) -> int:
        if not self.running:
            return self.child.returncode if self._child else 0
        self.child.send_signal(signal.SIGTERM)
        try:
            return self.child.wait(seconds)
        except subprocess.TimeoutExpired:
            self.kill()
            raise AssertionError(f"{self.name} did not end within {seconds:g} s of SIGTERM") from None

    def text(self) -> str:
        return self.log.read_text(encoding="utf-8", errors="replace") if self.log.exists() else ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Wires:
    mqtt_port: int
    opcua_port: int

    def arguments(self) -> list[str]:
        return [
            "--address", f"field-bus=mqtt://127.0.0.1:{self.mqtt_port}",
            "--address", f"field-gateway=mqtt://127.0.0.1:{self.mqtt_port}",
            "--address", f"control-system=opc.tcp://127.0.0.1:{self.opcua_port}/ostmere",
        ]  # fmt: skip


def python(*words: str) -> list[str]:
    # -P keeps the working directory's folders from shadowing the installed packages.
    return [sys.executable, "-P", "-m", *words]


class House:
    """One site's processes in one folder."""

    def __init__(self, folder: Path, *, site: Path = DEMO_SITE) -> None:
        self.folder = folder
        self.site = site
        self.data = folder / "data"
        self.wires = Wires(mqtt_port=free_port(), opcua_port=free_port())
        self.page_port = free_port()
        self.processes: list[Process] = []

    def _add(self, name: str, command: list[str]) -> Process:
        process = Process(name, command, self.folder).start()
        self.processes.append(process)
        return process

    def broker(self) -> Process:
        """The embedded broker (forgets sessions, MQTT 3.1.1 only)."""
        process = self._add("broker", python("simulator.broker_main", "--port", str(self.wires.mqtt_port)))
        wait_for("broker", lambda: _listens(self.wires.mqtt_port))
        return process

    def mosquitto(self) -> Process:
        program = shutil.which("mosquitto", path=os.pathsep.join([os.environ["PATH"], "/usr/sbin"]))
        assert program
        config = self.folder / "mosquitto.conf"
        config.write_text(f"listener {self.wires.mqtt_port} 127.0.0.1\nallow_anonymous true\n")
        process = self._add("mosquitto", [program, "-c", str(config)])
        wait_for("mosquitto", lambda: _listens(self.wires.mqtt_port))
        return process

    def plant(self, *words: str) -> Process:
        command = python("simulator.plant_main", "--site", str(self.site), *self.wires.arguments(), *words)
        process = self._add("plant", command)
        wait_for("plant", lambda: "plant up" in process.text(), 60)
        return process

    def agent_process(self) -> Process:
        command = python("agent", "agent", str(self.site), "--data", str(self.data), *self.wires.arguments())
        return Process("agent", command, self.folder)

    def agent(self) -> Process:
        process = self.agent_process().start()
        self.processes.append(process)
        return process

    def pages(self) -> Process:
        command = python(
            "agent", "dashboard", str(self.site), "--data", str(self.data), "--port", str(self.page_port)
        )
        process = self._add("pages", command)
        wait_for("pages", lambda: _listens(self.page_port))
        return process

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.page_port}"

    def get(self, path: str) -> Any:
        request = urllib.request.Request(self.url + path)
        with urllib.request.urlopen(request, timeout=5) as answer:
            return json.loads(answer.read())

    def close(self) -> None:
        for process in reversed(self.processes):
            process.kill()


def _listens(port: int) -> bool:
    with socket.socket() as probe:
        probe.settimeout(0.5)
        return probe.connect_ex(("127.0.0.1", port)) == 0


@contextmanager
def house(folder: Path, *, site: Path = DEMO_SITE) -> Iterator[House]:
    built = House(folder, site=site)
    try:
        yield built
    finally:
        built.close()
