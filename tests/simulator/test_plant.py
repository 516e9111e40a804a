"""The plant as a whole: every tag of the site, the story on raw tags, true turns, physics of its own."""

import hashlib
import math
import os
import subprocess
import sys
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

import pytest

# Machine code of the plant is kept between test runs; a change of its sources makes it anew.
os.environ.setdefault("NUMBA_CACHE_DIR", str(Path(__file__).parents[2] / ".pytest_cache" / "plant"))

from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from simulator.instrument_faults import SampleQuality
from simulator.plant import MOST_S, Plant, PlantMismatchError
from simulator.plant_main import scenario_path
from simulator.scenario import load_scenario

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"
START = 1_800_000_000.4
COARSE = 720  # steps a turn: enough for what is tested here
Row = dict[str, float | bool | str | None]


@pytest.fixture(scope="module", name="site")
def _site() -> SitePlan:
    return load_site(SITE)


@pytest.fixture(scope="module", name="plant")
def _plant(site: SitePlan) -> Callable[..., Plant]:
    """Plants by story, pace and seed; each is settled once and then reset."""
    built: dict[tuple[str, float, int], Plant] = {}

    def get(story: str | Path = "first-light", *, pace: float = 1.0, seed: int = 1) -> Plant:
        key = (str(story), pace, seed)
        if key not in built:
            told = load_scenario(scenario_path(str(story)), site)
            built[key] = Plant(site, told, pace=pace, seed=seed, steps=COARSE)
        built[key].reset()
        return built[key]

    return get


@pytest.fixture(scope="module", name="booster")
def _booster(site: SitePlan) -> Callable[..., Plant]:
    """K-110 alone: its crank costs a third of all three."""
    alone = replace(site, units=(site.unit("K-110"),))

    def get(story: str | Path, *, pace: float) -> Plant:
        told = load_scenario(scenario_path(str(story)), site)
        return Plant(alone, told, pace=pace, seed=1, steps=COARSE)

    return get


def told(built: Plant, seconds: int, every: int = 1) -> Iterator[tuple[int, Row]]:
    for k in range(0, seconds, every):
        yield k, {s.tag.tag: s.value for s in built.sample(START + k, START)}


def test_every_tag_of_the_site_is_sampled_once_with_its_time(
    site: SitePlan, plant: Callable[..., Plant]
) -> None:
    samples = plant().sample(START, None)
    assert [s.tag for s in samples] == [i for u in site.units for i in u.inputs]
    assert {s.time for s in samples} == {START}
    assert {s.quality for s in samples} == {SampleQuality.GOOD}


def test_same_seed_repeats_the_plant_and_another_does_not(plant: Callable[..., Plant]) -> None:
    def values(seed: int) -> list[object]:
        return [v for _, v in told(plant(seed=seed), 5)]

    assert values(1) == values(1)
    assert values(1) != values(2)


def test_nothing_moves_before_the_story_begins(plant: Callable[..., Plant]) -> None:
    built = plant()
    rows = [built.sample(START + k, None) for k in range(0, 24, 3)]
    values = [next(s.value for s in row if s.tag.tag == "PT-1101") for row in rows]
    # hand: 29.83 bar(a) less 1.013; swings of .45 % and noise of .1 % and .05 % (four sigma) around it
    assert all(abs(float(p) - 28.82) < 0.28 for p in values if p is not None)


@pytest.mark.slow
def test_crank_turns_at_its_true_rate(plant: Callable[..., Plant], site: SitePlan) -> None:
    """Turns made after some seconds are speed x time, to one turn, at any pace."""
    for pace in (1.0, 5.0):
        built = plant("quiet", pace=pace)
        for _ in told(built, 8):
            pass
        for unit in site.units:
            life = built.life(unit.id)
            # the first sample stands for a second of its own
            assert life.turns == pytest.approx(life.outcome.speed_rad_s / (2 * math.pi) * 8, abs=1.1)


def test_late_second_makes_up_for_its_turns_and_a_long_pause_does_not(plant: Callable[..., Plant]) -> None:
    built = plant("quiet")
    built.sample(START, START)
    first = built.life("K-220").turns
    built.sample(START + 2, START)
    second = built.life("K-220").turns
    assert second - first == pytest.approx(2 * 375 / 60, abs=1)  # hand
    assert built.behind_s == 0.0
    built.sample(START + 22, START)
    assert built.life("K-220").turns - second == pytest.approx(MOST_S * 375 / 60, abs=1)
    assert built.behind_s == pytest.approx(20 - MOST_S)


def test_tags_follow_the_machine(plant: Callable[..., Plant], site: SitePlan) -> None:
    built = plant("quiet")
    rows = [row for _, row in told(built, 20)]
    for unit in site.units:
        outcome = built.life(unit.id).outcome
        for stage in outcome.stages:
            for key, width in (("suction_pressure", 0.012), ("discharge_pressure", 0.012)):
                tag = unit.input(f"stage{stage.number}.{key}")
                assert tag is not None
                mean = sum(float(r[tag.tag] or 0) for r in rows[10:]) / 10 * tag.scale + tag.offset
                assert mean == pytest.approx(getattr(stage, f"{key}_pa"), rel=width)  # hand: noise and swing
        flow = unit.input("unit.flow")
        assert flow is not None
        drawn = flow.tap == "suction header"
        true = outcome.inlet_dry_mol_s if drawn else outcome.export_dry_mol_s
        shown = sum(float(r[flow.tag] or 0) for r in rows[10:]) / 10 * flow.scale
        assert shown == pytest.approx(true, rel=0.04)


@pytest.mark.slow
def test_first_light_sinks_suction_and_heats_the_discharge_through_its_thermowell(
    booster: Callable[..., Plant],
) -> None:
    rows = dict(told(booster("first-light", pace=1.0), 300, 2))
    assert float(rows[16]["PT-1101"] or 0) > 28.4
    assert float(rows[60]["PT-1101"] or 0) < 25.4  # hand: 26 bar(a) in the header
    assert 19.3 < float(rows[200]["PT-1101"] or 0) < 20.0  # hand: 20.8 bar(a) in the header
    hot = [k for k, row in rows.items() if float(row["TT-1102"] or 0) > 120.0]
    # 120 degC is 10 K before the entered limit; the thermowell follows the gas by a minute
    assert 150 < hot[0] < 240
    assert max(float(row["TT-1102"] or 0) for row in rows.values()) < 130.0


@pytest.mark.slow
def test_wrong_half_step_leaves_every_raw_tag_within_its_usual_range(
    plant: Callable[..., Plant], site: SitePlan
) -> None:
    """The load-step word alone tells the wrong half step from the right one."""
    rows = dict(told(plant(pace=2.0), 350, 3))
    usual = [r for r in rows.values() if r["UY-2201"] != "50-crank-open"]
    wrong = [r for r in rows.values() if r["UY-2201"] == "50-crank-open"]
    assert len(wrong) > 20
    for unit_tag in (i for i in site.unit("K-220").inputs if i.unit not in ("word", "switch")):
        low, high = (f(float(r[unit_tag.tag] or 0) for r in usual) for f in (min, max))
        room = 0.06 * max(abs(low), abs(high))
        for row in wrong:
            assert low - room <= float(row[unit_tag.tag] or 0) <= high + room
    # temperatures stay more than 10 K away from the entered 130 degC
    assert max(float(r[t] or 0) for r in rows.values() for t in ("TT-2202", "TT-2204", "TT-2206")) < 120.0


@pytest.mark.slow
def test_no_value_ever_leaves_the_span_of_its_transmitter(
    plant: Callable[..., Plant], site: SitePlan
) -> None:
    spans = {i.tag: i for u in site.units for i in u.inputs if i.unit not in ("word", "switch")}
    for _, row in told(plant(pace=6.0), 120, 3):
        for tag, entry in spans.items():
            si = float(row[tag] or 0) * entry.scale + entry.offset
            assert entry.span_low <= si <= entry.span_high


def test_hurried_plant_reaches_the_same_state_sooner(booster: Callable[..., Plant]) -> None:
    hurried = dict(told(booster("first-light", pace=3.0), 26))
    assert float(hurried[24]["PT-1101"] or 0) < 25.7  # hand: the ramp to 26 bar(a) ends after 60 / 3 s


def test_plant_is_found_settled_to_the_weather_of_its_day(site: SitePlan) -> None:
    """Neither in January nor in July does it drift from its first second on, though the water differs."""
    alone = replace(site, units=(site.unit("K-330"),))
    quiet = load_scenario(scenario_path("quiet"), site)
    built = Plant(alone, quiet, pace=1.0, seed=1, steps=COARSE)
    last_stage = []
    for start in (1_799_500_000.4, 1_815_300_000.4):
        built.reset()
        found = []
        for k in range(13):
            built.sample(start + k, None)
            found.append(built.life("K-330").outcome.stages[1].discharge_temperature_k)
        assert max(found) - min(found) < 0.5  # headers breathe
        last_stage.append(found[0])
    assert last_stage[1] - last_stage[0] > 8.0


STOP = """title: stop
changes:
  - {at: 10 min, unit: K-110, variable: running, to: false}
  - {at: 3 h, unit: K-110, variable: running, to: true}
"""


@pytest.mark.slow
def test_stopped_machine_settles_out_cools_and_starts_again(
    booster: Callable[..., Plant], tmp_path: Path
) -> None:
    story = tmp_path / "stop.yaml"
    story.write_text(STOP, encoding="utf-8")
    built = booster(story, pace=60.0)  # a second stands for a minute
    rows, walls = {}, {}
    for k, row in told(built, 210):
        rows[k] = row
        walls[k] = built.life("K-110").outcome.cylinders[0].ends[0].wall_temperature_k
    assert (rows[9]["XS-1101"], rows[11]["XS-1101"]) == (True, False)
    assert float(rows[12]["ST-1101"] or 0) < 1.0
    assert float(rows[12]["FT-1101"] or 0) < 20.0
    assert float(rows[20]["PT-1102"] or 0) - float(rows[20]["PT-1101"] or 0) < 1.0  # settled out
    assert float(rows[30]["TT-1102"] or 0) > 40.0  # not cold after twenty minutes
    assert float(rows[178]["TT-1102"] or 0) < 20.0  # hand: 290 K around it; gone after some hours
    assert rows[181]["XS-1101"] is True
    assert walls[181] < walls[209] - 30.0  # found cold, warm again after half an hour
    assert float(rows[205]["PT-1102"] or 0) > 68.0
    assert float(rows[209]["TT-1102"] or 0) > 80.0


FAULTY = """title: lies
instruments:
  - {at: 1 s, unit: K-110, tag: PT-1101, fault: bias, to: 3 bar}
  - {at: 1 s, unit: K-110, tag: TT-1102, fault: bad quality, to: true}
  - {at: 1 s, unit: K-220, tag: FT-2201, fault: uncertain quality, to: true}
"""


@pytest.mark.slow
def test_instruments_lie_as_the_story_says(plant: Callable[..., Plant], tmp_path: Path) -> None:
    story = tmp_path / "lies.yaml"
    story.write_text(FAULTY, encoding="utf-8")
    clean = dict(told(plant("quiet"), 6))
    built = plant(story)
    for k in range(6):
        samples = {s.tag.tag: s for s in built.sample(START + k, START)}
    # noise is that of the clean run
    assert float(samples["PT-1101"].value or 0) == pytest.approx(
        float(clean[5]["PT-1101"] or 0) + 3, abs=0.011
    )
    assert samples["TT-1102"].quality is SampleQuality.BAD
    assert samples["FT-2201"].quality is SampleQuality.UNCERTAIN
    assert samples["PT-1102"].value == clean[5]["PT-1102"]


def test_site_with_a_machine_this_plant_lacks_is_refused(site: SitePlan) -> None:
    other = replace(site.units[0], unit=replace(site.units[0].unit, id="K-990"))
    strange = replace(site, units=(other,))
    with pytest.raises(PlantMismatchError, match="no machine 'K-990'; it has K-110"):
        Plant(strange, load_scenario(scenario_path("quiet"), site), pace=1.0, seed=1)


@pytest.mark.parametrize(
    ("tag", "tap", "said"),
    [
        (
            "PT-2203",
            "nozzle",
            "stage2.suction_pressure at 'suction bottle' or 'after cooler 1', not at 'nozzle'",
        ),
        ("TT-2202", "after cooler 1", "stage1.discharge_temperature at 'discharge bottle'"),
        ("FT-2201", "recycle line", "unit.flow at 'suction header' or 'discharge header'"),
    ],
)
def test_tag_at_a_place_without_an_instrument_is_refused(
    site: SitePlan, tag: str, tap: str, said: str
) -> None:
    unit = site.unit("K-220")
    moved = replace(unit, inputs=tuple(replace(i, tap=tap) if i.tag == tag else i for i in unit.inputs))
    with pytest.raises(PlantMismatchError, match=said):
        Plant(replace(site, units=(moved,)), load_scenario(scenario_path("quiet"), site), pace=1.0, seed=1)


def test_pace_of_zero_is_refused(site: SitePlan) -> None:
    with pytest.raises(ValueError, match="pace 0"):
        Plant(site, load_scenario(scenario_path("quiet"), site), pace=0.0, seed=1, steps=COARSE)


STUBBED = (
    "gas", "surface", "dew", "kinematics", "cycle", "valves", "rodload", "stage", "throw", "train",
    "evaluate", "uncertainty", "curves",
)  # fmt: skip
DIGEST_CODE = """
import hashlib, sys, types

class Stub(types.ModuleType):
    def __getattr__(self, name):
        if name.startswith("__"):
            raise AttributeError(name)
        raise RuntimeError(f"the plant asked {self.__name__} for {name}")

for name in sys.argv[2:]:
    sys.modules[f"model.{name}"] = Stub(f"model.{name}")

from pathlib import Path
from agent.siteplan.load import load_site
from simulator.plant import Plant
from simulator.plant_main import scenario_path
from simulator.scenario import load_scenario

site = load_site(Path(sys.argv[1]))
plant = Plant(site, load_scenario(scenario_path("first-light"), site), pace=1.0, seed=1, steps=720)
start = 1_800_000_000.4
digest = hashlib.sha256()
for k in range(0, 12, 3):
    digest.update(repr([(s.tag.tag, s.value) for s in plant.sample(start + k, start)]).encode())
print(digest.hexdigest())
"""


@pytest.mark.slow
def test_plant_is_the_same_without_the_formulas_of_the_model(plant: Callable[..., Plant]) -> None:
    """With each expected-value module of the model replaced by a stub that raises, values are unchanged."""
    digest = hashlib.sha256()
    built = plant()
    for k in range(0, 12, 3):
        digest.update(repr([(s.tag.tag, s.value) for s in built.sample(START + k, START)]).encode())
    done = subprocess.run(
        [sys.executable, "-c", DIGEST_CODE, str(SITE), *STUBBED],
        capture_output=True, text=True, timeout=120, check=False, cwd=SITE.parents[2],
    )  # fmt: skip
    assert done.stderr == ""
    assert done.stdout.strip() == digest.hexdigest()


def test_stubs_of_that_test_do_raise() -> None:
    code = DIGEST_CODE.split("from pathlib", maxsplit=1)[0] + "\nfrom model.kinematics import anything\n"
    done = subprocess.run(
        [sys.executable, "-c", code, str(SITE), *STUBBED],
        capture_output=True, text=True, timeout=60, check=False,
    )  # fmt: skip
    assert "the plant asked model.kinematics for anything" in done.stderr


def test_halted_plant_leaves_what_it_is_at(plant: Callable[..., Plant]) -> None:
    built = plant("quiet")
    built.sample(START, START)
    before = built.life("K-330").turns
    built.halt()
    assert built.sample(START + 1, START) == []
    assert built.life("K-330").turns == before
    built.reset()
    assert built.sample(START, START)
