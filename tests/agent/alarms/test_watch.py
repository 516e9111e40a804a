import math
from typing import Any

import pytest

from agent.alarms.catalogue import CATALOGUE
from agent.alarms.watch import Condition, configured, look, points, run_state, unarmed, worst
from agent.records import Quality, RunState
from agent.siteplan.plan import AlarmSetting

GAS, TEMPERATURE, REVERSAL = "gas_load_compression", "discharge_temperature", "reversal"
C1_GAS, C1_U = "cylinder1.gas_load_compression", "cylinder1.gas_load_compression.u"
S1_T = "stage1.discharge_temperature"
C1_DEG, C1_DEG_U = "cylinder1.reversal_degrees", "cylinder1.reversal_degrees.u"
C1_PCT, C1_PCT_U = "cylinder1.reversal_percent", "cylinder1.reversal_percent.u"
T, H, F, N = Condition.TRUE, Condition.HOLD, Condition.FALSE, Condition.NOT_JUDGED


def seen(machine: Any, key: str, values: dict[str, float], quality: dict[str, Quality] | None = None) -> Any:
    alarm = configured(machine.plan)[key]
    row, frame = machine.tick(1, values, quality=quality)
    return worst([look(p, alarm, row, frame) for p in points(machine.plan, alarm)])


@pytest.mark.parametrize(
    ("load_kn", "u_kn", "expected"),
    [
        # hand: limit 170 kN, alarm point 161.5, deadband 3.4 kN, band two standard uncertainties
        (161.6, 0.0, T),
        (161.4, 0.0, H),
        (158.2, 0.0, H),
        (158.0, 0.0, F),
        (156.0, 3.0, T),  # 156 + 6 = 162
        (155.0, 3.0, H),
        (152.0, 3.0, F),
        (175.0, 0.0, T),
    ],
)
def test_a_load_with_its_band_against_its_alarm_point(
    machine: Any, load_kn: float, u_kn: float, expected: Condition
) -> None:
    found = seen(machine, GAS, {C1_GAS: load_kn * 1e3, C1_U: u_kn * 1e3})
    assert found.condition is expected
    if expected is T:
        assert (found.point.subject, found.point.limit.value) == ("cylinder1", 170e3)


@pytest.mark.parametrize(
    ("kelvin_left", "expected"), [(9.9, T), (10.1, H), (12.9, H), (13.1, F), (-2.0, T)]  # hand: 10 K, 3 K
)  # fmt: skip
def test_a_temperature_by_what_is_left(machine: Any, kelvin_left: float, expected: Condition) -> None:
    assert seen(machine, TEMPERATURE, {S1_T: 403.15 - kelvin_left}).condition is expected


@pytest.mark.parametrize(
    ("duration_deg", "magnitude_percent", "expected"),
    [
        # hand: minimum 40 deg and 3 %, deadbands 3 deg and 2 %, band two standard uncertainties
        ((39.9, 0.0), (66.0, 0.0), T),
        ((41.9, 1.0), (66.0, 0.0), T),
        ((42.1, 1.0), (66.0, 0.0), H),
        ((44.9, 1.0), (66.0, 0.0), H),
        ((45.1, 1.0), (66.0, 0.0), F),
        ((100.0, 1.0), (2.9, 0.0), T),
        ((100.0, 1.0), (3.1, 0.0), H),
        ((100.0, 1.0), (5.5, 0.3), H),
        ((100.0, 1.0), (5.7, 0.3), F),
        ((0.0, 1.0), (0.0, 0.2), T),
    ],
)
def test_reversal_by_duration_and_by_magnitude(
    machine: Any,
    duration_deg: tuple[float, float],
    magnitude_percent: tuple[float, float],
    expected: Condition,
) -> None:
    values = {
        C1_DEG: math.radians(duration_deg[0]), C1_DEG_U: math.radians(duration_deg[1]),
        C1_PCT: magnitude_percent[0] / 100, C1_PCT_U: magnitude_percent[1] / 100,
    }  # fmt: skip
    assert seen(machine, REVERSAL, values).condition is expected


def test_the_worst_is_named_across_cylinders_and_kinds(machine: Any) -> None:
    values = {C1_DEG: math.radians(38), "cylinder2.reversal_degrees": math.radians(20)}
    found = seen(machine, REVERSAL, values)
    assert (found.point.subject, found.point.quantity) == ("cylinder2", "reversal_degrees")
    # hand: 38 deg lacks (40 - 36)/140 = 2.9 % of the span above the minimum, 0.1 % lacks 3.3/97 = 3.4 %
    found = seen(machine, REVERSAL, {C1_DEG: math.radians(38), "cylinder2.reversal_percent": 0.001})
    assert found.point.quantity == "reversal_percent"


@pytest.mark.parametrize(
    "quality", [q for q in Quality if q is not Quality.GOOD], ids=lambda q: q.name
)  # fmt: skip
def test_what_is_not_good_is_not_judged(machine: Any, quality: Quality) -> None:
    """An uncertain source moves nobody at Medium or High either."""
    assert seen(machine, GAS, {C1_GAS: 1e6}, {C1_GAS: quality}).condition is N
    assert seen(machine, TEMPERATURE, {S1_T: 500.0}, {S1_T: quality}).condition is N
    assert seen(machine, TEMPERATURE, {S1_T: 500.0}, {f"{S1_T}_margin": quality}).condition is N


def test_no_number_is_not_judged_whatever_its_quality(machine: Any) -> None:
    assert seen(machine, GAS, {C1_GAS: math.nan}).condition is N
    assert seen(machine, TEMPERATURE, {S1_T: math.nan}).condition is N
    assert seen(machine, REVERSAL, {C1_PCT: math.nan}).condition is N


def test_one_cylinder_in_trouble_counts_although_another_is_not_seen(machine: Any) -> None:
    found = seen(machine, GAS, {C1_GAS: 180e3, "cylinder2.gas_load_compression": math.nan})
    assert (found.condition, found.point.subject) == (T, "cylinder1")


def test_one_cylinder_in_order_is_not_enough_while_another_is_not_seen(machine: Any) -> None:
    """The one that is not seen may be the one still in trouble."""
    other = {"cylinder2.gas_load_compression": math.nan}
    for load in (147e3, 160e3):
        found = seen(machine, GAS, {C1_GAS: load, C1_U: 0.0, **other})
        assert (found.condition, found.point.subject) == (N, "cylinder2")


def test_without_its_band_past_is_past_and_short_is_not_known(machine: Any) -> None:
    assert seen(machine, GAS, {C1_GAS: 162e3, C1_U: math.nan}).condition is T
    assert seen(machine, GAS, {C1_GAS: 150e3, C1_U: math.nan}).condition is N


def test_an_alarm_without_a_limit_cannot_arise_and_is_listed(machine: Any) -> None:
    bare = machine.without("gas_load_compression", "reversal_percent")
    assert points(bare.plan, CATALOGUE[GAS]) == ()
    assert {p.quantity for p in points(bare.plan, CATALOGUE[REVERSAL])} == {"reversal_degrees"}
    listed = {(u.alarm, u.subject, u.quantity): u.reason for u in unarmed(bare.plan)}
    assert listed == {
        (a, f"cylinder{n}", q): "no limit entered"
        for a, q in ((GAS, GAS), (REVERSAL, "reversal_percent"))
        for n in (1, 2)
    }
    assert unarmed(machine.plan) == ()


def test_a_limit_without_a_transmitter_is_listed(machine: Any) -> None:
    one = machine.with_inputs(1)
    assert [p.subject for p in points(one.plan, CATALOGUE[TEMPERATURE])] == ["stage1"]
    ((found),) = unarmed(one.plan)
    assert (found.subject, found.reason) == ("stage2", "no such input in the site file")


def test_a_sites_own_settings(machine: Any) -> None:
    own = machine.with_settings(
        AlarmSetting(alarm=GAS, setting=0.9, deadband=0.05),
        AlarmSetting(alarm=REVERSAL, on_delay_s=20.0),
    )
    assert seen(own, GAS, {C1_GAS: 153.5e3, C1_U: 0.0}).condition is T  # hand: 0.9 x 170 = 153
    assert seen(own, GAS, {C1_GAS: 145e3, C1_U: 0.0}).condition is H  # hand: down to 144.5
    reversal = configured(own.plan)[REVERSAL]
    assert reversal.on_delay_s == 20
    assert reversal.watched == CATALOGUE[REVERSAL].watched
    with pytest.raises(ValueError, match="one deadband does not fit what reversal watches"):
        configured(machine.with_settings(AlarmSetting(alarm=REVERSAL, deadband=0.1)).plan)
    with pytest.raises(ValueError, match="no alarm rod_drop"):
        configured(machine.with_settings(AlarmSetting(alarm="rod_drop")).plan)


def test_the_running_state_is_only_what_was_told(machine: Any) -> None:
    place = machine.plan.result_names().index("unit.run_state")
    for state in RunState:
        assert run_state(machine.tick(1, state=state)[0], place) is state
    blind = machine.tick(1, state=RunState.STOPPED, quality={"unit.run_state": Quality.INPUT_MISSING})
    assert run_state(blind[0], place) is RunState.NOT_KNOWN
