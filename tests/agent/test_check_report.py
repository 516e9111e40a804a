"""What the check of a site file prints, and how big it says the store will be."""

import io
import sqlite3
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

from agent.check_report import bytes_per_day, report
from agent.records import Commit, DerivedRow, Frame
from agent.siteplan.load import load_site
from agent.siteplan.plan import UnitPlan
from agent.storage.sqlite_series import SeriesWriter

ROOT = Path(__file__).resolve().parents[2]
OSTMERE = ROOT / "simulator" / "sites" / "ostmere.yaml"
MISTAKES = ROOT / "tests" / "config_errors"


def printed(path: Path, width: int = 100) -> tuple[int, str]:
    out = io.StringIO()
    code = report(path, Console(file=out, width=width))
    return code, out.getvalue()


def test_report_of_the_demo_site_says_what_it_holds() -> None:
    code, text = printed(OSTMERE)
    assert code == 0
    lines = [" ".join(line.split()) for line in text.splitlines()]
    assert "Ostmere Works (simulated: an invented plant)" in lines
    # hand: 2 * 0.14 m * 15 / s
    assert "stroke 140 mm, connecting rod 360 mm, rated 900 rpm, mean piston speed there 4.20 m/s" in lines
    # hand: pi/4 * 1.95^2 dm2 * 1.4 dm = 4.181 dm3; less pi/4 * 0.63^2 * 1.4 = 0.436 at the crank end
    assert "1 1 195 mm 63 mm head 4.181 16.0 6.0 6.0" in lines
    assert "crank 3.745 18.0 6.0 6.0" in lines
    assert "cylinder 4 crank loaded loaded held open" in lines
    assert "inputs: 16 from control-system" in lines
    assert "load reversal at the pin, duration every cylinder 40°" in lines
    assert "ostmere.yaml: no faults. 3 units, 38 inputs, 66 limits, 1 notice." in lines
    assert not any("no limit entered" in line for line in lines)


def test_report_names_every_limit_that_is_not_entered() -> None:
    _, text = printed(MISTAKES / "no_mistake.yaml")
    listed = text.split("no limit entered, hence no margin and no alarm:")[1].split("Notices")[0]
    assert [" ".join(line.split()) for line in listed.strip().splitlines()] == [
        "- discharge temperature: stage 1",
        "- gas load, compression: cylinder 1",
        "- combined load at the pin, tension: cylinder 1",
        "- combined load at the pin, compression: cylinder 1",
        "- load reversal at the pin, duration: cylinder 1",
    ]


def test_report_of_a_faulty_file_is_its_faults_one_a_line() -> None:
    path = MISTAKES / "six_mistakes.yaml"
    code, text = printed(path, width=40)
    assert code == 1
    assert len(text.splitlines()) == 7
    assert f"  {path}:37: units[0].stages[0].cylinders[0].rod: " in text


@pytest.mark.parametrize("unit_id", ["K-110", "K-220", "K-330"])
def test_projected_store_size_is_that_of_a_real_store(tmp_path: Path, unit_id: str) -> None:
    plan = load_site(OSTMERE).unit(unit_id)
    measured = _bytes_per_row_pair(tmp_path / "series.db", plan)
    # 5 %: what pages leave unused depends on how rows happen to fill them.
    assert sum(bytes_per_day(plan)) / 86_400 == pytest.approx(measured, rel=0.05)


def _bytes_per_row_pair(path: Path, plan: UnitPlan) -> float:
    inputs, results = plan.input_names(), plan.result_names()
    writer = SeriesWriter(path)
    writer.open()
    writer.register(plan.id, [(n, "1") for n in inputs], [(n, "1") for n in results])
    configuration = writer.configuration("digest", "text", 0.0)
    sizes = []
    for block in range(2):
        ticks = range(1_760_000_000 + 600 * block, 1_760_000_600 + 600 * block)
        frames = [
            Frame(
                unit=plan.id,
                tick=tick,
                values=np.ones(len(inputs), np.float32),
                quality=np.zeros(len(inputs), np.uint8),
                ages=np.ones(len(inputs), np.float32),
            )
            for tick in ticks
        ]
        rows = [
            DerivedRow(
                unit=plan.id,
                tick=tick,
                configuration=configuration,
                values=np.ones(len(results), np.float32),
                quality=np.zeros(len(results), np.uint8),
            )
            for tick in ticks
        ]
        writer.commit(Commit(frames=frames, derived=rows, sources=[]))
        with closing(sqlite3.connect(path)) as connection:
            pages = connection.execute("PRAGMA page_count").fetchone()[0]
            sizes.append(int(pages) * int(connection.execute("PRAGMA page_size").fetchone()[0]))
    writer.close()
    return (sizes[1] - sizes[0]) / 600
