"""The scorer on a written journal, as a command."""

from datetime import UTC, datetime
from pathlib import Path

import pytest

from agent.journal.sqlite import JournalWriter
from agent.records import AlarmEvent, AlarmState, EventKind
from tests import scoring

BEGAN = 1_800_000_000
UNITS = ("K-110", "K-220", "K-330")


def written(folder: Path, judged_s: int, *events: AlarmEvent, blind: str = "") -> Path:
    writer = JournalWriter(folder / "journal.db")
    writer.open()
    writer.append(events, {u: BEGAN + judged_s for u in UNITS if u != blind})
    writer.close()
    return folder


def run(data: Path) -> int:
    began = datetime.fromtimestamp(BEGAN, UTC).isoformat()
    return scoring.main([str(data), "wrong-ends", "--began", began])


REVERSAL = AlarmEvent(
    unit="K-220", alarm="reversal", tick=BEGAN + 121, kind=EventKind.RAISED,
    state=AlarmState.UNACKNOWLEDGED, text="", subject="cylinder4",
)  # fmt: skip


def test_journal_of_an_agent_that_said_it_passes(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(written(tmp_path, 200, REVERSAL)) == 0
    assert "wrong-ends  passed" in capsys.readouterr().out


def test_journal_of_a_silent_agent_fails(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(written(tmp_path, 200)) == 1
    assert "missed" in capsys.readouterr().out


@pytest.mark.parametrize("blind", UNITS)
def test_agent_that_looked_away_passes_nothing(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], blind: str
) -> None:
    assert run(written(tmp_path, 200, REVERSAL, blind=blind)) == 1
    assert "run too short" in capsys.readouterr().out


def test_beginning_without_a_zone_is_refused(tmp_path: Path) -> None:
    with pytest.raises(SystemExit):
        scoring.main([str(written(tmp_path, 200)), "wrong-ends", "--began", "2027-01-15T08:00:00"])
