import itertools

from agent.alarms.table import ACTIVE, EVENT_OF, TRANSITIONS, Trigger, step
from agent.records import AlarmState

# source: alarm state diagram of IEC 62682 and ANSI/ISA-18.2, alarms that do not latch, no shelving; letters
# of that diagram: A normal, B unacknowledged active, C acknowledged active, D returned unacknowledged.
# Re-alarm from C is optional there (a timer, or a second cause) and not used here.
STANDARD = """
A condition-true  B
B acknowledge     C
B condition-false D
C condition-false A
D acknowledge     A
D condition-true  B
"""
LETTERS = {
    "A": AlarmState.NORMAL,
    "B": AlarmState.UNACKNOWLEDGED,
    "C": AlarmState.ACKNOWLEDGED,
    "D": AlarmState.RETURNED,
}


def test_every_pair_of_state_and_trigger_is_as_in_the_standard() -> None:
    expected = {}
    for line in STANDARD.split("\n")[1:-1]:
        before, trigger, after = line.split()
        expected[LETTERS[before], Trigger(trigger.replace("-", " "))] = LETTERS[after]
    for pair in itertools.product(AlarmState, Trigger):
        assert step(*pair) == expected.get(pair), pair
    assert dict(TRANSITIONS) == expected


def test_a_condition_only_becomes_true_where_it_was_false() -> None:
    for (before, trigger), after in TRANSITIONS.items():
        match trigger:
            case Trigger.CONDITION_TRUE:
                assert before not in ACTIVE
                assert after in ACTIVE
            case Trigger.CONDITION_FALSE:
                assert before in ACTIVE
                assert after not in ACTIVE
            case Trigger.ACKNOWLEDGE:
                assert (before in ACTIVE) == (after in ACTIVE)


def test_every_trigger_has_its_event() -> None:
    assert set(EVENT_OF) == set(Trigger)
