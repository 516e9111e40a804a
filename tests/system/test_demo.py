"""The README's first command, as a newcomer runs it: the built wheel in a new environment, another folder."""

import json
import os
import re
import shutil
import signal
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import psutil
import pytest

from tests.system.house import ROOT, wait_for

pytestmark = [pytest.mark.slow, pytest.mark.timeout(900)]

LIVE_WITHIN_S = 30.0
ALARM_WITHIN_S = 180.0
ENDED_WITHIN_S = 5.0


@pytest.fixture(scope="module")
def command(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The installed command of a clean clone: committed files only, not editable."""
    folder = tmp_path_factory.mktemp("newcomer")
    clone = folder / "clone"
    subprocess.run(["git", "clone", "-q", str(ROOT), str(clone)], check=True, timeout=60)
    subprocess.run([sys.executable, "-m", "venv", str(folder / "venv")], check=True, timeout=120)
    pip = folder / "venv" / "bin" / "pip"
    environment = {**os.environ, "PIP_CONSTRAINT": str(ROOT / ".ci" / "constraints.txt")}
    subprocess.run([pip, "install", "-q", f"{clone}[demo]"], check=True, timeout=500, env=environment)
    shutil.rmtree(clone)
    return folder / "venv" / "bin" / "throwline"


class Demo:
    def __init__(self, command: Path, folder: Path, *words: str) -> None:
        self.output = folder / "demo.txt"
        self.started = time.monotonic()
        with self.output.open("wb") as sink:
            # A session of its own, as a terminal gives it.
            self.process = subprocess.Popen(
                [command, "demo", *words],
                cwd=folder,
                stdout=sink,
                stderr=subprocess.STDOUT,
                start_new_session=True,
            )

    def text(self) -> str:
        return self.output.read_text(encoding="utf-8", errors="replace")

    @property
    def elapsed(self) -> float:
        return time.monotonic() - self.started

    def address(self) -> str:
        found = re.search(r"http://127\.0\.0\.1:\d+/", self.text())
        return found.group(0) if found else ""

    def blob(self) -> dict[str, Any]:
        try:
            with urllib.request.urlopen(self.address() + "api/live", timeout=5) as answer:
                return dict(json.loads(answer.read()))
        except (urllib.error.URLError, ValueError):
            return {}

    def family(self) -> list[psutil.Process]:
        root = psutil.Process(self.process.pid)
        return [root, *root.children(recursive=True)]


@pytest.fixture(scope="module")
def demo(command: Path, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Demo]:
    made = Demo(command, tmp_path_factory.mktemp("elsewhere"))
    yield made
    if made.process.poll() is None:
        made.process.kill()


def test_live_numbers_of_every_unit_soon_after_installing(demo: Demo) -> None:
    wait_for("the address", demo.address, LIVE_WITHIN_S)
    ratio = "stage1.stage_ratio"
    units = wait_for(
        "live numbers",
        lambda: (
            (found := demo.blob().get("units"))
            and all(ratio in u["values"] for u in found.values())
            and found
        ),
        max(1.0, LIVE_WITHIN_S - demo.elapsed),
    )
    assert demo.elapsed <= LIVE_WITHIN_S
    print(f"live numbers of {', '.join(units)} {demo.elapsed:.1f} s after the command")


def test_first_alarm_within_three_minutes(demo: Demo) -> None:
    wait_for("the first alarm", lambda: demo.blob().get("alarms"), ALARM_WITHIN_S - demo.elapsed)
    assert demo.elapsed <= ALARM_WITHIN_S
    print(f"first alarm {demo.elapsed:.1f} s after the command")


def test_nothing_listens_outside_loopback(demo: Demo) -> None:
    listening = [
        connection.laddr.ip
        for process in demo.family()
        for connection in process.net_connections("inet")
        if connection.status == psutil.CONN_LISTEN
    ]
    assert len(listening) >= 3
    assert set(listening) == {"127.0.0.1"}


def test_interrupt_ends_everything_within_five_seconds(demo: Demo) -> None:
    family = demo.family()
    data = Path(re.search(r"^Data: (\S+)", demo.text(), re.MULTILINE).group(1))  # type: ignore[union-attr]
    assert data.is_dir()
    # A terminal signals its whole foreground group.
    os.killpg(demo.process.pid, signal.SIGINT)
    asked = time.monotonic()
    _, alive = psutil.wait_procs(family, timeout=ENDED_WITHIN_S)
    took = time.monotonic() - asked
    assert alive == []
    assert demo.process.wait(1) == 0
    assert not data.exists()
    print(f"all {len(family)} processes ended {took:.1f} s after the interrupt")


def test_ports_in_use_are_passed_over(command: Path, tmp_path: Path) -> None:
    """Two demos side by side: the second takes other ports."""
    first = Demo(command, tmp_path)
    try:
        wait_for("the first", first.address, 60)
        (tmp_path / "second").mkdir()
        second = Demo(command, tmp_path / "second")
        try:
            wait_for("the second", second.address, 60)
            assert second.address() != first.address()
            wait_for("numbers of both", lambda: first.blob().get("units") and second.blob().get("units"), 30)
        finally:
            second.process.send_signal(signal.SIGTERM)
            second.process.wait(15)
    finally:
        first.process.send_signal(signal.SIGTERM)
        first.process.wait(15)


def test_killed_demo_leaves_nothing_running(command: Path, tmp_path: Path) -> None:
    """SIGKILL of the parent: the children notice and end."""
    made = Demo(command, tmp_path)
    wait_for("the address", made.address, 60)
    family = made.family()
    assert len(family) >= 5
    made.process.kill()
    made.process.wait(5)
    _, alive = psutil.wait_procs(family, timeout=10)
    assert alive == []
