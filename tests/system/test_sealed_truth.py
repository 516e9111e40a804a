"""An agent that cannot open the stories says the same as one that could: it has them from the tags alone."""

import subprocess
import sys
import time
from collections import defaultdict
from pathlib import Path

import pytest

from agent.journal.sqlite import JournalReader
from agent.records import AlarmEvent, EventKind
from tests.system.house import ROOT, House, Process, house, quick_alarms, wait_for

CHILD = ROOT / "tests" / "system" / "sealed_child.py"
ALARMS = {("K-110", "gas_load_compression"), ("K-220", "reversal"), ("K-110", "discharge_temperature")}
JITTER_S = 1  # a reading may arrive just before one agent's look and just after the other's

pytestmark = pytest.mark.slow


def _sealed(notes: Path, module: str, *words: str) -> list[str]:
    return [sys.executable, "-P", str(CHILD), str(notes), module, *words]


def _second_site(folder: Path, site: Path) -> Path:
    """The same site, read by an agent with client ids of its own."""
    text = site.read_text(encoding="utf-8")
    for mine in ("throwline-ostmere\n", "throwline-ostmere-gateway\n"):
        assert mine in text
        text = text.replace(mine, mine.replace("throwline", "sealed"))
    path = folder / "second.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def _events(journal: Path) -> tuple[AlarmEvent, ...]:
    if not journal.exists():
        return ()
    reader = JournalReader(journal)
    try:
        return reader.events()
    finally:
        reader.close()


def _judged(journal: Path) -> int:
    """Up to where every unit's alarms are judged."""
    reader = JournalReader(journal)
    try:
        return min(reader.last_tick(unit) or 0 for unit in ("K-110", "K-220", "K-330"))
    finally:
        reader.close()


def _raised(journal: Path) -> set[tuple[str, str]]:
    return {(e.unit, e.alarm) for e in _events(journal) if e.kind is EventKind.RAISED}


def _ticks(events: tuple[AlarmEvent, ...], until: int) -> dict[tuple[str, str, str], list[int]]:
    found: dict[tuple[str, str, str], list[int]] = defaultdict(list)
    for event in events:
        if event.tick <= until:
            found[event.unit, event.alarm, event.kind.value].append(event.tick)
    return dict(found)


def _told(built: House) -> tuple[Path, Path, Path]:
    """Tell first light to both agents until each has raised three alarms; both journals and the notes."""
    second = _second_site(built.folder, built.site)
    data = built.folder / "second"
    notes = built.folder / "notes.txt"
    command = _sealed(notes, "agent", "agent", str(second), "--data", str(data), *built.wires.arguments())
    built.mosquitto()
    built.agent()
    sealed = Process("sealed", command, built.folder).start()
    built.processes.append(sealed)
    for folder in (built.data, data):
        wait_for(f"journal of {folder.name}", (folder / "journal.db").exists, 60)
    built.plant("--pace", "4")
    journals = (built.data / "journal.db", data / "journal.db")
    wait_for("three alarms of both", lambda: all(_raised(j) >= ALARMS for j in journals), 150)
    time.sleep(3.0)
    return (*journals, notes)


@pytest.mark.mosquitto
@pytest.mark.timeout(400)
def test_sealed_agent_says_the_same_at_the_same_seconds(tmp_path: Path) -> None:
    with house(tmp_path, site=quick_alarms(tmp_path)) as built:
        free, sealed, notes = _told(built)
        assert all(p.running for p in built.processes), [p.text() for p in built.processes if not p.running]
    mine, theirs = _events(free), _events(sealed)
    until = min(_judged(free), _judged(sealed)) - JITTER_S
    first, second = _ticks(mine, until), _ticks(theirs, until)
    assert {(unit, alarm) for unit, alarm, _ in first} >= ALARMS
    assert first.keys() == second.keys()
    apart = [abs(a - b) for key in first for a, b in zip(first[key], second[key], strict=True)]
    assert max(apart) <= JITTER_S
    print(f"{len(apart)} events of both, {sum(a > 0 for a in apart)} of them a second apart")
    assert notes.read_text() == ""


@pytest.mark.parametrize(
    "attempt",
    [
        "open({path!r})",
        "__import__('pathlib').Path({path!r}).read_text()",
        "__import__('os').listdir({folder!r})",
        "list(__import__('os').scandir({folder!r}))",
        "(__import__('os').chdir({folder!r}), open('quiet.yaml'))",
        "(__import__('os').chdir({folder!r}), __import__('os').listdir())",
    ],
)
@pytest.mark.parametrize("folder", ["truths", "scenarios"])
def test_seal_holds_and_tells(tmp_path: Path, attempt: str, folder: str) -> None:
    home = ROOT / "simulator" / folder
    line = attempt.format(path=str(home / "quiet.yaml"), folder=str(home))
    (tmp_path / "peeping.py").write_text(
        f"try:\n    {line}\nexcept PermissionError:\n    print('refused')\n", encoding="utf-8"
    )
    done = _run(tmp_path, "peeping")
    assert done.stdout == "refused\n", done.stderr
    assert str(home) in (tmp_path / "notes.txt").read_text()


def test_attempt_that_a_library_hushes_up_is_noted(tmp_path: Path) -> None:
    home = ROOT / "simulator" / "truths"
    (tmp_path / "peeping.py").write_text(
        "import contextlib, pathlib\nfound = []\nwith contextlib.suppress(OSError):\n"
        f"    found = list(pathlib.Path({str(home)!r}).glob('*.yaml'))\nprint(found)\n",
        encoding="utf-8",
    )
    assert _run(tmp_path, "peeping").stdout == "[]\n"
    assert str(home) in (tmp_path / "notes.txt").read_text()


def test_seal_leaves_everything_else_alone(tmp_path: Path) -> None:
    (tmp_path / "honest.py").write_text(
        f"open({str(ROOT / 'simulator' / 'sites' / 'ostmere.yaml')!r})\nprint('read')\n", encoding="utf-8"
    )
    done = _run(tmp_path, "honest")
    assert done.stdout == "read\n", done.stderr
    assert (tmp_path / "notes.txt").read_text() == ""


def test_plant_itself_cannot_start_under_the_seal(tmp_path: Path) -> None:
    """Proof on a real program: what needs a story is refused and noted."""
    notes = tmp_path / "notes.txt"
    site = ROOT / "simulator" / "sites" / "ostmere.yaml"
    command = _sealed(notes, "simulator.plant_main", "--site", str(site), "--duration", "1")
    done = subprocess.run(command, capture_output=True, text=True, timeout=100, check=False, cwd=tmp_path)
    assert done.returncode == 1
    assert "first-light.yaml" in notes.read_text()


def _run(folder: Path, module: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        _sealed(folder / "notes.txt", module),
        capture_output=True, text=True, timeout=60, check=False, cwd=folder,
        env={"PATH": "/usr/bin:/bin", "PYTHONPATH": str(folder)},
    )  # fmt: skip
