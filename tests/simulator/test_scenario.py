"""Scenario files: what they make of the plant over time, and what is said about a wrong one."""

from pathlib import Path

import pytest

from simulator.plant_main import scenario_path
from simulator.scenario import Scenario, ScenarioError, load_scenario
from simulator.steady_table import BAR, MACHINES

RATED = MACHINES["K-110"].rated


def scenario(folder: Path, text: str) -> Scenario:
    path = folder / "story.yaml"
    path.write_text(text, encoding="utf-8")
    return load_scenario(path, MACHINES)


def changes(*lines: str) -> str:
    return "title: t\nchanges:\n" + "".join(f"  - {{{line}}}\n" for line in lines)


SINK = "at: 20 s, unit: K-110, variable: suction_header_pressure, to: 26 bara, over: 40 s"


def suction_bar(story: Scenario, elapsed_s: float, pace: float = 1.0) -> float:
    return story.conditions("K-110", RATED, elapsed_s, pace).suction_header_pa / BAR


def test_ramp_is_straight_from_the_value_before_to_the_value_asked_for(tmp_path: Path) -> None:
    story = scenario(tmp_path, changes(SINK))
    found = [suction_bar(story, t) for t in (-1, 0, 20, 30, 40, 60, 1e6)]
    assert found == pytest.approx([30, 30, 30, 29, 28, 26, 26])  # hand


def test_ramp_cut_short_goes_on_from_where_it_was(tmp_path: Path) -> None:
    back = "at: 40 s, unit: K-110, variable: suction_header_pressure, to: 30 bara, over: 20 s"
    story = scenario(tmp_path, changes(SINK, back))
    assert [suction_bar(story, t) for t in (39.999, 40, 50, 60)] == pytest.approx(
        [28, 28, 29, 30], abs=1e-3
    )  # hand


def test_changes_may_stand_in_any_order_in_the_file(tmp_path: Path) -> None:
    back = "at: 90 s, unit: K-110, variable: suction_header_pressure, to: 30 bara"
    assert suction_bar(scenario(tmp_path, changes(back, SINK)), 80) == pytest.approx(26)


def test_pace_divides_times_but_not_what_alarms_wait_for(tmp_path: Path) -> None:
    late = "at: 300 s, unhurried: 100 s, unit: K-110, variable: running, to: false"
    story = scenario(tmp_path, changes(SINK, late))
    assert suction_bar(story, 6.0, pace=4.0) == pytest.approx(29.6)  # hand: 1 of 10 s of the hurried ramp
    running = [story.conditions("K-110", RATED, t, 4.0).running for t in (149.9, 150.1)]
    assert running == [True, False]  # hand: (300 - 100) / 4 + 100 = 150 s


def test_one_unit_is_left_alone_by_the_changes_of_another(tmp_path: Path) -> None:
    story = scenario(tmp_path, changes(SINK))
    rated = MACHINES["K-220"].rated
    assert story.conditions("K-220", rated, 100.0, 1.0) == rated


def test_repeated_story_starts_again(tmp_path: Path) -> None:
    story = scenario(tmp_path, changes(SINK) + "repeat: {at: 100 s}\n")
    assert [suction_bar(story, t) for t in (60, 99, 101, 130)] == pytest.approx([26, 26, 30, 29])  # hand


FAULTS = [
    pytest.param("title: t\nchanges: [", "is not YAML", id="broken YAML"),
    pytest.param("title: t\n", "changes: Field required", id="no changes"),
    pytest.param(
        "title: t\nchanges: []\nchnages: []\n", "chnages: Extra inputs are not permitted", id="unknown key"
    ),
    pytest.param("[]", "file: Input should be", id="not a mapping"),
    pytest.param(
        changes("at: 20, unit: K-110, variable: running, to: false"),
        "changes[0].at: expected a time such as '20 s', got 20",
        id="time without unit",
    ),
    pytest.param(
        changes("at: 20 kW, unit: K-110, variable: running, to: false"),
        "changes[0].at: '20 kW'",
        id="time in kW",
    ),
    pytest.param(
        changes("at: -5 s, unit: K-110, variable: running, to: false"),
        "changes[0].at: Input should be greater than or equal to 0",
        id="before the start",
    ),
    pytest.param(
        changes("at: 20 s, unhurried: 30 s, unit: K-110, variable: running, to: false"),
        "unhurried: 30 s is a part of at: 20 s and cannot exceed it",
        id="waits longer than it lasts",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-110, variable: valve, to: 3 bara"),
        "variable: 'valve' is no plant variable; known: suction_header_pressure",
        id="unknown variable",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-110, variable: suction_header_pressure, to: 26 bar"),
        "write barg or bara",
        id="gauge or absolute left open",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-110, variable: suction_header_pressure, to: 26"),
        "to: expected text with a unit, such as '26 bara', got 26",
        id="pressure without unit",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-990, variable: running, to: false"),
        "unit: 'K-990' is no machine of this plant; known: K-110, K-220, K-330",
        id="unknown unit",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-220, variable: load_step, to: '75'"),
        "to: '75' is no load step of K-220; known: 100, 50-head-open, 50-crank-open",
        id="unknown load step",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-220, variable: load_step, to: 100"),
        "to: expected a load-step word in quotes, got 100",
        id="word without quotes",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-220, variable: running, to: 0"),
        "to: expected true or false, got 0",
        id="number",
    ),
    pytest.param(
        changes("at: 20 s, unit: K-220, variable: running, to: false, over: 5 s"),
        "over: running changes at once, it has no ramp",
        id="ramp of a switch",
    ),
]


@pytest.mark.parametrize(("text", "said"), FAULTS)
def test_wrong_file_says_what_is_wrong_and_where(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(ScenarioError) as caught:
        scenario(tmp_path, text)
    assert said in str(caught.value)
    assert str(caught.value).startswith(f"{tmp_path / 'story.yaml'}: ")


def test_every_fault_is_listed_at_once(tmp_path: Path) -> None:
    two = changes(
        "at: 20, unit: K-110, variable: running, to: false", "at: 20 s, unit: K-110, variable: x, to: 1"
    )
    with pytest.raises(ScenarioError) as caught:
        scenario(tmp_path, two)
    assert len(caught.value.faults) == 2


def test_missing_file_is_named(tmp_path: Path) -> None:
    with pytest.raises(ScenarioError, match=r"nowhere\.yaml: cannot be read: No such file"):
        load_scenario(tmp_path / "nowhere.yaml", MACHINES)


SHIPPED = sorted(p.stem for p in scenario_path("quiet").parent.glob("*.yaml"))


@pytest.mark.parametrize("name", SHIPPED)
@pytest.mark.parametrize("pace", [1.0, 3.0, 20.0])
def test_shipped_story_ends_where_it_began(name: str, pace: float) -> None:
    """A round hands the plant on as it found it, at any pace; a story told once may end elsewhere."""
    story = load_scenario(scenario_path(name), MACHINES)
    length = 1e6 if story.repeat is None else story.repeat.real_s(pace) - 0.5
    for unit, machine in MACHINES.items():
        assert story.conditions(unit, machine.rated, length, pace) == machine.rated


def test_first_light_gives_each_alarm_the_time_it_waits_at_any_pace() -> None:
    """Alarms wait 60 s in real time: low suction and the wrong ends must last that long however hurried."""
    story = load_scenario(scenario_path("first-light"), MACHINES)
    rated = MACHINES["K-220"].rated
    for pace in (0.5, 1.0, 3.0, 10.0, 60.0):
        length = int(story.repeat.real_s(pace)) if story.repeat else 0
        low = sum(suction_bar(story, t, pace) < 25 for t in range(length))
        wrong = sum(
            story.conditions("K-220", rated, t, pace).load_step == "50-crank-open" for t in range(length)
        )
        assert low > 75
        assert wrong > 75


def test_first_light_order_is_that_of_its_timetable_at_pace_one() -> None:
    story = load_scenario(scenario_path("first-light"), MACHINES)
    said = [text for _, text in story.real_timetable(1.0)]
    loads, reversal, temperature = (
        next(i for i, text in enumerate(said) if word in text)
        for word in ("alarm for gas rod load", "alarm for load reversal", "alarm for discharge temperature")
    )
    assert loads < reversal < temperature
    assert story.real_timetable(1.0)[loads][0] <= 150  # the first alarm within three minutes of the start
