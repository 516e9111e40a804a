"""Plant and broker as processes: up, down, in time, and in one sentence when something is wrong."""

import json
import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Sequence
from pathlib import Path

import pytest

from simulator.plant_main import main, run, scenario_path

ROOT = scenario_path("quiet").parents[2]
SITE = ROOT / "simulator" / "sites" / "ostmere.yaml"


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


class Processes:
    def __init__(self) -> None:
        self.started: list[subprocess.Popen[str]] = []

    def start(self, module: str, *words: str, cwd: Path = ROOT) -> "subprocess.Popen[str]":
        command = [sys.executable, "-m", module, *words]
        process = subprocess.Popen(
            command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, cwd=cwd
        )
        self.started.append(process)
        return process

    def plant(self, mqtt: int, opcua: int, *words: str) -> "subprocess.Popen[str]":
        return self.start("simulator.plant_main", "--site", str(SITE), *addresses(mqtt, opcua), *words)


def addresses(mqtt: int, opcua: int) -> Sequence[str]:
    return (
        "--address", f"field-bus=mqtt://127.0.0.1:{mqtt}",
        "--address", f"field-gateway=mqtt://127.0.0.1:{mqtt}",
        "--address", f"control-system=opc.tcp://127.0.0.1:{opcua}/ostmere",
    )  # fmt: skip


@pytest.fixture
def processes() -> Iterator[Processes]:
    made = Processes()
    yield made
    for process in made.started:
        process.kill()
        process.communicate()


def line(process: "subprocess.Popen[str]") -> str:
    assert process.stdout is not None
    return process.stdout.readline().rstrip()


@pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")
@pytest.mark.parametrize("number", [pytest.param(signal.SIGTERM, marks=pytest.mark.slow), signal.SIGINT])
def test_plant_comes_up_and_ends_when_asked(
    processes: Processes, tmp_path: Path, number: signal.Signals
) -> None:
    mqtt, opcua = free_port(), free_port()
    broker = processes.start("simulator.broker_main", "--port", str(mqtt))
    assert line(broker) == "broker up"
    ledger = tmp_path / "ledger"
    plant = processes.plant(mqtt, opcua, "--ledger", str(ledger), "--timetable", "--pace", "3")
    assert line(plant) == "plant up"
    story = json.loads(line(plant))
    assert "suction pressure begins to sink" in story["timetable"][0][1]
    assert abs(story["timetable"][0][0] - time.time() - 20 / 3) < 3  # hand: 20 s at pace 3
    end = time.monotonic() + 10
    while not (ledger.exists() and len(ledger.read_text().splitlines()) >= 9) and time.monotonic() < end:
        time.sleep(0.05)
    assert len(ledger.read_text().splitlines()) >= 9
    for process in (plant, broker):
        asked = time.monotonic()
        process.send_signal(number)
        assert process.wait(10) == 0
        # a second each is the aim; an interpreter on a shared machine needs part of it to leave
        assert time.monotonic() - asked < 2.5
        assert process.stderr is not None
        assert process.stderr.read() == ""


def test_plant_without_a_broker_serves_the_other_wire_and_waits(processes: Processes) -> None:
    mqtt, opcua = free_port(), free_port()
    plant = processes.plant(mqtt, opcua)
    end = time.monotonic() + 30
    with socket.socket() as probe:
        while probe.connect_ex(("127.0.0.1", opcua)) != 0:
            assert time.monotonic() < end
            time.sleep(0.05)
    assert plant.poll() is None
    broker = processes.start("simulator.broker_main", "--port", str(mqtt))
    assert line(broker) == "broker up"
    assert line(plant) == "plant up"


def test_plant_ends_by_itself_after_its_duration(processes: Processes) -> None:
    plant = processes.plant(free_port(), free_port(), "--duration", "1.5")
    out, err = plant.communicate(timeout=30)
    assert (plant.returncode, out, err) == (0, "", "")


def test_taken_port_is_said_in_one_sentence(processes: Processes) -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = int(taken.getsockname()[1])
        plant = processes.plant(free_port(), port)
        _, said = plant.communicate(timeout=30)
        assert plant.returncode == 1
        assert said.startswith(f"plant: cannot serve opc.tcp://127.0.0.1:{port}/ostmere: ")
        broker = processes.start("simulator.broker_main", "--port", str(port))
        _, said = broker.communicate(timeout=30)
        assert broker.returncode == 1
        assert said.startswith("broker: ")
        assert len(said.splitlines()) == 1


def test_wrong_scenario_and_wrong_site_are_said_and_end_the_start(
    capsys: pytest.CaptureFixture[str], tmp_path: Path
) -> None:
    assert run(SITE, scenario="no-such-story") == 1
    assert "no-such-story: cannot be read" in capsys.readouterr().err
    broken = tmp_path / "site.yaml"
    broken.write_text("schema: 1\n", encoding="utf-8")
    assert run(broken) == 1
    assert str(broken) in capsys.readouterr().err


def test_address_without_a_source_is_refused(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit):
        main(["--site", str(SITE), "--address", "mqtt://127.0.0.1:1"])
    assert "is not SOURCE=URL" in capsys.readouterr().err
