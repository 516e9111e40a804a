"""Scenario files: what they make of the plant over time, and what is said about a wrong one."""

from pathlib import Path

import numpy as np
import pytest

from agent.siteplan.load import load_site
from model.machine import Side
from simulator.course import Calm, UnitOrders
from simulator.faults import FaultKind
from simulator.instrument_faults import InstrumentFaultKind, LinkState
from simulator.ostmere import USUAL
from simulator.plant_main import scenario_path
from simulator.scenario import Scenario, ScenarioError, load_scenario

BAR = 1e5
SITE = load_site(scenario_path("quiet").parents[1] / "sites" / "ostmere.yaml")


def scenario(folder: Path, text: str) -> Scenario:
    path = folder / "story.yaml"
    path.write_text(text, encoding="utf-8")
    return load_scenario(path, SITE)


def calm(unit: str) -> Calm:
    return Calm(around=USUAL[unit], load_step=SITE.unit(unit).unit.load_steps[0].word)


def orders(story: Scenario, unit: str, elapsed_s: float, pace: float = 1.0) -> UnitOrders:
    told = story.at_pace(pace)
    return told.units[unit].orders(told.round_time(elapsed_s), calm(unit))


def changes(*lines: str) -> str:
    return "title: t\nchanges:\n" + "".join(f"  - {{{line}}}\n" for line in lines)


SINK = "at: 20 s, unit: K-110, variable: suction_header_pressure, to: 26 bara, over: 40 s"


def suction_bar(story: Scenario, elapsed_s: float, pace: float = 1.0) -> float:
    return orders(story, "K-110", elapsed_s, pace).around.suction_pressure_pa / BAR


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
    running = [orders(story, "K-110", t, 4.0).running for t in (149.9, 150.1)]
    assert running == [True, False]  # hand: (300 - 100) / 4 + 100 = 150 s


def test_one_unit_is_left_alone_by_the_changes_of_another(tmp_path: Path) -> None:
    story = scenario(tmp_path, changes(SINK))
    assert orders(story, "K-220", 100.0) == orders(story, "K-220", -1.0)


def test_repeated_story_starts_again(tmp_path: Path) -> None:
    story = scenario(tmp_path, changes(SINK) + "repeat: {at: 100 s}\n")
    assert [suction_bar(story, t) for t in (60, 99, 101, 130)] == pytest.approx([26, 26, 30, 29])  # hand


FAULTS = [
    pytest.param("title: t\nchanges: [", "is not YAML", id="broken YAML"),
    pytest.param("changes: []\n", "title: Field required", id="no title"),
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
        "unit: 'K-990' is no unit of this site; known: K-110, K-220, K-330",
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
        load_scenario(tmp_path / "nowhere.yaml", SITE)


SHIPPED = sorted(p.stem for p in scenario_path("quiet").parent.glob("*.yaml"))


@pytest.mark.parametrize("name", SHIPPED)
@pytest.mark.parametrize("pace", [1.0, 3.0, 20.0])
def test_shipped_story_that_repeats_ends_where_it_began(name: str, pace: float) -> None:
    """A round hands the plant on as it found it, at any pace; a story told once may end elsewhere."""
    story = load_scenario(scenario_path(name), SITE)
    length = story.at_pace(pace).repeats_after_s
    if length is None:
        return
    for unit in SITE.units:
        assert orders(story, unit.id, length - 0.5, pace) == orders(story, unit.id, -1.0, pace)


def test_first_light_gives_each_alarm_the_time_it_waits_at_any_pace() -> None:
    """Alarms wait 60 s in real time: low suction and the wrong ends must last that long however hurried."""
    story = load_scenario(scenario_path("first-light"), SITE)
    for pace in (0.5, 1.0, 3.0, 10.0, 60.0):
        told = story.at_pace(pace)
        times = range(int(told.repeats_after_s or 0))
        suction = told.units["K-110"].numbers["suction_pressure_pa"].at(np.array(times), 30 * BAR)
        steps = [told.units["K-220"].orders(t, calm("K-220")).load_step for t in times]
        assert np.count_nonzero(suction < 25 * BAR) > 75
        assert steps.count("50-crank-open") > 75


def test_first_light_order_is_that_of_its_timetable_at_pace_one() -> None:
    told = load_scenario(scenario_path("first-light"), SITE).at_pace(1.0).timetable()
    said = [text for _, text in told]
    loads, reversal, temperature = (
        next(i for i, text in enumerate(said) if word in text)
        for word in ("alarm for gas load", "alarm for load reversal", "alarm for discharge temperature")
    )
    assert loads < reversal < temperature
    assert told[loads][0] <= 150  # the first alarm within three minutes of the start


# -- faults, instruments, links, gases


LEAK = "at: 10 s, unit: K-220, fault: suction valve leak, cylinder: 3, end: head, to: 0.002, over: 100 s"


def test_fault_grows_and_is_repaired(tmp_path: Path) -> None:
    mended = "at: 200 s, unit: K-220, fault: suction valve leak, cylinder: 3, end: head, to: 0"
    story = scenario(tmp_path, f"title: t\nfaults:\n  - {{{LEAK}}}\n  - {{{mended}}}\n")
    sizes = [
        orders(story, "K-220", t).faults.at_end(FaultKind.SUCTION_VALVE_LEAK, 3, Side.HEAD)
        for t in (0, 10, 60, 110, 150, 201)
    ]
    assert sizes == pytest.approx([0, 0, 0.001, 0.002, 0.002, 0])  # hand
    assert orders(story, "K-110", 60).faults.present == ()


def test_exponential_growth_is_slow_at_first(tmp_path: Path) -> None:
    story = scenario(tmp_path, f"title: t\nfaults:\n  - {{{LEAK}, growth: exponential}}\n")
    half, whole = (
        orders(story, "K-220", t).faults.at_end(FaultKind.SUCTION_VALVE_LEAK, 3, Side.HEAD) for t in (60, 110)
    )
    assert half == pytest.approx(0.002 * 0.1824, rel=1e-3)  # hand: (e^1.5 - 1) / (e^3 - 1)
    assert whole == pytest.approx(0.002)


def test_instrument_drifts_in_the_unit_of_its_tag(tmp_path: Path) -> None:
    lines = (
        "at: 0 s, unit: K-220, tag: PT-2203, fault: bias, to: -1 bar, over: 10 s",
        "at: 0 s, unit: K-220, tag: TT-2202, fault: spikes, to: 5 degC",
        "at: 20 s, unit: K-220, tag: PT-2203, fault: stuck, to: true",
        "at: 0 s, unit: K-220, tag: PT-2204, fault: wrong span, to: 1.05",
    )
    story = scenario(tmp_path, "title: t\ninstruments:\n" + "".join(f"  - {{{x}}}\n" for x in lines))
    course = story.at_pace(1.0).units["K-220"]
    assert [f.size for f in course.instrument_faults("PT-2203", 5.0)] == pytest.approx([-0.5e5])  # hand
    assert [f.size for f in course.instrument_faults("TT-2202", 5.0)] == pytest.approx([5.0])
    assert [f.size for f in course.instrument_faults("PT-2204", 5.0)] == pytest.approx([1.05])
    kinds = {f.kind for f in course.instrument_faults("PT-2203", 25.0)}
    assert kinds == {InstrumentFaultKind.BIAS, InstrumentFaultKind.STUCK}
    assert course.instrument_faults("PT-2205", 25.0) == ()


def test_link_is_lost_for_its_time(tmp_path: Path) -> None:
    lines = (
        "at: 60 s, source: field-bus, fault: lost, for: 2 min, buffered: true",
        "at: 10 s, source: control-system, fault: skewed, for: 1 h, by: -45 s",
        "at: 10 s, source: field-gateway, fault: late, for: 20 s, by: 5 s",
    )
    told = scenario(tmp_path, "title: t\nlinks:\n" + "".join(f"  - {{{x}}}\n" for x in lines)).at_pace(1.0)
    assert [told.link("field-bus", t).lost for t in (59, 61, 179, 181)] == [False, True, True, False]
    assert told.link("field-bus", 61).buffered
    assert told.link("control-system", 61) == LinkState(skew_s=-45.0)
    assert told.link("field-gateway", 15) == LinkState(delay_s=5.0)
    assert told.link("field-gateway", 31) == LinkState()


def test_gas_mixes_over_to_another(tmp_path: Path) -> None:
    line = "at: 0 s, unit: K-220, variable: composition, to: {hydrogen: 0.8, methane: 0.2}, over: 10 s"
    story = scenario(tmp_path, changes(line)).at_pace(1.0).units["K-220"]
    pure = {"hydrogen": 1.0}
    assert story.composition(5.0, pure) == pytest.approx({"hydrogen": 0.9, "methane": 0.1})  # hand
    assert story.composition(20.0, pure) == pytest.approx({"hydrogen": 0.8, "methane": 0.2})


SUCTION = "at: 60 s, unit: K-110, variable: suction_header_pressure"
WRONG = [
    (
        "changes",
        f"{SUCTION}, to: 75 bara, over: 10 s",
        "K-110: after 70 s the discharge header is at 70.0 bara, less than 5 % above the suction header",
    ),
    ("changes", f"{SUCTION}, to: 0.1 bara", "changes[0]: to: suction_header_pressure is not within 0.5 bara"),
    ("changes", f"{SUCTION}, to: -3 bara", "changes[0]: to: '-3 bara': expected a pressure above absolute"),
    (
        "changes",
        "at: 0 s, unit: K-110, variable: speed, to: 0 rpm",
        "changes[0]: to: speed is not within 30 % to 120 % of the rated speed of K-110",
    ),
    (
        "changes",
        "at: 0 s, unit: K-220, variable: saturation, to: 200 %",
        "changes[0]: to: saturation is not within 0 % to 100 %",
    ),
    (
        "changes",
        "at: 0 s, unit: K-220, variable: suction_temperature, to: -200 degC",
        "suction_temperature is not within -40 degC to 120 degC",
    ),
    (
        "changes",
        "at: 0 s, unit: K-110, variable: first_recycle, to: 10 %",
        "K-110 has one stage and no first recycle",
    ),
    ("changes", "at: 0 s, unit: K-110, variable: [speed], to: 800 rpm", "['speed'] is no plant variable"),
    (
        "changes",
        "at: 0 s, unit: K-220, variable: composition, to: {kryptonite: 1.0}",
        "changes[0]: to: no such gas: kryptonite; known: argon",
    ),
    (
        "changes",
        "at: 0 s, unit: K-220, variable: composition, to: {hydrogen: .nan}",
        "expected mole fractions such as",
    ),
    (
        "faults",
        "at: 0 s, unit: K-110, fault: first-stage recycle passing, to: 0.1",
        "faults[0]: fault: K-110 has one stage and no first recycle that could pass",
    ),
    ("instruments", "at: 0 s, unit: K-220, tag: UY-2201, fault: stuck, to: true", "no instrument 'UY-2201'"),
    (
        "instruments",
        "at: 0 s, unit: K-220, tag: XS-2201, fault: wrong span, to: 1.1",
        "XS-2201 is a switch and has no wrong span",
    ),
    (
        "instruments",
        "at: 0 s, unit: K-220, tag: PT-2203, fault: bias, to: much bar",
        "'much bar' is no difference of PT-2203, in barg",
    ),
    ("instruments", "at: 0 s, unit: K-220, tag: PT-2203, fault: wrong span, to: .nan", "expected a factor"),
    ("links", "at: 0 s, source: field-bus, fault: lost, for: 0 s", "links[0].for: Input should be greater"),
    (
        "links",
        "at: 0 s, source: field-bus, fault: lost, for: 9 s, by: 3 s",
        "a link that is lost has no amount",
    ),
    (
        "links",
        "at: 0 s, source: field-bus, fault: out of order, for: 9 s, buffered: true",
        "only a lost link keeps anything",
    ),
    ("faults", "at: 0 s, unit: K-220, fault: rust, to: 1", "faults[0].fault"),
    (
        "faults",
        "at: 0 s, unit: K-220, fault: piston ring leak, cylinder: 3, end: head, to: 0.001",
        "must name its cylinder and nothing else",
    ),
    (
        "faults",
        "at: 0 s, unit: K-220, fault: piston ring leak, cylinder: 9, to: 0.001",
        "K-220 has no cylinder 9",
    ),
    ("faults", "at: 0 s, unit: K-220, fault: piston ring leak, cylinder: 3, to: 7", "is not within 0..0.05"),
    (
        "instruments",
        "at: 0 s, unit: K-220, tag: PT-1, fault: bias, to: 1 bar",
        "K-220 has no instrument 'PT-1'",
    ),
    (
        "instruments",
        "at: 0 s, unit: K-220, tag: PT-2203, fault: bias, to: true",
        "expected a difference with a unit",
    ),
    ("instruments", "at: 0 s, unit: K-220, tag: PT-2203, fault: stuck, to: 1 bar", "expected true or false"),
    (
        "instruments",
        "at: 0 s, unit: K-220, tag: PT-2203, fault: wrong span, to: true",
        "expected a factor such as 1.05",
    ),
    ("links", "at: 0 s, source: pigeon, fault: lost, for: 1 h", "'pigeon' is no source of this site"),
    ("links", "at: 0 s, source: field-bus, fault: late, for: 1 h", "needs to say by how much"),
    (
        "changes",
        "at: 0 s, unit: K-220, variable: composition, to: {hydrogen: 0.5}",
        "are not shares of one",
    ),
]


@pytest.mark.parametrize(("section", "line", "said"), WRONG, ids=lambda x: str(x)[:40])
def test_wrong_entry_says_what_is_wrong(tmp_path: Path, section: str, line: str, said: str) -> None:
    with pytest.raises(ScenarioError) as caught:
        scenario(tmp_path, f"title: t\n{section}:\n  - {{{line}}}\n")
    assert said in str(caught.value)


def test_round_that_takes_no_time_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ScenarioError, match="repeat: a round takes some time"):
        scenario(tmp_path, "title: t\nrepeat: {at: 0 s}\n")


def test_headers_that_cross_only_when_hurried_are_refused_at_that_pace(tmp_path: Path) -> None:
    """The dip of the discharge header comes before the suction rises; hurried, the rise comes first."""
    story = scenario(
        tmp_path,
        changes(
            "at: 0 s, unit: K-110, variable: discharge_header_pressure, to: 40 bara",
            "at: 100 s, unhurried: 100 s, unit: K-110, variable: discharge_header_pressure, to: 70 bara",
            "at: 150 s, unit: K-110, variable: suction_header_pressure, to: 45 bara",
        ),
    )
    assert story.at_pace(1.0).pace == 1.0
    with pytest.raises(ValueError, match="at pace 3: changes: K-110: after 50 s the discharge header"):
        story.at_pace(3.0)


def test_course_answers_for_a_row_of_instants_as_for_each_alone(tmp_path: Path) -> None:
    back = "at: 40 s, unit: K-110, variable: suction_header_pressure, to: 30 bara, over: 20 s"
    story = scenario(tmp_path, changes(SINK, back)).at_pace(1.0)
    course = story.units["K-110"].numbers["suction_pressure_pa"]
    at = np.array([-5.0, 0.0, 19.9, 20.0, 31.3, 40.0, 47.7, 60.0, 1e5])
    row = course.at(at, 30 * BAR)
    assert row.tolist() == [float(course.at(t, 30 * BAR)) for t in at]
    assert row / BAR == pytest.approx([30, 30, 30, 30, 28.87, 28, 28.77, 30, 30])  # hand
