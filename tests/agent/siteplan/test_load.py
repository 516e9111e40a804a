"""A site file becomes frozen values in SI, or tells every fault it has."""

import copy
import hashlib
import json
import math
import re
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from agent.alarms.catalogue import CATALOGUE
from agent.siteplan.alarm_settings import ALARMS
from agent.siteplan.document import read_document
from agent.siteplan.errors import Fault, SiteFileError
from agent.siteplan.load import load_site
from agent.siteplan.plan import AlarmSetting, FlowReference, MqttVersion, SitePlan, SourceKind
from agent.siteplan.schema import COMPONENTS
from agent.siteplan.sources import covers
from model import gas, units
from model.machine import EndState, Side

ROOT = Path(__file__).resolve().parents[3]
OSTMERE = ROOT / "simulator" / "sites" / "ostmere.yaml"
MISTAKES = ROOT / "tests" / "config_errors"
PLAIN = MISTAKES / "no_mistake.yaml"


@pytest.fixture(scope="module")
def ostmere() -> SitePlan:
    return load_site(OSTMERE)


def changed(tmp_path: Path, *changes: tuple[str, str]) -> Path:
    """The plain site with other words in it."""
    text = PLAIN.read_text(encoding="utf-8")
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    path = tmp_path / "site.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def faults(path: Path) -> list[str]:
    with pytest.raises(SiteFileError) as caught:
        load_site(path)
    return [str(fault).removeprefix(str(path)).lstrip(":") for fault in caught.value.faults]


# --- mistakes ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize("path", sorted(MISTAKES.glob("*.yaml")), ids=lambda p: p.stem)
def test_each_mistake_is_told_exactly(path: Path) -> None:
    """The lines '# expect ...' at the top of a file are its faults, all of them and in their order."""
    expected = re.findall(r"^# expect (.*)$", path.read_text(encoding="utf-8"), flags=re.MULTILINE)
    if path == PLAIN:
        assert load_site(path).units
    else:
        assert expected, "the file does not say what is wrong with it"
        assert faults(path) == expected


def test_six_mistakes_are_listed_at_once() -> None:
    with pytest.raises(SiteFileError) as caught:
        load_site(MISTAKES / "six_mistakes.yaml")
    assert len(caught.value.faults) == 6
    assert str(caught.value).startswith(f"{MISTAKES / 'six_mistakes.yaml'}: 6 faults in the site file\n")
    assert len({fault.line for fault in caught.value.faults}) == 6


def test_no_password_is_repeated_in_a_message() -> None:
    for path in (MISTAKES / "password_in_address.yaml", MISTAKES / "password_as_key.yaml"):
        with pytest.raises(SiteFileError) as caught:
            load_site(path)
        assert "hunter2" not in str(caught.value)


def test_mistake_under_an_anchor_is_told_once(tmp_path: Path) -> None:
    text = OSTMERE.read_text(encoding="utf-8").replace("bore: 195 mm", "bore: 195")
    path = tmp_path / "site.yaml"
    path.write_text(text, encoding="utf-8")
    told = faults(path)
    assert len(told) == 1
    assert told[0].startswith("43: units[0].stages[0].cylinders[0].bore: '195': expected a length")


NOT_UTF8 = "expected text in UTF-8 (save the file again with that encoding)"
CONTROL = "expected valid YAML (unacceptable character #x0001: special characters are not allowed)"
UNCLOSED = (
    "2: expected valid YAML (expected ',' or ']', but got '<stream end>', while parsing a flow sequence that"
    " starts on line 1)"
)
SECOND_DOCUMENT = (
    "2: expected valid YAML (but found another document, expected a single document in the stream that starts"
    " on line 1)"
)


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"", "expected a site file, but this one is empty"),
        (b"# nothing but a remark\n", "expected a site file, but this one is empty"),
        (b"- a\n- b\n", "1: expected keys with their values, e.g. 'schema: 1'"),
        (b"site:\n\tname: x\n", "2: expected valid YAML (indent with spaces, not tabs)"),
        (b"site: [1, 2\n", UNCLOSED),
        (b"site: *nowhere\n", "1: expected valid YAML (found undefined alias 'nowhere')"),
        (b"a: &a [*a]\n", "1: expected an alias that does not hold itself"),
        (b"a: &a {<<: *a}\n", "1: expected an alias that does not hold itself"),
        (b"[" * 600, "expected fewer brackets inside each other"),
        (b"schema: 1\nsite: \xe9t\xe9\n", f"2: {NOT_UTF8}"),
        ("schema: 1\n".encode("utf-16"), f"1: {NOT_UTF8}"),
        (b"a: \x01\n", CONTROL),
        (b"a: 1\n---\nb: 2\n", SECOND_DOCUMENT),
    ],
)
def test_file_that_is_no_site_file_is_a_clean_fault(tmp_path: Path, content: bytes, expected: str) -> None:
    path = tmp_path / "site.yaml"
    path.write_bytes(content)
    assert [f.lstrip(" ") for f in faults(path)] == [expected]


def test_aliases_of_aliases_do_not_fill_the_memory(tmp_path: Path) -> None:
    lines = ["a: &a [1, 2, 3, 4, 5, 6, 7, 8, 9]"]
    lines += [
        f"{new}: &{new} [{', '.join([f'*{old}'] * 9)}]"
        for old, new in zip("abcdefghi", "bcdefghij", strict=True)
    ]
    path = tmp_path / "site.yaml"
    path.write_text("\n".join(lines), encoding="utf-8")
    assert "expected a smaller site file" in faults(path)[0]


def test_missing_file_and_folder_are_clean_faults(tmp_path: Path) -> None:
    assert faults(tmp_path) == [" expected a site file, but this is a folder"]
    assert faults(tmp_path / "none.yaml") == [" expected a readable site file (No such file or directory)"]


def test_byte_order_mark_and_windows_line_ends_are_read(tmp_path: Path) -> None:
    path = tmp_path / "site.yaml"
    path.write_bytes(b"\xef\xbb\xbf" + PLAIN.read_bytes().replace(b"\n", b"\r\n"))
    assert load_site(path).units == load_site(PLAIN).units


def _places(value: Any, place: tuple[Any, ...] = ()) -> Iterator[tuple[Any, ...]]:
    if place:
        yield place
    for key, inner in (
        value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    ):
        yield from _places(inner, (*place, key))


PLAIN_VALUES = read_document(PLAIN).values
ODD: st.SearchStrategy[Any] = st.sampled_from(
    [None, True, "", "0", "-1", "1e400", "nan", "every cylinder", [], {}, [[]], {"x": None}, "\u0661"]
)


@settings(max_examples=150, deadline=None)
@given(place=st.sampled_from(list(_places(PLAIN_VALUES))), odd=ODD)
def test_odd_value_anywhere_is_a_plan_or_a_list_of_faults(
    tmp_path_factory: pytest.TempPathFactory, place: tuple[Any, ...], odd: Any
) -> None:
    values = copy.deepcopy(PLAIN_VALUES)
    around = values
    for step in place[:-1]:
        around = around[step]
    around[place[-1]] = odd
    path = tmp_path_factory.mktemp("odd") / "site.yaml"
    path.write_text(json.dumps(values), encoding="utf-8")  # JSON is YAML
    told: tuple[Fault, ...] = ()
    try:
        load_site(path)
    except SiteFileError as error:
        told = error.faults
    assert all(fault.expected and fault.line for fault in told)


# --- the values -------------------------------------------------------------------------------------------


def test_demo_site_is_read_in_si(ostmere: SitePlan) -> None:
    assert (ostmere.schema, ostmere.name, ostmere.simulated) == (1, "Ostmere Works", True)
    assert ostmere.barometer_pa == pytest.approx(101300.0)  # hand
    assert str(ostmere.zone) == "Europe/Copenhagen"
    assert [u.id for u in ostmere.units] == ["K-110", "K-220", "K-330"]
    unit = ostmere.unit("K-110").unit
    assert unit.stroke_m == pytest.approx(0.140)  # hand
    assert unit.connecting_rod_m == pytest.approx(0.360)  # hand
    assert unit.rated_speed_rad_s == pytest.approx(30 * math.pi)  # hand: 900 rpm is 15 revolutions a second
    assert unit.ambient_pressure_pa == pytest.approx(101300.0)  # hand
    assert sum(unit.composition.values()) == pytest.approx(1, abs=1e-12)
    assert unit.composition["methane"] == pytest.approx(0.9)  # hand
    assert unit.domain.low_temperature_k == pytest.approx(273.15)  # hand
    assert unit.domain.high_temperature_k == pytest.approx(448.15)  # hand
    assert unit.domain.high_pressure_pa == pytest.approx(95e5)  # hand


def test_sources_take_what_is_simulated_at_a_simulated_site_alone(ostmere: SitePlan) -> None:
    assert {s.takes_simulated for s in ostmere.sources.values()} == {True}
    real = load_site(PLAIN)
    assert not real.simulated
    assert {s.takes_simulated for s in real.sources.values()} == {False}


def test_merge_key_gives_the_second_cylinder_the_sizes_of_the_first(ostmere: SitePlan) -> None:
    first, second = ostmere.unit("K-110").unit.stages[0].cylinders
    assert (first.number, second.number) == (1, 2)
    assert (second.bore_m, second.ends) == (first.bore_m, first.ends)
    assert second.bore_m == pytest.approx(0.195)  # hand
    head, crank = second.ends
    assert (head.side, crank.side) == (Side.HEAD, Side.CRANK)
    assert [head.clearance, crank.clearance] == pytest.approx([0.16, 0.18])  # hand
    # hand: 17.9 cm2 / (pi/4 * 19.5^2 = 298.648 cm2) = 0.059937; the crank end lacks the rod's 31.172 cm2:
    # 16.0 / 267.475 = 0.059819
    assert head.suction_area_ratio == pytest.approx(0.059937, rel=1e-4)
    assert crank.discharge_area_ratio == pytest.approx(0.059819, rel=1e-4)


def test_load_steps_say_what_each_end_does(ostmere: SitePlan) -> None:
    steps = ostmere.unit("K-220").unit.load_steps
    assert [(s.index, s.word) for s in steps] == [(0, "100"), (1, "50-head-open"), (2, "50-crank-open")]
    assert steps[2].state(3, Side.CRANK) is EndState.HELD_OPEN
    assert steps[2].state(3, Side.HEAD) is EndState.LOADED
    assert all(step.permitted for step in steps)


def test_limits_of_every_cylinder_become_one_each(ostmere: SitePlan) -> None:
    unit = ostmere.unit("K-220").unit
    assert len(unit.limits) == 4 * 6 + 3  # hand
    for number in (1, 2, 3, 4):
        limit = unit.limit(f"cylinder{number}", "reversal_degrees")
        assert limit is not None
        assert limit.value == pytest.approx(math.radians(40))  # hand
        assert limit.entered_by == "R. Fennimore"
    trip = unit.limit("stage3", "discharge_temperature")
    assert trip is not None
    assert trip.value == pytest.approx(403.15)  # hand


def test_inputs_convert_gauge_readings_to_absolute(ostmere: SitePlan) -> None:
    plan = ostmere.unit("K-110")
    pressure = plan.input("stage1.suction_pressure")
    assert pressure is not None
    assert 20.0 * pressure.scale + pressure.offset == pytest.approx(2101300.0)  # hand: 20 barg
    assert [pressure.span_low, pressure.span_high] == pytest.approx([101300.0, 6101300.0])  # hand
    assert pressure.accuracy == pytest.approx(15000.0)  # hand: 0.25 % of 60 bar
    assert pressure.stale_after_s == 10
    speed = plan.input("unit.speed")
    assert speed is not None
    assert speed.accuracy == pytest.approx(math.pi / 30)  # hand: 1 rpm
    word = plan.input("unit.load_step")
    assert word is not None
    assert (word.span_low, word.span_high, word.accuracy) == (-math.inf, math.inf, 0.0)
    on_change = ostmere.unit("K-220").input("unit.load_step")
    assert on_change is not None
    assert (word.on_change, on_change.on_change) == (False, True)


def test_sources_keep_what_was_entered(ostmere: SitePlan) -> None:
    mqtt, opcua = ostmere.sources["field-bus"], ostmere.sources["control-system"]
    assert (mqtt.kind, opcua.kind) == (SourceKind.MQTT_JSON, SourceKind.OPCUA)
    assert (mqtt.mqtt_version, mqtt.client_id) == (MqttVersion.V311, "throwline-ostmere")
    assert mqtt.topics == ("ostmere/K-110/#",)
    sparkplug = ostmere.sources["field-gateway"]
    assert (sparkplug.kind, sparkplug.group) == (SourceKind.MQTT_SPARKPLUG, "ostmere")
    assert (sparkplug.mqtt_version, sparkplug.client_id) == (MqttVersion.V311, "throwline-ostmere-gateway")
    assert opcua.address == "opc.tcp://127.0.0.1:4840/ostmere"


def test_sparkplug_source_is_a_group_on_a_broker(tmp_path: Path) -> None:
    opcua = "    kind: opcua\n    address: opc.tcp://127.0.0.1:4840/plant\n"
    sparkplug = "    kind: mqtt_sparkplug\n    address: mqtt://127.0.0.1:1883\n    group: ostmere\n"
    source = load_site(changed(tmp_path, (opcua, sparkplug), ("ns=2;s=", "gw/K-1/"))).sources["control"]
    assert (source.kind, source.group, source.topics) == (SourceKind.MQTT_SPARKPLUG, "ostmere", ())
    assert (source.mqtt_version, source.client_id) == (MqttVersion.V5, "throwline-small-works-control")


def test_reading_the_demo_site_loads_neither_pint_nor_the_gas_library() -> None:
    """Both are slow to import, and the plant and the pages read the file too."""
    code = (
        "import sys; from agent.siteplan.load import load_site; load_site(sys.argv[1]);"
        "sys.exit(bool({'pint', 'CoolProp'} & set(sys.modules)))"
    )
    command = [sys.executable, "-c", code, str(OSTMERE)]
    assert subprocess.run(command, check=False, cwd=ROOT).returncode == 0


def test_digest_is_of_the_text_as_read(ostmere: SitePlan) -> None:
    assert ostmere.text == OSTMERE.read_text(encoding="utf-8")
    assert ostmere.digest == hashlib.sha256(OSTMERE.read_bytes()).hexdigest()


def test_addresses_can_be_replaced(ostmere: SitePlan) -> None:
    plan = load_site(OSTMERE, addresses={"field-bus": "mqtt://127.0.0.1:50123"})
    assert plan.sources["field-bus"].address == "mqtt://127.0.0.1:50123"
    assert plan.sources["control-system"] == ostmere.sources["control-system"]
    assert plan.digest == ostmere.digest


@pytest.mark.parametrize(
    ("name", "address", "expected"),
    [
        ("field-buss", "mqtt://127.0.0.1:1", "expected a source of this file (did you mean field-bus?)"),
        ("field-bus", "http://127.0.0.1", "'http://127.0.0.1': expected an address such as mqtt://host:1883"),
    ],
)
def test_wrong_replacement_of_an_address_is_a_fault(name: str, address: str, expected: str) -> None:
    with pytest.raises(SiteFileError) as caught:
        load_site(OSTMERE, addresses={name: address})
    assert str(caught.value).endswith(expected)


# --- what a site may enter beyond the demo ----------------------------------------------------------------


def test_alarm_settings_are_read_in_si() -> None:
    settings = load_site(PLAIN).units[0].alarm_settings
    # hand
    assert settings == (AlarmSetting(alarm="gas_load_tension", setting=0.9, deadband=0.03, on_delay_s=30.0),)


def test_single_acting_cylinder_with_a_tail_rod(tmp_path: Path) -> None:
    crank = (
        "              crank: {clearance: 18 %, suction_valve_area: 28 cm2, discharge_valve_area: 28 cm2}\n"
    )
    path = changed(tmp_path, (crank, ""), ("rod: 60 mm", "rod: 60 mm\n            tail_rod: 50 mm"))
    cylinder = load_site(path).units[0].unit.cylinders[0]
    assert [end.side for end in cylinder.ends] == [Side.HEAD]
    # hand: 30 cm2 / (pi/4 * (25^2 - 5^2) = 471.239 cm2)
    assert cylinder.ends[0].suction_area_ratio == pytest.approx(30 / 471.239, rel=1e-5)


def test_load_step_may_be_known_and_not_permitted(tmp_path: Path) -> None:
    path = changed(
        tmp_path, ("held_open: [cylinder 1 head]", "held_open: [cylinder 1 head]\n        permitted: false")
    )
    assert [step.permitted for step in load_site(path).units[0].unit.load_steps] == [True, False]


def test_source_without_filters_subscribes_to_the_topics_of_its_inputs(tmp_path: Path) -> None:
    path = changed(tmp_path, ("    topics: [plant/#]\n", "    value_field: v\n    time_field: t\n"))
    source = load_site(path).sources["bus"]
    assert source.topics == ("plant/PT-1", "plant/PT-2", "plant/TT-1")
    assert (source.value_field, source.time_field, source.quality_field) == ("v", "t", "quality")
    assert source.client_id == "throwline-small-works-bus"


def test_composition_is_normalised_within_its_tolerance(tmp_path: Path) -> None:
    composition = (
        load_site(changed(tmp_path, ("methane: 0.02}", "methane: 2.1 %}"))).units[0].unit.composition
    )
    assert composition["methane"] == pytest.approx(0.021 / 1.001, rel=1e-12)  # hand
    assert sum(composition.values()) == pytest.approx(1, abs=1e-15)


def test_american_units_give_the_same_machine(tmp_path: Path) -> None:
    path = changed(
        tmp_path,
        ("bore: 250 mm", "bore: 10 in"),
        ("value: 150 kN", "value: 34 klbf"),
        ("unit: barg, span: 0 barg to 30 barg", "unit: psig, span: 0 to 435 psig"),
        ("unit: degC, span: 0 degC to 100 degC", "unit: degF, span: 32 degF to 212 degF"),
    )
    plan = load_site(path).units[0]
    assert plan.unit.cylinders[0].bore_m == pytest.approx(0.254)  # hand
    assert plan.unit.limits[0].value == pytest.approx(151240.0, rel=1e-4)  # hand: 34 000 * 4.448222
    pressure, temperature = plan.inputs[0], plan.inputs[2]
    assert 100 * pressure.scale + pressure.offset == pytest.approx(101300 + 689475.7)  # hand
    assert 95 * temperature.scale + temperature.offset == pytest.approx(308.15)  # hand


def test_flow_reference_is_kept() -> None:
    reference = FlowReference(temperature_k=273.15, pressure_pa=101325.0, dry=True)
    assert load_site(PLAIN).units[0].flow_reference == reference


TEMPERATURE_INPUT = (
    "quantity: discharge_temperature, of: stage 1, tag: TT-2",
    "quantity: electrical_power, of: unit, tag: TT-2",
)
TEMPERATURE_SPAN = (
    "unit: degC, span: 0 degC to 200 degC, accuracy: 1 K",
    "unit: kW, span: 0 kW to 900 kW, accuracy: 9 kW",
)
SPEED_INPUT = ("quantity: speed", "quantity: electrical_power")
SPEED_SPAN = (
    "unit: rpm, span: 0 rpm to 600 rpm, accuracy: 1 rpm",
    "unit: kW, span: 0 kW to 900 kW, accuracy: 9 kW",
)


@pytest.mark.parametrize(
    ("changes", "notice"),
    [
        (
            (TEMPERATURE_INPUT, TEMPERATURE_SPAN),
            "K-1: no discharge temperature of stage 1: no residual and no margin of it, expected values only",
        ),
        ((SPEED_INPUT, SPEED_SPAN), "K-1: no speed input: the rated speed of 500 rpm is taken"),
        (
            (("held_open: [cylinder 1 head]", "held_open: []"),),
            "K-1: load steps full and half do the same to every end",
        ),
        (
            # hand: 20 bara is 18.987 barg of a span of 30 barg, so 36.7 % is left out
            (("pressure_range: 1 bara to 60 bara", "pressure_range: 1 bara to 20 bara"),),
            "K-1: the gas ranges leave out 37 % of the span of PT-1 (stage1.suction_pressure)",
        ),
        (
            # hand: 2 * 0.2 m * 1000 / 60 s
            (("rated_speed: 500 rpm", "rated_speed: 1000 rpm"),),
            "line 19: mean piston speed at rated speed is 6.7 m/s, unusually high",
        ),
    ],
    ids=["no discharge temperature", "no speed", "same steps", "narrow gas table", "fast piston"],
)
def test_what_is_allowed_and_costs_something_is_a_notice(
    tmp_path: Path, changes: tuple[tuple[str, str], ...], notice: str
) -> None:
    assert notice in load_site(changed(tmp_path, *changes)).notices


def test_unused_source_is_a_notice(tmp_path: Path) -> None:
    spare = "  spare:\n    kind: opcua\n    address: opc.tcp://127.0.0.1:4841\n  control:\n"
    assert load_site(changed(tmp_path, ("  control:\n", spare))).notices == (
        "source spare: no input reads it",
    )


@pytest.mark.parametrize(
    ("topic_filter", "topic", "delivers"),
    [
        # source: MQTT 5.0 (OASIS, 2019), section 4.7.1
        ("sport/tennis/player1/#", "sport/tennis/player1", True),
        ("sport/tennis/player1/#", "sport/tennis/player1/score/wimbledon", True),
        ("sport/tennis/+", "sport/tennis/player1", True),
        ("sport/tennis/+", "sport/tennis/player1/ranking", False),
        ("sport/+", "sport", False),
        ("sport/+", "sport/", True),
        ("#", "anything/at/all", True),
    ],
)
def test_filter_covers_the_topics_it_delivers(topic_filter: str, topic: str, *, delivers: bool) -> None:
    assert covers(topic_filter, topic) is delivers


def test_component_words_are_those_of_the_gas_model() -> None:
    assert set(COMPONENTS) == set(gas.COMPONENTS)


def test_alarm_words_are_those_of_the_catalogue() -> None:
    ours = {key: (s.dimension, s.deadband[0] if s.deadband else None) for key, s in ALARMS.items()}
    theirs = {key: (a.setting_dimension, a.deadband_dimension) for key, a in CATALOGUE.items()}
    assert ours == theirs


def test_catalogue_settings_lie_within_the_bounds_of_the_site_file() -> None:
    for key, alarm in CATALOGUE.items():
        bounds = ALARMS[key]
        low, high = (units.parse(text, bounds.dimension) for text in (bounds.low, bounds.high))
        assert low <= alarm.setting <= high, key
