"""Children of the demo end with their parent, whatever ends it."""

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import psutil
import pytest

from simulator.children import ENDING_S, Children

SLEEPER = """
import signal, sys, time
print("ready", flush=True)
time.sleep(600)
"""
STUBBORN = """
import signal, sys, time
signal.signal(signal.SIGTERM, signal.SIG_IGN)
print("ready", flush=True)
time.sleep(600)
"""
POLITE = """
import signal, sys, time
def end(*_):
    print("asked to end", flush=True)
    sys.exit(0)
signal.signal(signal.SIGTERM, end)
print("ready", sys.argv[0], *sys.argv[1:], flush=True)
time.sleep(600)
"""
FAILING = """
import sys
print("about to fail", flush=True)
sys.exit("no luck")
"""

posix = pytest.mark.skipif(os.name != "posix", reason="signals of POSIX")


def until(ready: Callable[[], object], seconds: float = 15.0) -> None:
    end = time.monotonic() + seconds
    while not ready():
        assert time.monotonic() < end, "not in time"
        time.sleep(0.02)


@pytest.fixture
def environment(tmp_path: Path) -> dict[str, str]:
    for name, text in (
        ("sleeper", SLEEPER),
        ("stubborn", STUBBORN),
        ("polite", POLITE),
        ("failing", FAILING),
    ):
        (tmp_path / f"{name}_child.py").write_text(text, encoding="utf-8")
    return {"PYTHONPATH": str(tmp_path), "PYTHONUNBUFFERED": "1"}


def test_child_is_run_as_by_python_m_with_its_words(environment: dict[str, str]) -> None:
    with Children(environment) as children:
        child = children.start("polite", ("polite_child", "one", "two"))
        until(lambda: child.line_with("ready"))
        words = str(child.line_with("ready")).split()
    assert words[1].endswith("polite_child.py")
    assert words[2:] == ["one", "two"]


@posix
def test_leaving_the_block_asks_each_child_and_waits_for_its_last_words(environment: dict[str, str]) -> None:
    with Children(environment) as children:
        child = children.start("polite", ("polite_child",))
        until(lambda: child.line_with("ready"))
    assert child.line_with("asked to end") == "asked to end"
    death = child.death()
    assert death is not None
    assert death.code == 0


def test_child_that_does_not_listen_is_ended_in_time(environment: dict[str, str]) -> None:
    with Children(environment) as children:
        child = children.start("stubborn", ("stubborn_child",))
        until(lambda: child.line_with("ready"))
        asked = time.monotonic()
    assert time.monotonic() - asked < ENDING_S + 1.0
    assert not psutil.pid_exists(child.pid)


def test_death_is_told_with_name_code_and_last_lines(environment: dict[str, str]) -> None:
    with Children(environment) as children:
        children.start("sleeper", ("sleeper_child",))
        children.start("failing", ("failing_child",))
        until(children.death)
        death = children.death()
    assert death is not None
    assert (death.name, death.code) == ("failing", 1)
    assert death.last_lines == ("about to fail", "no luck")


PARENT = """
import sys, time
from simulator.children import Children
with Children({}) as children:
    made = [children.start(n, (n + "_child",)) for n in ("sleeper", "stubborn", "polite")]
    while not all(c.line_with("ready") for c in made):
        time.sleep(0.02)
    print(*[c.pid for c in made], flush=True)
    time.sleep(600)
"""


@posix
def test_no_child_outlives_a_parent_that_is_killed(environment: dict[str, str]) -> None:
    parent = subprocess.Popen(
        [sys.executable, "-c", PARENT], stdout=subprocess.PIPE, text=True, env={**os.environ, **environment},
        cwd=Path(__file__).resolve().parents[2],
    )  # fmt: skip
    assert parent.stdout is not None
    pids = [int(word) for word in parent.stdout.readline().split()]
    assert len(pids) == 3
    assert all(psutil.pid_exists(pid) for pid in pids)
    parent.send_signal(signal.SIGKILL)
    parent.wait(10)
    parent.stdout.close()
    until(lambda: not any(_runs(pid) for pid in pids), 10.0)


def _runs(pid: int) -> bool:
    try:
        return psutil.Process(pid).status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False
