"""The demo: an invented plant, the agent and the pages as processes on this machine, loopback only.

It imports none of them. It starts them, waits for the page to be live, prints what will happen when, and ends
all of them when it is asked to end or when one of them dies.
"""

import json
import shutil
import signal
import socket
import sys
import tempfile
import threading
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from datetime import datetime
from importlib.resources import files
from importlib.util import find_spec
from pathlib import Path
from types import FrameType
from typing import Any
from zoneinfo import ZoneInfo

from simulator.broker_main import MISSING
from simulator.children import Child, Children, Death

MQTT_PORT, OPCUA_PORT, PAGE_PORT = 1883, 4840, 8050  # the usual ones
LIVE_WITHIN_S = 180.0
STORY = "first-light"
ENVIRONMENT = {"OPENBLAS_NUM_THREADS": "1", "PYTHONUNBUFFERED": "1"}
MARK = (
    "Ostmere Works is an INVENTED plant: its machines, people and numbers are made up.\n"
    "The tool is advisory; protection stays with the plant's own systems."
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Ports:
    mqtt: int
    opcua: int
    page: int

    @property
    def addresses(self) -> list[str]:
        return [
            "--address",
            f"field-bus=mqtt://127.0.0.1:{self.mqtt}",
            "--address",
            f"field-gateway=mqtt://127.0.0.1:{self.mqtt}",
            "--address",
            f"control-system=opc.tcp://127.0.0.1:{self.opcua}/ostmere",
        ]

    @property
    def url(self) -> str:
        return f"http://127.0.0.1:{self.page}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Program:
    """A child by its name, and the words after ``python -m``."""

    name: str
    words: tuple[str, ...]


def stories() -> tuple[str, ...]:
    """Names of the stories that the plant can tell."""
    found = (Path(str(entry)) for entry in (files("simulator") / "scenarios").iterdir())
    return tuple(sorted(path.stem for path in found if path.suffix == ".yaml"))


def programs(ports: Ports, site: Path, data: Path, pace: float, story: str = STORY) -> tuple[Program, ...]:
    """What the demo starts, in this order."""
    told = ("--scenario", story, "--pace", f"{pace:g}", "--timetable")
    plant = ("--site", str(site), *told, *ports.addresses)
    store = (str(site), "--data", str(data))
    return (
        Program(name="broker", words=("simulator.broker_main", "--port", str(ports.mqtt))),
        Program(name="plant", words=("simulator.plant_main", *plant)),
        Program(name="agent", words=("agent", "agent", *store, *ports.addresses)),
        Program(name="dashboard", words=("agent", "dashboard", *store, "--port", str(ports.page))),
    )


def choose_ports(page: int = PAGE_PORT) -> Ports:
    """The usual ports, or free ones where those are taken."""
    with ExitStack() as held:
        chosen = [usual if _is_free(usual) else _hold_free(held) for usual in (MQTT_PORT, OPCUA_PORT, page)]
    return Ports(mqtt=chosen[0], opcua=chosen[1], page=chosen[2])


def _is_free(port: int) -> bool:
    with socket.socket() as probe:
        probe.settimeout(0.5)
        if probe.connect_ex(("127.0.0.1", port)) == 0:
            return False
    with socket.socket() as probe:
        if sys.platform != "win32":  # there it would mean something else
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            probe.bind(("127.0.0.1", port))
        except OSError:
            return False
    return True


def _hold_free(held: ExitStack) -> int:
    """A free port, held until all are chosen so that no two are alike."""
    probe = held.enter_context(socket.socket())
    probe.bind(("127.0.0.1", 0))
    return int(probe.getsockname()[1])


def run(*, story: str = STORY, pace: float = 1.0, port: int = PAGE_PORT, keep: Path | None = None) -> int:
    """Run the demo until Ctrl-C or SIGTERM.

    Parameters
    ----------
    story : str
        Name of one of `stories`.
    pace : float
        How many times faster the story runs [1].
    port : int
        Port of the pages; a free one is taken if it is in use.
    keep : Path or None
        Folder that keeps the data; None: a temporary folder, removed at the end.

    Returns
    -------
    int
        0 if it ended as asked, 1 if something could not start or died.
    """
    if find_spec("amqtt") is None:
        print(f"throwline demo: {MISSING}", file=sys.stderr)  # noqa: T201
        return 1
    if story not in stories():
        known = ", ".join(stories())
        print(f"throwline demo: there is no story {story!r}; there are: {known}", file=sys.stderr)  # noqa: T201
        return 1
    ports = choose_ports(port)
    site = Path(str(files("simulator") / "sites" / "ostmere.yaml"))
    with _asked_to_end() as stop, _data_folder(keep) as data:
        _say(MARK)
        _say(f"Data: {data}" + ("" if keep else "  (removed at the end)"))
        if ports.page != port:
            _say(f"Port {port} is in use; the pages get port {ports.page}.")
        return _watch(programs(ports, site, data, pace, story), ports, stop)


def _watch(wanted: tuple[Program, ...], ports: Ports, stop: threading.Event) -> int:
    with Children(ENVIRONMENT) as children:
        begun = time.monotonic()
        started = {p.name: children.start(p.name, p.words) for p in wanted}
        _say(f"Starting {', '.join(started)} ...")
        told_address = False
        while not stop.wait(0.25):
            if (death := children.death()) is not None:
                _tell_death(death)
                return 1
            if told_address:
                continue
            waited = time.monotonic() - begun
            table = started["plant"].line_with("{")
            if table is not None and _is_live(ports.url):
                _tell(ports.url, waited, json.loads(table))
                told_address = True
            elif waited > LIVE_WITHIN_S:
                _tell_late(started)
                return 1
        _say("Ending ...")
    _say("All ended.")
    return 0


@contextmanager
def _asked_to_end() -> Iterator[threading.Event]:
    """An event set by Ctrl-C, by SIGTERM or by a terminal that closes."""
    stop = threading.Event()

    def note(number: int, frame: FrameType | None) -> None:
        del number, frame
        stop.set()

    names = [n for n in ("SIGINT", "SIGTERM", "SIGHUP", "SIGBREAK") if hasattr(signal, n)]
    before = {n: signal.signal(getattr(signal, n), note) for n in names}
    try:
        yield stop
    finally:
        for name, handler in before.items():
            signal.signal(getattr(signal, name), handler)


@contextmanager
def _data_folder(keep: Path | None) -> Iterator[Path]:
    if keep is not None:
        keep.mkdir(parents=True, exist_ok=True)
        yield keep.resolve()
        return
    folder = Path(tempfile.mkdtemp(prefix="throwline-demo-"))
    try:
        yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _is_live(url: str) -> bool:
    # No proxy of the environment may stand between this machine and itself.
    direct = urllib.request.build_opener(urllib.request.ProxyHandler({}))
    try:
        with direct.open(f"{url}/healthz", timeout=2) as answer:
            return bool(answer.status == 200)
    except (OSError, ValueError):
        return False


def _tell(url: str, waited_s: float, story: dict[str, Any]) -> None:
    _say(f"\nLive numbers of all units after {waited_s:.0f} s:  {url}/\n")
    site = ZoneInfo(story["time_zone"])
    rows = [(datetime.fromtimestamp(at, site), text) for at, text in story["timetable"]]
    differs = any(at.utcoffset() != at.astimezone().utcoffset() for at, _ in rows)
    _say(
        "What will happen (site time, as on the pages"
        + ("; the clock here in brackets):" if differs else "):")
    )
    for at, text in rows:
        here = f" ({at.astimezone():%H:%M:%S})" if differs else ""
        _say(f"  {at:%H:%M:%S}{here}  {text}")
    if story["repeats_after_s"] is not None:
        _say(f"  and the same again every {story['repeats_after_s'] / 60:.0f} minutes.")
    _say("\nCtrl-C ends everything.")


def _tell_late(started: dict[str, Child]) -> None:
    _say(f"The page is not live after {LIVE_WITHIN_S:.0f} s; giving up.")
    for name, child in started.items():
        if (last := child.line_with("")) is not None:
            _say(f"  {name}: {last}")


def _tell_death(death: Death) -> None:
    _say(f"\nThe {death.name} ended by itself (exit code {death.code}); ending all. Its last lines:")
    for line in death.last_lines:
        _say(f"  {line}")


def _say(line: str) -> None:
    print(line, flush=True)  # noqa: T201
