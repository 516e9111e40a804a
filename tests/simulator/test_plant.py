"""The plant as a whole: every tag of the site, the story on raw tags, and physics of its own."""

import hashlib
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from simulator.ostmere import K330
from simulator.plant import Plant, PlantMismatchError
from simulator.plant_main import scenario_path
from simulator.scenario import load_scenario
from simulator.steady_table import MACHINES

SITE = scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml"
START = 1_800_000_000.4


@pytest.fixture(scope="module")
def site() -> SitePlan:
    return load_site(SITE)


def plant(site: SitePlan, story: str = "first-light", *, pace: float = 1.0, seed: int = 1) -> Plant:
    return Plant(site, load_scenario(scenario_path(story), MACHINES), MACHINES, pace=pace, seed=seed)


def told(built: Plant, seconds: int) -> Iterator[tuple[int, dict[str, float | bool | str]]]:
    for k in range(seconds):
        yield k, {s.tag.tag: s.value for s in built.sample(START + k, START)}


def test_every_tag_of_the_site_is_sampled_once_with_its_time(site: SitePlan) -> None:
    samples = plant(site).sample(START, None)
    assert [s.tag for s in samples] == [i for u in site.units for i in u.inputs]
    assert {s.time for s in samples} == {START}


def test_same_seed_repeats_the_plant_and_another_does_not(site: SitePlan) -> None:
    def values(seed: int) -> list[object]:
        return [v for _, v in told(plant(site, seed=seed), 30)]

    assert values(1) == values(1)
    assert values(1) != values(2)


def test_reset_begins_again(site: SitePlan) -> None:
    built = plant(site)
    first = list(told(built, 20))
    built.reset()
    assert list(told(built, 20)) == first


def test_nothing_moves_before_the_story_begins(site: SitePlan) -> None:
    built = plant(site)
    pressures = [
        next(s.value for s in built.sample(START + k, None) if s.tag.tag == "PT-1101") for k in range(200)
    ]
    # hand: 29.81 bar(a) less 1.013; swings of .45 % and noise of .1 % and .05 % (four sigma) around it
    assert all(abs(float(p) - 28.80) < 0.28 for p in pressures)


def test_first_light_sinks_suction_and_heats_the_discharge_through_its_thermowell(site: SitePlan) -> None:
    rows = dict(told(plant(site), 300))
    assert float(rows[19]["PT-1101"]) > 28.4
    assert float(rows[60]["PT-1101"]) < 25.4  # hand: 26 bar(a) in the header
    assert 19.7 < float(rows[200]["PT-1101"]) < 20.6  # hand: 21.3 bar(a) in the header
    hot = [k for k, row in rows.items() if float(row["TT-1102"]) > 120.0]
    # 120 degC is 10 K before the entered limit; the gas is there at 120 s, its thermowell a minute later
    assert 150 < hot[0] < 210
    assert max(float(row["TT-1102"]) for row in rows.values()) < 130.0


def test_wrong_half_step_leaves_every_raw_tag_within_its_usual_range(site: SitePlan) -> None:
    """The load-step word alone tells the wrong half step from the right one."""
    rows = dict(told(plant(site), 700))
    usual = [r for r in rows.values() if r["UY-2201"] != "50-crank-open"]
    wrong = [r for r in rows.values() if r["UY-2201"] == "50-crank-open"]
    assert len(wrong) > 60
    for unit_tag in (i for i in site.unit("K-220").inputs if i.unit not in ("word", "switch")):
        low, high = (f(float(r[unit_tag.tag]) for r in usual) for f in (min, max))
        room = 0.06 * max(abs(low), abs(high))
        for row in wrong:
            assert low - room <= float(row[unit_tag.tag]) <= high + room
            si = float(row[unit_tag.tag]) * unit_tag.scale + unit_tag.offset
            assert unit_tag.span_low < si < unit_tag.span_high
    # temperatures stay more than 10 K away from the entered 130 degC
    assert max(float(r[t]) for r in rows.values() for t in ("TT-2202", "TT-2204", "TT-2206")) < 119.0


def test_no_value_ever_leaves_the_span_of_its_transmitter(site: SitePlan) -> None:
    spans = {i.tag: i for u in site.units for i in u.inputs if i.unit not in ("word", "switch")}
    for _, row in told(plant(site, seed=3), 720):
        for tag, entry in spans.items():
            si = float(row[tag]) * entry.scale + entry.offset
            assert entry.span_low <= si <= entry.span_high


def test_hurried_plant_reaches_the_same_state_sooner(site: SitePlan) -> None:
    hurried = dict(told(plant(site, pace=3.0), 60))
    assert float(hurried[21]["PT-1101"]) < 25.7  # hand: the ramp to 26 bar(a) ends after 60 / 3 s


def test_stopped_machine_runs_down_and_says_so(site: SitePlan, tmp_path: Path) -> None:
    story = tmp_path / "stop.yaml"
    story.write_text(
        "title: stop\nchanges:\n  - {at: 5 s, unit: K-110, variable: running, to: false}\n", encoding="utf-8"
    )
    built = Plant(site, load_scenario(story, MACHINES), MACHINES, pace=1.0, seed=1)
    rows = dict(told(built, 60))
    assert (rows[4]["XS-1101"], rows[6]["XS-1101"]) == (True, False)
    assert float(rows[6]["ST-1101"]) > 500  # hand: 900 exp(-1.6/5) rpm
    assert float(rows[59]["ST-1101"]) < 1.0
    assert float(rows[59]["FT-1101"]) < 20.0
    assert float(rows[59]["PT-2201"]) > 16.0  # the other unit goes on


def test_site_with_a_machine_this_plant_lacks_is_refused(site: SitePlan) -> None:
    with pytest.raises(PlantMismatchError, match="no machine 'K-220'; it has K-110"):
        Plant(
            site,
            load_scenario(scenario_path("quiet"), MACHINES),
            {"K-110": MACHINES["K-110"]},
            pace=1.0,
            seed=1,
        )


def test_nameplate_of_the_field_machine_is_the_plants_own(site: SitePlan) -> None:
    """The plant holds it apart from the agent's file; areas are written in cm2 with three digits."""
    entered, built = site.unit("K-330").unit, K330
    assert (entered.stroke_m, entered.connecting_rod_m) == pytest.approx(
        (built.stroke_m, built.connecting_rod_m)
    )
    assert entered.rated_speed_rad_s == pytest.approx(built.rated_speed_rad_s)
    assert dict(entered.composition) == pytest.approx(dict(built.composition))
    assert [(s.word, s.held_open) for s in entered.load_steps] == [
        (s.word, s.held_open) for s in built.load_steps
    ]
    for mine, theirs in zip(entered.cylinders, built.cylinders, strict=True):
        assert (mine.number, len(mine.ends)) == (theirs.number, len(theirs.ends))
        assert mine.bore_m == pytest.approx(theirs.bore_m)
        assert mine.rod_diameter_m == pytest.approx(theirs.rod_diameter_m)
        assert mine.reciprocating_mass_kg == pytest.approx(theirs.reciprocating_mass_kg)
        for a, b in zip(mine.ends, theirs.ends, strict=True):
            assert (a.side, a.clearance) == (b.side, pytest.approx(b.clearance))
            assert a.suction_area_ratio == pytest.approx(b.suction_area_ratio, rel=2e-3)
            assert a.discharge_area_ratio == pytest.approx(b.discharge_area_ratio, rel=2e-3)


def test_pace_of_zero_is_refused(site: SitePlan) -> None:
    with pytest.raises(ValueError, match="pace 0"):
        plant(site, pace=0.0)


STUBBED = ("gas", "kinematics", "cycle", "rodload", "stage", "throw", "evaluate", "uncertainty", "curves")
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
from simulator.steady_table import MACHINES

site = load_site(Path(sys.argv[1]))
story = load_scenario(scenario_path("first-light"), MACHINES)
plant = Plant(site, story, MACHINES, pace=1.0, seed=1)
start = 1_800_000_000.4
digest = hashlib.sha256()
for k in range(400):
    digest.update(repr([(s.tag.tag, s.value) for s in plant.sample(start + k, start)]).encode())
print(digest.hexdigest())
"""


def test_plant_is_the_same_without_the_formulas_of_the_model(site: SitePlan) -> None:
    """With each expected-value module of the model replaced by a stub that raises, values are unchanged."""
    digest = hashlib.sha256()
    built = plant(site)
    for k in range(400):
        digest.update(repr([(s.tag.tag, s.value) for s in built.sample(START + k, START)]).encode())
    done = subprocess.run(
        [sys.executable, "-c", DIGEST_CODE, str(SITE), *STUBBED],
        capture_output=True, text=True, timeout=60, check=False, cwd=SITE.parents[2],
    )  # fmt: skip
    assert done.stderr == ""
    assert done.stdout.strip() == digest.hexdigest()


def test_stubs_of_that_test_do_raise() -> None:
    code = DIGEST_CODE.split("from pathlib", maxsplit=1)[0] + "\nfrom model.kinematics import anything\n"
    done = subprocess.run(
        [sys.executable, "-c", code, str(SITE), *STUBBED],
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )
    assert "the plant asked model.kinematics for anything" in done.stderr
