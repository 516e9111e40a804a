"""A short history: its files, its digits, its truth apart, and no formula of the model behind it."""

import json
import os
import subprocess
import sys
from dataclasses import replace
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq
import pytest

# Machine code of the plant is kept between test runs; a change of its sources makes it anew.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))


from simulator import history
from simulator.course import Course, FaultCourse, Leg, UnitCourse
from simulator.faults import FaultKind
from simulator.history import HistoryError, Progress, Wish, digest, wish_for, write_history
from simulator.history_files import HistoryFileError, need_arrow, rounded_row
from simulator.history_minutes import Setting, minutes_of
from simulator.history_tables import codes
from simulator.instruments import rounded
from simulator.ordinary_life import HABITS, QUIET, ordinary_course, slow_wave
from simulator.ostmere import USUAL
from simulator.plant_main import scenario_path
from simulator.weather import DAY_S

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"
STOPPED = """title: a stop
changes:
  - {at: 30 min, unit: K-110, variable: running, to: false}
  - {at: 75 min, unit: K-110, variable: running, to: true}
instruments:
  - {at: 10 min, unit: K-110, tag: PT-1101, fault: bad quality, to: true}
  - {at: 20 min, unit: K-110, tag: PT-1101, fault: bad quality, to: false}
"""


@pytest.fixture(scope="module", name="wish")
def make_wish(tmp_path_factory: pytest.TempPathFactory) -> Wish:
    folder = tmp_path_factory.mktemp("history")
    story = folder / "a-stop.yaml"
    story.write_text(STOPPED)
    return wish_for(SITE, days=1 / 12, scenario=str(story), seed=3, units=["K-110"], cache=folder / "cache")


@pytest.fixture(scope="module", name="out")
def make_out(wish: Wish, tmp_path_factory: pytest.TempPathFactory) -> Path:
    out = tmp_path_factory.mktemp("out")
    write_history(wish, out, Progress())
    return out


@pytest.fixture(scope="module", name="table")
def read_table(out: Path) -> pa.Table:
    return pq.read_table(out / "K-110.parquet")


def test_a_history_has_a_row_a_minute_and_a_column_a_tag(wish: Wish, table: pa.Table) -> None:
    assert table.num_rows == 120
    names = [name for tag in wish.units[0].inputs for name in (tag.tag, f"{tag.tag}.quality")]
    assert table.column_names == ["time", *names, "simulated"]
    assert table["time"][0].as_py() == datetime(2025, 1, 1, tzinfo=UTC)
    assert table["time"][119].as_py() == datetime(2025, 1, 1, 1, 59, tzinfo=UTC)


def test_every_file_says_that_it_is_simulated(out: Path, table: pa.Table) -> None:
    assert set(table["simulated"].to_pylist()) == {True}
    about = {k.decode(): v.decode() for k, v in table.schema.metadata.items() if not k.startswith(b"ARROW")}
    assert about["throwline"].startswith("SIMULATED")
    assert (about["seed"], about["scenario"], about["site"]) == ("3", "a-stop", "Ostmere Works")
    assert pq.read_schema(out / "truth" / "K-110.parquet").metadata[b"throwline"].startswith(b"SIMULATED")
    assert json.loads((out / "history.json").read_text())["throwline"].startswith("SIMULATED")


def test_the_csv_twin_says_the_same_with_the_senders_digits(out: Path, table: pa.Table) -> None:
    text = (out / "K-110.csv").read_text().splitlines()
    twin = pc.read_csv(out / "K-110.csv")
    assert twin.num_rows == 120
    for name in ("PT-1101", "TT-1102", "ST-1101", "FT-1101"):
        ours, theirs = (np.array(t[name].to_pylist(), dtype=float) for t in (table, twin))
        np.testing.assert_array_equal(ours, theirs)
    first = dict(zip(text[0].replace('"', "").split(","), text[1].split(","), strict=True))
    assert len(first["PT-1101"].split(".")[1]) == 2  # hand: hundredths of a bar
    assert len(first["TT-1102"].split(".")[1]) == 1
    assert "." not in first["FT-1101"]


def test_the_truth_lies_apart(out: Path, table: pa.Table) -> None:
    truth = pq.read_table(out / "truth" / "K-110.parquet")
    assert truth.num_rows == table.num_rows
    assert {"true cylinder1.reversal_rad", "around suction_pressure_pa"} <= set(truth.column_names)
    shown = set(table.column_names) | set(json.loads((out / "history.json").read_text()))
    assert not [name for name in shown if name.startswith(("true", "around", "fault", "sealed"))]


def test_a_stopped_unit_shows_it_and_comes_back(table: pa.Table) -> None:
    running = np.array(table["XS-1101"].to_pylist())
    assert running[:30].all()
    assert not running[30:75].any()
    assert running[75:].all()
    speed, flow, outlet, warm = (
        np.array(table[tag].to_pylist(), dtype=float) for tag in ("ST-1101", "FT-1101", "PT-1102", "TT-1102")
    )
    assert (speed[31:75] < 1.0).all()
    assert (flow[32:75] < 100.0).all()
    assert outlet[60] < outlet[20] - 10.0  # settled out
    assert warm[74] < warm[20] - 30.0  # cooled
    assert warm[119] > warm[20] - 5.0  # warm again


def test_a_bad_reading_has_no_value_and_its_quality_says_so(table: pa.Table) -> None:
    values, quality = table["PT-1101"].to_pylist(), table["PT-1101.quality"].to_pylist()
    assert quality[10:20] == [2] * 10
    assert set(quality[:10]) | set(quality[20:]) == {0}
    assert values[10:20] == [None] * 10
    assert None not in values[20:]


def test_a_history_is_the_same_each_time(wish: Wish) -> None:
    assert digest(wish) == digest(wish)


@pytest.mark.slow
def test_a_history_is_its_seed(wish: Wish) -> None:
    assert digest(replace(wish, seed=4)) != digest(wish)


def test_chunks_do_not_show(wish: Wish, monkeypatch: pytest.MonkeyPatch) -> None:
    whole = [c.shown for c in history.unit_chunks(wish, wish.units[0], Progress(), {})]
    monkeypatch.setattr(history, "CHUNK", 41)
    parts = [c.shown for c in history.unit_chunks(wish, wish.units[0], Progress(), {})]
    assert (len(whole), len(parts)) == (1, 3)
    for tag, row in whole[0].items():
        joined = np.concatenate([np.asarray(p[tag]) for p in parts])
        np.testing.assert_array_equal(np.asarray(row), joined)


def test_rounding_of_a_row_is_that_of_each() -> None:
    values = np.array([29.084999, -1.005, 658.5, 0.05])
    for unit in ("barg", "degC", "kW", "word"):
        np.testing.assert_array_equal(rounded_row(values, unit), [rounded(float(v), unit) for v in values])


def test_a_missing_library_is_told_in_one_sentence(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    with pytest.raises(HistoryFileError, match="extra 'history'"):
        need_arrow()


def test_an_unknown_unit_and_no_days_are_refused() -> None:
    with pytest.raises(HistoryError, match="K-999"):
        wish_for(SITE, days=1, units=["K-999"])
    with pytest.raises(HistoryError, match="no history"):
        wish_for(SITE, days=0)


# --- minutes


def setting(course: UnitCourse, seed: int = 1, *, quiet: bool = True) -> Setting:
    plan = wish_for(SITE, days=1, units=["K-330"]).units[0]
    habits = QUIET if quiet else HABITS["K-330"]
    return Setting(plan=plan, usual=USUAL["K-330"], course=course, habits=habits, seed=seed)


def test_orders_and_faults_of_a_course_fall_on_their_minutes() -> None:
    course = UnitCourse(
        load_steps=((600.0, "50"), (1200.0, "100")),
        running=((1800.0, False),),
        numbers={"suction_temperature_k": Course(legs=(Leg(start_s=0.0, to=310.0, over_s=600.0),))},
        faults=(
            FaultCourse(
                kind=FaultKind.RING_LEAK,
                cylinder=3,
                course=Course(legs=(Leg(start_s=300.0, to=0.001, over_s=0.0),)),
            ),
        ),
    )
    time = 1.75e9 + 60.0 * np.arange(40)
    minutes = minutes_of(setting(course), time, time - time[0])
    assert minutes.step.tolist() == [0] * 10 + [1] * 10 + [0] * 20
    assert minutes.running.tolist() == [True] * 30 + [False] * 10
    assert minutes.sizes[:, 0].tolist() == [0.0] * 5 + [0.001] * 35
    assert minutes.values["suction_temperature_k"][5] == pytest.approx(305.0)  # hand: 300 to 310 K
    assert len(set(codes(minutes).tolist())) == 2


def test_a_part_of_the_minutes_is_what_the_whole_has_there() -> None:
    time = 1.75e9 + 60.0 * np.arange(100)
    minutes = minutes_of(setting(UnitCourse(), quiet=False), time, time - time[0])
    part = minutes.part(slice(30, 50))
    np.testing.assert_array_equal(
        part.values["suction_pressure_pa"], minutes.values["suction_pressure_pa"][30:50]
    )
    assert part.composition is not None
    assert minutes.composition is not None
    np.testing.assert_array_equal(part.composition, minutes.composition[30:50])


def test_ordinary_life_of_four_hundred_days_is_varied() -> None:
    length = 400 * DAY_S
    at = 3600.0 * np.arange(400 * 24)
    twice = 0
    for unit in ("K-110", "K-220", "K-330"):
        course = ordinary_course(unit, 1, "50", length)
        assert 2 <= len(course.running) / 2 <= 12  # stops
        assert len(course.load_steps) > 10
        sizes = np.array([fault.course.at(at, 0.0) for fault in course.faults])
        assert (sizes.max(axis=1) > 0.0).all()
        assert (sizes[:, -1] == 0.0).all()  # repaired
        twice += int(((sizes > 0.0).sum(axis=0) > 1).sum())
    assert twice > 24 * 10  # two faults at once for ten days or more


def test_a_slow_wave_stays_within_bounds_and_moves() -> None:
    time = 1.7e9 + 3600.0 * np.arange(400 * 24)
    waves = [slow_wave(f"{seed}/x", time, 0.5, 40.0) for seed in range(5)]
    assert np.abs(waves).max() <= 1.0
    assert np.std(waves) > 0.3


# --- whose physics it is

_DIGEST = """
import os, sys, types
from pathlib import Path
if {stubbed}:
    for name in ("kinematics", "cycle", "rodload", "stage", "train", "evaluate"):
        class Stub(types.ModuleType):
            def __getattr__(self, attribute):
                if attribute.startswith("__"):
                    raise AttributeError(attribute)
                raise RuntimeError("the plant asked " + self.__name__ + " for " + attribute)
        sys.modules["model." + name] = Stub("model." + name)
from simulator.history import digest, wish_for
wish = wish_for(Path({site!r}), days=1/12, scenario="quiet", seed=1, units={units}, cache=None)
print(digest(wish))
"""


def in_a_process(*, stubbed: bool, units: list[str]) -> str:
    code = _DIGEST.format(stubbed=stubbed, site=str(SITE), units=units)
    done = subprocess.run(
        [sys.executable, "-P", "-c", code], capture_output=True, text=True, timeout=500, check=False
    )
    assert done.returncode == 0, done.stderr
    return done.stdout.strip()


@pytest.mark.slow
def test_the_history_needs_no_expected_value_code() -> None:
    """Tables are made and minutes told with every such module of the model replaced by a stub that raises."""
    assert in_a_process(stubbed=True, units=["K-110"]) == in_a_process(stubbed=False, units=["K-110"])
