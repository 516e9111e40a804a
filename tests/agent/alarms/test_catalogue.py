import re
from dataclasses import fields

import pytest

from agent.alarms.catalogue import CATALOGUE, AlarmType, Rule
from agent.alarms.wording import setting_words
from agent.records import Priority
from model.quantities import LOWER_LIMITS, QUANTITIES, UNCERTAINTY_SUFFIX, UPPER_LIMITS
from model.units import dimensions

ALL = pytest.mark.parametrize("alarm", CATALOGUE.values(), ids=CATALOGUE.keys())


def texts(alarm: AlarmType) -> list[str]:
    return [v for f in fields(alarm) if isinstance(v := getattr(alarm, f.name), str)] + [setting_words(alarm)]


def test_every_quantity_that_may_have_a_limit_is_watched_by_one_alarm() -> None:
    watched = [w.quantity for a in CATALOGUE.values() for w in a.watched]
    assert sorted(watched) == sorted(UPPER_LIMITS | LOWER_LIMITS)


def test_the_alarm_looks_at_the_side_where_the_trouble_lies() -> None:
    for alarm in CATALOGUE.values():
        for watched in alarm.watched:
            assert (alarm.rule is Rule.BELOW_SHARE) == (watched.quantity in LOWER_LIMITS)
            # An estimate has its uncertainty stored beside it, a measured value has none.
            assert (alarm.rule is Rule.LITTLE_LEFT) != QUANTITIES[watched.quantity].has_uncertainty
            assert f"{watched.quantity}_margin" in QUANTITIES
    assert UNCERTAINTY_SUFFIX == ".u"


@ALL
def test_nothing_is_left_unsaid(alarm: AlarmType) -> None:
    assert all(texts(alarm))
    assert alarm.priority in (Priority.MEDIUM, Priority.HIGH)
    assert alarm.on_delay_s == 60
    assert alarm.off_delay_s > 0
    assert all(w.deadband > 0 for w in alarm.watched)
    assert alarm.setting_dimension in dimensions()
    assert alarm.deadband_dimension in {*dimensions(), None}


@ALL
def test_no_text_promises_or_names_what_is_not_there(alarm: AlarmType) -> None:
    for text in texts(alarm):
        assert not re.search(r"\bsafe|\bOK\b|what if|bypass|reset the trip", text, re.IGNORECASE), text


def test_only_lost_reversal_is_urgent_by_itself() -> None:
    high = [a.key for a in CATALOGUE.values() if a.priority is Priority.HIGH]
    assert high == ["reversal"]


def test_unloading_is_not_advised_against_a_high_load_or_temperature() -> None:
    """Unloading an end can raise the peak load; unloading an earlier stage heats the last one."""
    for key, alarm in CATALOGUE.items():
        if key != "reversal":
            assert "unload" in alarm.action
    assert "unloading an end can raise the peak load" in CATALOGUE["gas_load_tension"].action
    assert "do not unload the stages before it" in CATALOGUE["discharge_temperature"].action
    assert "do not open the first-stage recycle" in CATALOGUE["discharge_temperature"].action


def test_how_settings_read() -> None:
    said = {key: setting_words(a) for key, a in CATALOGUE.items()}
    assert said["pin_load_tension"] == "estimate plus band above 95 % of the limit entered, for 60 s"
    assert said["discharge_temperature"] == "less than 10 K left to the limit entered, for 60 s"
    assert said["reversal"] == "estimate less band below the minimum entered, for 60 s"
