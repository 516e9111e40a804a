"""Sealed truths: one for every story, true to its scenario, refused where malformed."""

import re
from collections.abc import Iterator
from pathlib import Path

import pytest

from agent.alarms.catalogue import CATALOGUE
from agent.siteplan.load import load_site
from agent.siteplan.plan import SitePlan
from simulator.faults import FaultKind
from simulator.instrument_faults import InstrumentFaultKind, LinkFaultKind
from simulator.scenario import load_scenario
from simulator.scenario_text import ScenarioText
from simulator.truth import FOLDER, Happening, Truth, TruthError, load_truth, truth_of

ROOT = Path(__file__).resolve().parents[2]
SCENARIOS = ROOT / "simulator" / "scenarios"
STORIES = sorted(p.stem for p in SCENARIOS.glob("*.yaml"))


@pytest.fixture(scope="module")
def site() -> SitePlan:
    return load_site(ROOT / "simulator" / "sites" / "ostmere.yaml")


def test_every_story_has_its_truth_and_every_truth_its_story() -> None:
    assert sorted(p.stem for p in FOLDER.glob("*")) == STORIES
    assert len(STORIES) == 14


def test_readme_lists_every_story() -> None:
    rows = [x for x in (ROOT / "README.md").read_text(encoding="utf-8").splitlines() if x.startswith("| `")]
    listed = {name for row in rows for name in row.split("|")[1].replace("`", "").replace(" ", "").split(",")}
    assert listed == set(STORIES)


@pytest.mark.parametrize("story", STORIES)
def test_story_fits_the_site_and_says_what_it_is(story: str, site: SitePlan) -> None:
    told = load_scenario(SCENARIOS / f"{story}.yaml", site)
    assert told.title
    assert told.at_pace(1.0).timetable(), "a story without a line of its timetable tells nobody anything"


def _begun(text: ScenarioText) -> Iterator[tuple[object, ...]]:
    """What a scenario breaks: kind, unit, place and when it first begins."""
    seen: set[tuple[object, ...]] = set()
    entries: list[tuple[tuple[object, ...], float]] = [
        ((f.fault, f.unit, f.stage, f.cylinder, f.end, None, None), f.at) for f in text.faults
    ]
    entries += [((i.fault, i.unit, None, None, None, i.tag, None), i.at) for i in text.instruments]
    entries += [((k.fault, None, None, None, None, None, k.source), k.at) for k in text.links]
    for what, at in sorted(entries, key=lambda e: e[1]):
        if what not in seen:
            seen.add(what)
            yield (*what, at)


def _told(happening: Happening) -> tuple[object, ...]:
    is_link = isinstance(happening.kind, LinkFaultKind)
    unit = None if is_link else happening.unit
    return (
        happening.kind, unit, happening.stage, happening.cylinder, happening.end, happening.tag,
        happening.source, happening.at,
    )  # fmt: skip


@pytest.mark.parametrize("story", STORIES)
def test_truth_tells_what_the_scenario_does(story: str, site: SitePlan) -> None:
    text = load_scenario(SCENARIOS / f"{story}.yaml", site).text
    broken = (FaultKind, InstrumentFaultKind, LinkFaultKind)
    told = {_told(h) for h in truth_of(story).what_happens if isinstance(h.kind, broken)}
    assert told == set(_begun(text))


@pytest.mark.parametrize("story", STORIES)
def test_truth_names_units_alarms_and_places_that_exist(story: str, site: SitePlan) -> None:
    truth = truth_of(story)
    units = {u.id: u for u in site.units}
    for happening in truth.what_happens:
        assert happening.unit in {"*", *units}
    for expected in truth.expected_first:
        assert expected.unit in {"*", *units}
        if expected.alarm is not None:
            assert expected.alarm in CATALOGUE
            plan = units[expected.unit].unit
            places = {s.subject for s in plan.stages} | {c.subject for c in plan.cylinders}
            assert set(expected.subject) <= places
        else:
            assert expected.finding not in CATALOGUE


@pytest.mark.parametrize("story", STORIES)
def test_truth_is_due_before_its_story_ends(story: str, site: SitePlan) -> None:
    told = load_scenario(SCENARIOS / f"{story}.yaml", site).at_pace(1.0)
    ends = told.length_s or told.repeats_after_s
    for expected in truth_of(story).expected_first:
        assert ends is not None
        assert expected.at + expected.latest <= ends


def test_no_other_source_names_the_folder() -> None:
    mentions = [
        path.relative_to(ROOT).as_posix()
        for room in ("agent", "model", "dashboard", "simulator")
        for path in sorted((ROOT / room).rglob("*.py"))
        if re.search(r"""["'/]truths""", path.read_text(encoding="utf-8"))
    ]
    assert mentions == ["simulator/truth.py"]


GOOD = """\
story: mine
what_happens:
  - {kind: bias, unit: K-110, tag: PT-1101, at: 20 s, size: 1 bar}
expected_first:
  - {alarm: reversal, unit: K-110, subject: [cylinder1], at: 20 s, latest: 90 s, latest_unhurried: 60 s}
must_not:
  - {unit: K-2*}
"""


def _written(folder: Path, text: str, name: str = "mine") -> Path:
    path = folder / f"{name}.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def test_good_file_is_read(tmp_path: Path) -> None:
    truth = load_truth(_written(tmp_path, GOOD))
    (expected,) = truth.expected_first
    # hand: of 90 s 60 are kept, the other 30 divided by 3
    assert expected.latest_real_s(3.0) == pytest.approx(70.0)
    assert truth.must_not[0].fits("K-220", "reversal")
    assert not truth.must_not[0].fits("K-110", "reversal")


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("kind: bias", "kind: gremlins", "what_happens[0].kind: 'gremlins' is nothing that can happen"),
        ("alarm: reversal", "finding: leak", "needs: a finding says what it needs"),
        (
            "alarm: reversal",
            "alarm: reversal, finding: leak, needs: drift detection",
            "names either an alarm or a finding",
        ),
        ("latest: 90 s", "latest: 50 s", "latest_unhurried: is a part of latest"),
        ("latest: 90 s", "latest: 90", "expected a time such as '20 s'"),
        ("{unit: K-2*}", "{unt: K-2*}", "must_not[0].unt"),
        ("story: mine", "story: other", "is not the name of the file"),
        ("story: mine", "story: [", "is not YAML"),
    ],
)
def test_mistake_is_refused_with_its_place(tmp_path: Path, old: str, new: str, said: str) -> None:
    assert old in GOOD
    with pytest.raises(TruthError) as refused:
        load_truth(_written(tmp_path, GOOD.replace(old, new)))
    assert said in str(refused.value)
    assert "mine.yaml" in str(refused.value)


def test_every_mistake_is_listed(tmp_path: Path) -> None:
    text = GOOD.replace("kind: bias", "kind: gremlins").replace("{unit: K-2*}", "{unt: K-2*}")
    with pytest.raises(TruthError) as refused:
        load_truth(_written(tmp_path, text))
    assert len(refused.value.faults) == 2


def test_truth_that_any_watcher_would_pass_is_refused(tmp_path: Path) -> None:
    with pytest.raises(TruthError, match="any watcher would pass"):
        load_truth(_written(tmp_path, "story: mine\nwhat_happens: []\n"))


def test_missing_file_is_one_sentence(tmp_path: Path) -> None:
    with pytest.raises(TruthError, match="cannot be read"):
        load_truth(tmp_path / "none.yaml")


def test_truth_is_frozen() -> None:
    truth: Truth = truth_of("quiet")
    with pytest.raises(ValueError, match="frozen"):
        truth.story = "other"  # type: ignore[misc]
