"""The scorer on hand-made journals: one for every verdict."""

import pytest

from agent.alarms.catalogue import CATALOGUE
from agent.records import AlarmEvent, AlarmState, EventKind
from simulator.score import Run, Score, Verdict, score, table
from simulator.truth import Need, Truth, truth_of

BEGAN = 1_800_000_000.4
STORIES = ("clean-month", "cut-link", "power-dip", "quiet")
V = Verdict


def event(
    unit: str, alarm: str, after_s: float, subject: str, kind: EventKind = EventKind.RAISED
) -> AlarmEvent:
    return AlarmEvent(
        unit=unit, alarm=alarm, tick=int(BEGAN + after_s), kind=kind, state=AlarmState.UNACKNOWLEDGED,
        text="", subject=subject,
    )  # fmt: skip


def told(hours: float = 24_000.0, pace: float = 1.0) -> Run:
    return Run(began_s=BEGAN, ended_s=BEGAN + 3600.0 * hours, pace=pace)


def verdicts(found: Score) -> list[Verdict]:
    return [line.verdict for line in found.lines]


GAS = event("K-110", "gas_load_compression", 180, "cylinder2")
HOT = event("K-110", "discharge_temperature", 320, "stage1")
REVERSAL = event("K-220", "reversal", 121, "cylinder4")


def shouting() -> list[AlarmEvent]:
    """An agent that raises everything everywhere, each minute."""
    return [
        event(unit, alarm, 60.0 * minute, "cylinder1")
        for minute in range(10)
        for unit in ("K-110", "K-220", "K-330")
        for alarm in CATALOGUE
    ]


def test_what_comes_in_time_and_in_order_is_found() -> None:
    found = score(truth_of("sinking-suction"), [GAS, HOT], told())
    assert verdicts(found) == [V.FOUND, V.FOUND]
    assert found.words == "passed"
    assert found.lines[0].after_s == pytest.approx(120.0, abs=1.0)  # hand: 180 s, onset at 60 s
    assert found.lines[0].subject == "cylinder2"


@pytest.mark.parametrize(
    "story", ["sinking-suction", "wrong-ends", "first-light", "dry-cooler", "night-break"]
)
def test_silent_agent_misses_what_it_should_have_said(story: str) -> None:
    found = score(truth_of(story), [], told())
    assert found.failed
    assert V.MISSED in verdicts(found)
    assert V.FOUND not in verdicts(found)


def test_late_is_not_found() -> None:
    # hand: onset at 60 s, 90 s allowed; a tick of a second is granted
    truth = truth_of("wrong-ends")
    in_time = score(truth, [event("K-220", "reversal", 150, "cylinder4")], told())
    assert verdicts(in_time) == [V.FOUND]
    late = score(truth, [event("K-220", "reversal", 153, "cylinder4")], told())
    assert verdicts(late) == [V.LATE]
    assert late.failed


def test_pace_hurries_the_story_and_not_the_alarm_that_waits() -> None:
    truth = truth_of("wrong-ends")
    # hand: at pace 4 the onset is at 15 s, and of 90 s allowed 75 are kept: (90 - 75) / 4 + 75 = 78.75 s
    assert verdicts(score(truth, [event("K-220", "reversal", 93, "cylinder4")], told(pace=4))) == [V.FOUND]
    assert verdicts(score(truth, [event("K-220", "reversal", 96, "cylinder4")], told(pace=4))) == [V.LATE]


def test_order_within_a_unit_counts() -> None:
    truth = truth_of("sinking-suction")
    early = event("K-110", "discharge_temperature", 100, "stage1")
    found = score(truth, [early, GAS], told())
    assert verdicts(found) == [V.FOUND, V.OUT_OF_ORDER]
    assert found.failed


def test_wrong_place_is_missed_and_what_was_said_instead_is_told() -> None:
    found = score(truth_of("wrong-ends"), [event("K-220", "reversal", 121, "cylinder1")], told())
    assert verdicts(found) == [V.MISSED, V.FORBIDDEN]


def test_other_unit_is_missed() -> None:
    found = score(truth_of("wrong-ends"), [event("K-110", "reversal", 121, "cylinder4")], told())
    assert verdicts(found) == [V.MISSED, V.FORBIDDEN]


def test_alarm_before_anything_happened_is_no_find() -> None:
    found = score(truth_of("wrong-ends"), [event("K-220", "reversal", 30, "cylinder4")], told())
    assert verdicts(found) == [V.MISSED, V.FORBIDDEN]
    assert found.lines[1].why == "before anything of it happened"


def test_only_what_was_raised_counts() -> None:
    other = [k for k in EventKind if k is not EventKind.RAISED]
    events = [event("K-220", "reversal", 121, "cylinder4", kind) for kind in other]
    assert verdicts(score(truth_of("wrong-ends"), events, told())) == [V.MISSED]


def test_repeated_find_is_extra_and_does_no_harm() -> None:
    again = event("K-220", "reversal", 400, "cylinder4")
    found = score(truth_of("wrong-ends"), [REVERSAL, again], told())
    assert verdicts(found) == [V.FOUND, V.EXTRA]
    assert not found.failed


def test_what_follows_from_the_story_is_extra_and_does_no_harm() -> None:
    load = event("K-220", "gas_load_compression", 9_700, "cylinder3")
    healthy_stage = event("K-220", "discharge_temperature", 10_000, "stage2")
    found = score(truth_of("night-break"), [load, healthy_stage], told())
    assert verdicts(found) == [V.FOUND, V.NOT_IN_REACH, V.EXTRA]
    assert not found.failed


def test_what_needs_drift_detection_is_not_yet_in_reach() -> None:
    found = score(truth_of("hidden-leak"), [], told())
    assert verdicts(found) == [V.NOT_IN_REACH]
    assert found.lines[0].why == "needs drift detection"
    assert found.words == "not yet in reach"
    assert not found.failed


@pytest.mark.parametrize(
    "story", ["hidden-leak", "heavier-gas", "creeping-gauge", "half-repair", "passing-recycle"]
)
def test_silence_is_blamed_only_on_who_claims_drift_detection(story: str) -> None:
    assert score(truth_of(story), [], told()).words == "not yet in reach"
    assert score(truth_of(story), [], told(), in_reach={Need.DRIFT}).words == "FAILED"


def test_who_claims_drift_detection_is_held_to_it() -> None:
    truth = truth_of("hidden-leak")
    claims = {Need.DRIFT}
    assert verdicts(score(truth, [], told(), in_reach=claims)) == [V.MISSED]
    day = 86_400.0
    leak = event("K-220", "stage_capacity_low", 3 * day, "stage2")
    assert verdicts(score(truth, [leak], told(), in_reach=claims)) == [V.FOUND]
    wrong_stage = event("K-220", "stage_capacity_low", 3 * day, "stage3")
    assert verdicts(score(truth, [wrong_stage], told(), in_reach=claims)) == [V.MISSED, V.FORBIDDEN]


def test_found_without_a_claim_is_found() -> None:
    leak = event("K-220", "stage_capacity_low", 3 * 86_400.0, "stage2")
    assert verdicts(score(truth_of("hidden-leak"), [leak], told())) == [V.FOUND]


def test_run_that_ended_too_soon_proves_nothing() -> None:
    found = score(truth_of("wrong-ends"), [], Run(began_s=BEGAN, ended_s=BEGAN + 100.0))
    assert verdicts(found) == [V.RUN_TOO_SHORT]
    assert found.failed
    # what comes after the end of a run is not of this run
    found = score(truth_of("wrong-ends"), [REVERSAL], Run(began_s=BEGAN, ended_s=BEGAN + 100.0))
    assert verdicts(found) == [V.RUN_TOO_SHORT]


@pytest.mark.parametrize("story", STORIES)
def test_shouting_agent_fails_where_silence_is_right(story: str) -> None:
    found = score(truth_of(story), shouting(), told())
    assert found.failed
    assert len(found.of(V.FORBIDDEN)) == len(shouting())


@pytest.mark.parametrize("story", STORIES)
def test_silent_agent_passes_where_silence_is_right(story: str) -> None:
    assert not score(truth_of(story), [], told()).failed


def test_shouting_agent_passes_no_story() -> None:
    for story in (
        "sinking-suction",
        "wrong-ends",
        "first-light",
        "hidden-leak",
        "heavier-gas",
        "night-break",
    ):
        truth: Truth = truth_of(story)
        assert score(truth, shouting(), told()).failed, story


def test_table_says_it_in_words() -> None:
    text = table(
        [
            score(truth_of("wrong-ends"), [REVERSAL], told()),
            score(truth_of("hidden-leak"), [], told()),
            score(truth_of("clean-month"), [], told()),
            score(truth_of("quiet"), [GAS], told()),
        ]
    )
    lines = [" ".join(line.split()) for line in text.splitlines()]
    assert lines[0] == "story verdict what unit where after allowed"
    assert lines[1:3] == ["wrong-ends passed", "found reversal K-220 cylinder4 61 s 90 s"]
    assert lines[4] == "not yet in reach stage_capacity_low K-220 stage2 4.0 d needs drift detection"
    assert lines[5] == "clean-month passed silence"
    assert lines[6:] == ["quiet FAILED", "forbidden alarm gas_load_compression K-110 cylinder2 180 s"]


def test_silence_of_a_moment_is_no_silence() -> None:
    run = Run(began_s=BEGAN, ended_s=BEGAN + 1.0, least_s=3600.0)
    found = score(truth_of("clean-month"), [], run)
    assert found.failed
    assert [line.verdict for line in found.lines] == [Verdict.RUN_TOO_SHORT]
    whole = score(truth_of("clean-month"), [], Run(began_s=BEGAN, ended_s=BEGAN + 3600.0, least_s=3600.0))
    assert not whole.failed
