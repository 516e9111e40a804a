from collections.abc import Iterable
from typing import Any

import pytest

from agent.alarms.limits import LimitAlarms
from agent.journal.fold import states
from agent.records import AlarmEvent, AlarmState, EventKind, Quality, Request, RunState
from agent.siteplan.plan import AlarmSetting

GAS = "gas_load_compression"
C1, C1_U, C2 = f"cylinder1.{GAS}", f"cylinder1.{GAS}.u", f"cylinder2.{GAS}"
HIGH = {C1: 168e3, C1_U: 1.5e3}
BLIND = {C1: Quality.INPUT_MISSING}
RAISED, CLEARED, ACKED = EventKind.RAISED, EventKind.CLEARED, EventKind.ACKNOWLEDGED


def run(
    engine: LimitAlarms, machine: Any, ticks: Iterable[int], *args: Any, **kwargs: Any
) -> list[AlarmEvent]:
    events = []
    for tick in ticks:
        events += engine.update(*machine.tick(tick, *args, **kwargs))
    return events


def told(events: Iterable[AlarmEvent]) -> list[tuple[int, str, EventKind]]:
    return [(e.tick, e.alarm, e.kind) for e in events]


def ask(
    name: str = "q1",
    alarm: str = GAS,
    actor: str = " R. Holm ",
    reason: str = "suction is\nbeing raised",
    **more: Any,
) -> Request:
    return Request(**{
        "id": name, "at": 0.0, "unit": "K-1", "alarm": alarm, "kind": ACKED, "actor": actor, "reason": reason,
        **more,
    })  # fmt: skip


@pytest.fixture
def engine(machine: Any) -> LimitAlarms:
    return LimitAlarms(machine.plan)


@pytest.fixture
def active(engine: LimitAlarms, machine: Any) -> LimitAlarms:
    """Its gas load in compression was raised at tick 60; the next tick is 61."""
    assert told(run(engine, machine, range(61), HIGH)) == [(60, GAS, RAISED)]
    return engine


def test_a_quiet_machine_says_nothing(engine: LimitAlarms, machine: Any) -> None:
    assert run(engine, machine, range(500)) == []
    assert set(engine.states.values()) == {AlarmState.NORMAL}


def test_raised_after_its_delay_once_with_all_an_operator_needs(engine: LimitAlarms, machine: Any) -> None:
    events = run(engine, machine, range(300), HIGH)
    assert told(events) == [(60, GAS, RAISED)]
    (event,) = events
    assert event.state is AlarmState.UNACKNOWLEDGED
    assert (event.subject, event.limit, event.unit) == ("cylinder1", 170e3, "K-1")
    assert event.value == machine.tick(60, HIGH)[0].values[machine.plan.result_names().index(C1)]
    assert event.text == (
        "K-1. Gas load in compression high. Cylinder 1: 168.0 kN by estimate, plus or minus 3.0 kN (two "
        "standard uncertainties). The upper end of that counts: the alarm point is 161.5 kN, which is 95 % "
        "of the limit of 170.0 kN (sheet 7 (invented), entered by R. Fenn)."
    )


def test_temperature_and_reversal_in_words(engine: LimitAlarms, machine: Any) -> None:
    hot = {"stage2.discharge_temperature": 403.15 - 8.64}
    (event,) = run(engine, machine, range(61), hot)
    assert event.text == (
        "K-1. Discharge temperature near its limit. Stage 2: 121.4 °C measured, 8.6 K left to the limit of "
        "130.0 °C (sheet 7 (invented), entered by R. Fenn)."
    )
    assert event.value == pytest.approx(394.51, abs=1e-4)
    turned = {"cylinder2.reversal_degrees": 0.6283, "cylinder1.reversal_percent": 0.021}  # 36 deg
    *_, event = run(engine, machine, range(61, 400), turned)
    assert (event.alarm, event.subject) == ("reversal", "cylinder2")
    assert event.text == (
        "K-1. Load reversal below its minimum. Cylinder 2: duration 36° by estimate, plus or minus 2° (two "
        "standard uncertainties). The lower end of that counts: the alarm point is the minimum of 40° "
        "(sheet 7 (invented), entered by R. Fenn). Also past it: cylinder 1."
    )


def test_the_other_cylinder_past_it_adds_no_second_alarm(active: LimitAlarms, machine: Any) -> None:
    assert run(active, machine, range(61, 200), {**HIGH, C2: 180e3}) == []


def test_a_short_excursion_is_not_raised(engine: LimitAlarms, machine: Any) -> None:
    assert run(engine, machine, range(60), HIGH) == []
    assert run(engine, machine, [60]) == []
    assert told(run(engine, machine, range(61, 130), HIGH)) == [(121, GAS, RAISED)]


def test_it_stays_within_its_deadband_and_returns_beyond_it(active: LimitAlarms, machine: Any) -> None:
    inside = {C1: 158.6e3, C1_U: 0.0}
    assert run(active, machine, range(61, 300), inside) == []
    events = run(active, machine, range(300, 400))
    assert told(events) == [(330, GAS, CLEARED)]
    assert events[0].state is AlarmState.RETURNED
    assert events[0].text == (
        "K-1. Gas load in compression high: no longer. Nearest to it now: cylinder 1: 147.0 kN by estimate, "
        "plus or minus 2.9 kN (two standard uncertainties). The upper end of that counts: the alarm point is "
        "161.5 kN, which is 95 % of the limit of 170.0 kN (sheet 7 (invented), entered by R. Fenn). "
        "Not acknowledged yet."
    )


def test_acknowledged_it_returns_to_normal(active: LimitAlarms, machine: Any) -> None:
    (event,) = active.update(*machine.tick(61, HIGH), [ask()])
    assert (event.kind, event.state) == (ACKED, AlarmState.ACKNOWLEDGED)
    assert (event.actor, event.reason, event.request) == ("R. Holm", "suction is being raised", "q1")
    assert event.text == (
        "K-1. Gas load in compression high: acknowledged by R. Holm. Reason: suction is being raised"
    )
    (event,) = run(active, machine, range(62, 200))
    assert (event.kind, event.state) == (CLEARED, AlarmState.NORMAL)


def test_acknowledging_answers_what_was_on_the_page_before_the_tick(
    active: LimitAlarms, machine: Any
) -> None:
    run(active, machine, range(61, 150))
    assert active.states[GAS] is AlarmState.RETURNED
    run(active, machine, range(150, 210), HIGH)
    events = active.update(*machine.tick(210, HIGH), [ask()])
    assert told(events) == [(210, GAS, ACKED), (210, GAS, RAISED)]
    assert active.states[GAS] is AlarmState.UNACKNOWLEDGED


@pytest.mark.parametrize(
    ("request_", "said"),
    [
        (ask(alarm="reversal"), "it is normal: there is nothing to acknowledge"),
        (ask(alarm="oil_pressure"), "there is no alarm oil_pressure"),
        (ask(actor="  "), "an acknowledgement needs a name"),
        (ask(reason="\n\t"), "an acknowledgement needs a reason"),
        (ask(reason="x" * 201), "an acknowledgement needs a reason of at most 200 characters"),
        (ask(kind=CLEARED), "only an acknowledgement can be asked for, not: cleared"),
    ],
)
def test_a_request_that_cannot_be_met_is_answered_in_words(
    active: LimitAlarms, machine: Any, request_: Request, said: str
) -> None:
    (event,) = active.update(*machine.tick(61, HIGH), [request_])
    assert (event.kind, event.request, event.alarm) == (EventKind.REFUSED, "q1", request_.alarm)
    assert event.text.endswith(f"refused: {said}.")
    assert active.states[GAS] is AlarmState.UNACKNOWLEDGED
    assert len(event.reason) <= 200


def test_two_people_at_once_the_second_is_told(active: LimitAlarms, machine: Any) -> None:
    row = machine.tick(61, HIGH)
    events = active.update(*row, [ask("a"), ask("b", actor="T. Moor"), ask("c")])
    assert [(e.kind, e.request) for e in events] == [(ACKED, "a"), (EventKind.REFUSED, "b")]
    assert "acknowledged already" in events[1].text
    # One refusal of an alarm fits a tick of the journal; the third person is answered on the next.
    (event,) = active.update(*machine.tick(62, HIGH), [ask("c"), ask("a"), ask("b")])
    assert (event.kind, event.request) == (EventKind.REFUSED, "c")
    # A journal that could not be written yet still lists them as open.
    assert active.update(*machine.tick(63, HIGH), [ask("a"), ask("b"), ask("c")]) == []


def test_requests_for_another_unit_are_passed_over(active: LimitAlarms, machine: Any) -> None:
    assert active.update(*machine.tick(61, HIGH), [ask(unit="K-2")]) == []


def test_bad_data_freezes_an_active_alarm_and_says_so_once(active: LimitAlarms, machine: Any) -> None:
    events = run(active, machine, range(61, 400), HIGH, quality=BLIND)
    assert told(events) == [(61, GAS, EventKind.BLIND)]
    assert events[0].state is AlarmState.UNACKNOWLEDGED
    assert events[0].text == (
        "K-1. Gas load in compression high: not evaluated (cylinder 1, an input is missing). "
        "It stays unacknowledged. Not evaluated is not normal: use the control system."
    )
    events = run(active, machine, range(400, 500))
    assert told(events) == [(400, GAS, EventKind.SIGHTED), (430, GAS, CLEARED)]


def test_bad_data_of_a_quiet_machine_is_no_event(engine: LimitAlarms, machine: Any) -> None:
    assert run(engine, machine, range(300), quality=BLIND) == []


def test_a_pending_alarm_is_frozen_and_goes_on(engine: LimitAlarms, machine: Any) -> None:
    events = run(engine, machine, range(50), HIGH)
    events += run(engine, machine, range(50, 80), HIGH, quality=BLIND)
    events += run(engine, machine, range(80, 200), HIGH)
    # hand: seen at 0..49, so 49 s are counted; eleven more judged ticks end at 90
    assert told(events) == [
        (50, GAS, EventKind.BLIND), (80, GAS, EventKind.SIGHTED), (90, GAS, RAISED),
    ]  # fmt: skip
    assert "It was about to be raised." in events[0].text


def test_one_bad_tick_does_not_fulfil_or_lose_anything(active: LimitAlarms, machine: Any) -> None:
    run(active, machine, range(61, 80))
    events = run(active, machine, [80], quality=BLIND) + run(active, machine, range(81, 120))
    # hand: quiet at 61..79, eighteen seconds; twelve more judged ticks end at 92
    assert told(events) == [(80, GAS, EventKind.BLIND), (81, GAS, EventKind.SIGHTED), (92, GAS, CLEARED)]


def test_a_stopped_machine_raises_nothing_and_returns_what_was_active(
    active: LimitAlarms, machine: Any
) -> None:
    events = run(active, machine, range(61, 300), {**HIGH, "stage1.discharge_temperature": 500.0},
                 state=RunState.STOPPED)  # fmt: skip
    assert told(events) == [(91, GAS, CLEARED)]
    assert "The unit has stopped: there is nothing to judge. Not acknowledged yet." in events[0].text


def test_a_stopped_machine_without_numbers_returns_too(active: LimitAlarms, machine: Any) -> None:
    quality = dict.fromkeys(machine.plan.result_names(), Quality.NOT_RUNNING)
    events = run(active, machine, range(61, 300), quality=quality, state=RunState.STOPPED)
    assert told(events) == [(91, GAS, CLEARED)]


def test_a_machine_of_unknown_state_is_not_judged(active: LimitAlarms, machine: Any) -> None:
    events = run(active, machine, range(61, 300), state=RunState.NOT_KNOWN)
    assert told(events) == [(61, GAS, EventKind.BLIND)]
    assert "(the running state is not known)" in events[0].text


def test_a_starting_machine_is_judged(engine: LimitAlarms, machine: Any) -> None:
    assert told(run(engine, machine, range(100), HIGH, state=RunState.STARTING)) == [(60, GAS, RAISED)]


def test_a_gap_in_ticks_fulfils_nothing(engine: LimitAlarms, machine: Any) -> None:
    run(engine, machine, range(30), HIGH)
    assert run(engine, machine, [85], HIGH) == []  # the agent was down for 55 s
    assert told(run(engine, machine, range(86, 200), HIGH)) == [
        (115, GAS, RAISED)
    ]  # hand: 30 judged, 30 more


def test_after_a_long_gap_the_delay_starts_anew(engine: LimitAlarms, machine: Any) -> None:
    run(engine, machine, range(59), HIGH)
    assert told(run(engine, machine, range(1000, 1100), HIGH)) == [(1060, GAS, RAISED)]


def test_a_limit_taken_away_returns_its_alarm(active: LimitAlarms, machine: Any) -> None:
    bare = machine.without(GAS)
    engine = LimitAlarms(bare.plan)
    engine.reset(states([AlarmEvent(unit="K-1", alarm=GAS, tick=60, kind=RAISED,
                                    state=AlarmState.UNACKNOWLEDGED, text="")]))  # fmt: skip
    (event,) = run(engine, bare, range(61, 200), HIGH)
    assert event.kind is CLEARED
    assert "No limit is entered any more." in event.text
    assert {u.alarm for u in engine.unarmed} == {GAS}


def test_a_site_may_choose_its_delay(machine: Any) -> None:
    own = machine.with_settings(AlarmSetting(alarm=GAS, on_delay_s=10.0))
    assert told(run(LimitAlarms(own.plan), own, range(100), HIGH)) == [(10, GAS, RAISED)]


def test_after_a_restart_pending_delays_go_on_and_nothing_is_told_twice(
    active: LimitAlarms, machine: Any
) -> None:
    before = [machine.tick(t, HIGH) for t in range(61)] + [machine.tick(t) for t in range(61, 80)]
    unjudged = [machine.tick(t) for t in range(80, 85)]
    journal = states(run(LimitAlarms(machine.plan), machine, range(61), HIGH))
    engine = LimitAlarms(machine.plan)
    engine.reset(journal)
    assert engine.states[GAS] is AlarmState.UNACKNOWLEDGED
    assert engine.warm([(f, r) for r, f in before + unjudged], last_judged=79) == []
    assert told(run(engine, machine, range(85, 100))) == [(91, GAS, CLEARED)]


def test_rows_stored_but_never_judged_are_told_at_start(machine: Any) -> None:
    engine = LimitAlarms(machine.plan)
    rows = [(f, r) for r, f in (machine.tick(t, HIGH) for t in range(70))]
    assert told(engine.warm(rows, last_judged=55)) == [(60, GAS, RAISED)]
    engine.reset()
    assert told(engine.warm(rows, last_judged=None)) == [(60, GAS, RAISED)]


def test_rows_that_do_not_fit_are_a_mistake_of_the_caller(engine: LimitAlarms, machine: Any) -> None:
    row, frame = machine.tick(5)
    engine.update(row, frame)
    with pytest.raises(ValueError, match="tick 5 after 5"):
        engine.update(row, frame)
    with pytest.raises(ValueError, match="one tick of this unit"):
        engine.update(row, machine.tick(6)[1])
    other = machine.with_inputs(1)
    with pytest.raises(ValueError, match="columns of the plan"):
        engine.update(*other.tick(7))
