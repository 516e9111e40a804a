"""The demo: ports, programs, what it prints, and how it ends. The whole product runs in tests/system."""

import http.server
import json
import signal
import socket
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from simulator import demo
from simulator.demo import Ports, Program, choose_ports, programs, run

PORTS = Ports(mqtt=11, opcua=22, page=33)


@contextmanager
def listening(host: str = "127.0.0.1") -> Iterator[int]:
    with socket.socket() as taken:
        taken.bind((host, 0))
        taken.listen()
        yield int(taken.getsockname()[1])


def test_usual_ports_are_taken_where_they_are_free(monkeypatch: pytest.MonkeyPatch) -> None:
    with listening() as a, listening() as b, listening() as c:
        pass  # three ports that were free a moment ago
    monkeypatch.setattr(demo, "MQTT_PORT", a)
    monkeypatch.setattr(demo, "OPCUA_PORT", b)
    assert choose_ports(c) == Ports(mqtt=a, opcua=b, page=c)


@pytest.mark.parametrize("host", ["127.0.0.1", "0.0.0.0"])
def test_taken_ports_are_replaced_by_free_ones_all_different(
    monkeypatch: pytest.MonkeyPatch, host: str
) -> None:
    with listening(host) as a, listening(host) as b, listening(host) as c:
        monkeypatch.setattr(demo, "MQTT_PORT", a)
        monkeypatch.setattr(demo, "OPCUA_PORT", b)
        chosen = choose_ports(c)
        found = {chosen.mqtt, chosen.opcua, chosen.page}
        assert len(found) == 3
        assert not found & {a, b, c}
    for port in found:
        with socket.socket() as probe:
            probe.bind(("127.0.0.1", port))


def test_programs_meet_on_the_chosen_ports_and_nowhere_but_loopback(tmp_path: Path) -> None:
    wanted = {p.name: p.words for p in programs(PORTS, Path("site.yaml"), tmp_path, 2.0)}
    assert wanted["broker"] == ("simulator.broker_main", "--port", "11")
    assert wanted["agent"][:5] == ("agent", "agent", "site.yaml", "--data", str(tmp_path))
    assert wanted["dashboard"] == ("agent", "dashboard", "site.yaml", "--data", str(tmp_path), "--port", "33")
    assert "--pace" in wanted["plant"]
    for name in ("plant", "agent"):
        assert "field-bus=mqtt://127.0.0.1:11" in wanted[name]
        assert "field-gateway=mqtt://127.0.0.1:11" in wanted[name]
        assert "control-system=opc.tcp://127.0.0.1:22/ostmere" in wanted[name]


def test_plant_tells_the_story_asked_for(tmp_path: Path) -> None:
    plant = {p.name: p.words for p in programs(PORTS, Path("site.yaml"), tmp_path, 2.0, "quiet")}["plant"]
    assert plant[plant.index("--scenario") + 1] == "quiet"


def test_unknown_story_is_one_sentence_that_names_the_known(capsys: pytest.CaptureFixture[str]) -> None:
    assert run(story="once upon a time") == 1
    said = capsys.readouterr().err
    assert len(said.splitlines()) == 1
    assert all(name in said for name in ("first-light", "hidden-leak", "clean-month"))


def test_missing_extra_is_one_sentence(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(demo, "find_spec", lambda _: None)
    assert run() == 1
    said = capsys.readouterr().err
    assert "pip install 'throwline[demo]'" in said
    assert len(said.splitlines()) == 1


class _Health(http.server.BaseHTTPRequestHandler):
    status = 200

    def do_GET(self) -> None:
        self.send_response(self.status if self.path == "/healthz" else 404)
        self.end_headers()

    def log_message(self, *_: object) -> None:
        pass


@contextmanager
def page() -> Iterator[Ports]:
    server = http.server.ThreadingHTTPServer(("127.0.0.1", 0), _Health)
    thread = threading.Thread(target=server.serve_forever)
    thread.start()
    try:
        yield Ports(mqtt=1, opcua=2, page=server.server_address[1])
    finally:
        server.shutdown()
        server.server_close()
        thread.join()


STORY = {
    "timetable": [[1_800_000_000.0, "K-110: something"]],
    "time_zone": "Asia/Kolkata",
    "repeats_after_s": 720.0,
}


@pytest.fixture
def stand_ins(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> tuple[Program, ...]:
    (tmp_path / "plant_stand_in.py").write_text(
        f"import time\nprint('plant up')\nprint({json.dumps(json.dumps(STORY))})\ntime.sleep(600)\n",
        encoding="utf-8",
    )
    (tmp_path / "failing_stand_in.py").write_text("import sys\nsys.exit('cannot go on')\n", encoding="utf-8")
    monkeypatch.setenv("PYTHONPATH", str(tmp_path))
    return (Program(name="plant", words=("plant_stand_in",)),)


@pytest.fixture
def clock_here_is_utc() -> Iterator[None]:
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("TZ", "UTC")
        time.tzset()
        yield
    time.tzset()


@pytest.mark.usefixtures("clock_here_is_utc")
def test_live_page_is_told_with_address_timetable_and_mark_and_ctrl_c_ends_all(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], stand_ins: tuple[Program, ...]
) -> None:
    folders: list[Path] = []

    def wanted(ports: Ports, site: Path, data: Path, pace: float, story: str) -> tuple[Program, ...]:
        assert story == "first-light"
        assert site.name == "ostmere.yaml"
        assert data.is_dir()
        folders.append(data)
        return stand_ins

    with page() as ports:
        monkeypatch.setattr(demo, "programs", wanted)
        monkeypatch.setattr(demo, "choose_ports", lambda _: ports)
        said: list[str] = []

        def say(line: str) -> None:
            said.append(line)
            if "Ctrl-C ends everything" in line:
                said.append(f"at {time.monotonic()}")
                signal.raise_signal(signal.SIGINT)

        monkeypatch.setattr(demo, "_say", say)
        assert run(port=ports.page) == 0
    text = "\n".join(said)
    assert "INVENTED plant" in text
    assert f"{ports.url}/" in text
    # hand: 1.8e9 s is 08:00:00 UTC, five and a half hours more at this site; the clock here is set to UTC
    assert "13:30:00 (08:00:00)  K-110: something" in text
    assert "the same again every 12 minutes" in text
    assert said[-1] == "All ended."
    assert not folders[0].exists()
    asked = float(next(line for line in said if line.startswith("at ")).removeprefix("at "))
    assert time.monotonic() - asked < 5.0


def test_page_that_is_not_live_is_not_told(monkeypatch: pytest.MonkeyPatch) -> None:
    with page() as ports:
        assert demo._is_live(ports.url)
        monkeypatch.setattr(_Health, "status", 503)
        assert not demo._is_live(ports.url)
    assert not demo._is_live(ports.url)


def test_child_that_dies_ends_the_demo_with_its_last_words(
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
    stand_ins: tuple[Program, ...],
    tmp_path: Path,
) -> None:
    both = (*stand_ins, Program(name="agent", words=("failing_stand_in",)))
    monkeypatch.setattr(demo, "programs", lambda *_: both)
    kept = tmp_path / "kept"
    assert run(keep=kept) == 1
    said = capsys.readouterr().out
    assert "The agent ended by itself (exit code 1)" in said
    assert "cannot go on" in said
    assert kept.is_dir()  # what somebody asked to keep stays


def test_page_that_never_gets_live_ends_the_demo(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], stand_ins: tuple[Program, ...]
) -> None:
    monkeypatch.setattr(demo, "programs", lambda *_: stand_ins)
    monkeypatch.setattr(demo, "LIVE_WITHIN_S", 0.1)
    assert run() == 1
    assert "The page is not live after 0 s; giving up." in capsys.readouterr().out
