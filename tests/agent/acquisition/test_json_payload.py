import json
import math
from collections.abc import Callable
from dataclasses import replace

import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st

from agent.acquisition.json_payload import LARGEST_PAYLOAD, decode
from agent.acquisition.rejection import FUTURE_LIMIT_S, PAST_LIMIT_S, SIMULATED, Rejection
from agent.records import Quality, Reading
from agent.siteplan.plan import Input, Source, SourceKind

SOURCE = Source(name="plant", kind=SourceKind.MQTT_JSON, address="mqtt://127.0.0.1:1883")
NOW = 1_767_225_600.0  # 2026-01-01T00:00:00Z; hand
GOOD_TIME = "2026-01-01T00:00:00Z"


@pytest.fixture
def number(make_input: Callable[..., Input]) -> Input:
    return make_input("PT")


@pytest.fixture
def word(make_input: Callable[..., Input]) -> Input:
    return make_input("UY", unit="word", on_change=True)


@pytest.fixture
def switch(make_input: Callable[..., Input]) -> Input:
    return make_input("XS", unit="switch")


def refused(payload: bytes, entry: Input) -> str:
    outcome = decode(payload, entry, SOURCE, NOW)
    assert isinstance(outcome, Rejection), outcome
    return outcome.reason


def accepted(payload: bytes, entry: Input, source: Source = SOURCE) -> Reading:
    outcome = decode(payload, entry, source, NOW)
    assert isinstance(outcome, Reading), outcome
    return outcome


def test_a_plain_payload(number: Input) -> None:
    reading = accepted(b'{"value": 20.5, "time": "2026-01-01T00:00:00Z", "quality": "good"}', number)
    assert reading == Reading(
        source="plant",
        address="site/PT",
        source_time=NOW,
        received_time=NOW,
        value=20.5,
        word=None,
        quality=Quality.GOOD,
    )


@pytest.mark.parametrize(
    ("time", "seconds"),
    [
        ('"2026-01-01T00:00:00Z"', NOW),
        ('"2026-01-01T01:00:00.250+01:00"', NOW + 0.25),
        ('"2025-12-31T18:30:00-0530"', NOW),
        ("1767225600", NOW),
        ("1767225600.5", NOW + 0.5),
        ("1767225600500", NOW + 0.5),
    ],
)
def test_times_are_read(number: Input, time: str, seconds: float) -> None:
    assert accepted(f'{{"value": 1, "time": {time}}}'.encode(), number).source_time == pytest.approx(
        seconds, abs=1e-6
    )


@pytest.mark.parametrize(
    ("time", "reason"),
    [
        ('"2026-01-01T00:00:00"', "no zone"),
        ('"2026-01-01"', "no zone"),
        ('"yesterday"', "not ISO 8601"),
        ('"2026-02-30T00:00:00Z"', "not ISO 8601"),
        ('""', "not ISO 8601"),
        ("true", "neither text nor number"),
        ("null", "neither text nor number"),
        ("[1]", "neither text nor number"),
        ("1e999", "out of range"),
        ("-5", "out of range"),
        ("1" + "0" * 400, "out of range"),
        (str(NOW + FUTURE_LIMIT_S + 0.1), "future"),
        (str(NOW - PAST_LIMIT_S - 1), "7 days ago"),
    ],
)
def test_times_that_are_refused(number: Input, time: str, reason: str) -> None:
    assert reason in refused(f'{{"value": 1, "time": {time}}}'.encode(), number)


def test_a_value_without_its_time_is_refused(number: Input) -> None:
    assert "without its time" in refused(b'{"value": 20.5}', number)
    assert "not a JSON object" in refused(b"20.5", number)


def test_a_word_sent_on_change_may_be_old(word: Input) -> None:
    assert accepted(f'{{"value": "50", "time": {NOW - 90 * 86400}}}'.encode(), word).word == "50"


GOOD = json.dumps({"time": GOOD_TIME})[1:-1]


@pytest.mark.parametrize(
    ("payload", "reason"),
    [
        (b"", "not JSON"),
        (b"\xff\xfe", "not UTF-8"),
        (b'\xef\xbb\xbf{"value": 1}', "not JSON"),
        (b"{", "not JSON"),
        (b"null", "not a JSON object"),
        (b"[1, 2]", "not a JSON object"),
        (b"[" * 20_000 + b"]" * 20_000, "nested too deeply"),
        (b'{"value": 1' + b"0" * 5000 + b"}", "not JSON"),
        (b" " * (LARGEST_PAYLOAD + 1), "larger than 64 kB"),
        (f'{{"value": NaN, {GOOD}}}'.encode(), "NaN or Infinity"),
        (f'{{"value": -Infinity, {GOOD}}}'.encode(), "NaN or Infinity"),
        (f'{{"value": 1e999, {GOOD}}}'.encode(), "not finite"),
        (f'{{"value": 1{"0" * 400}, {GOOD}}}'.encode(), "out of range"),
        (f'{{"value": 1e39, {GOOD}}}'.encode(), "out of range"),
        (f'{{"value": "20.5", {GOOD}}}'.encode(), "not a number"),
        (f'{{"value": true, {GOOD}}}'.encode(), "not a number"),
        (f'{{"value": null, {GOOD}}}'.encode(), "not a number"),
        (f'{{"value": [20.5], {GOOD}}}'.encode(), "not a number"),
        (f'{{"value": {{"value": 1}}, {GOOD}}}'.encode(), "not a number"),
        (f"{{{GOOD}}}".encode(), "no field 'value'"),
        (f'{{"value": 1, "value": 2, {GOOD}}}'.encode(), "stands twice"),
        (f'{{"value": 1, "quality": "fine", {GOOD}}}'.encode(), "quality"),
        (f'{{"value": 1, "quality": 192, {GOOD}}}'.encode(), "quality"),
        (f'{{"value": 1, "quality": null, {GOOD}}}'.encode(), "quality"),
    ],
)
def test_payloads_that_give_no_number(number: Input, payload: bytes, reason: str) -> None:
    assert reason in refused(payload, number)


@pytest.mark.parametrize("value", ["NaN", "Infinity", "-Infinity"])
def test_constants_are_refused_anywhere(number: Input, value: str) -> None:
    assert "NaN" in refused(f'{{"value": 1, "other": [{value}], {GOOD}}}'.encode(), number)


@pytest.mark.parametrize(("raw", "expected"), [("true", 1.0), ("false", 0.0), ("1", 1.0), ("0.0", 0.0)])
def test_switches(switch: Input, raw: str, expected: float) -> None:
    assert accepted(f'{{"value": {raw}, {GOOD}}}'.encode(), switch).value == expected


@pytest.mark.parametrize("raw", ["2", "0.5", '"true"', '"1"', "null", "[]"])
def test_what_is_no_switch(switch: Input, raw: str) -> None:
    assert "not a switch" in refused(f'{{"value": {raw}, {GOOD}}}'.encode(), switch)


@pytest.mark.parametrize(
    ("raw", "expected"), [('" 50 "', "50"), ("50", "50"), ("50.0", "50"), ("62.5", "62.5")]
)
def test_words(word: Input, raw: str, expected: str) -> None:
    reading = accepted(f'{{"value": {raw}, {GOOD}}}'.encode(), word)
    assert (reading.word, reading.value) == (expected, None)


@pytest.mark.parametrize("raw", ['""', '"a\\nb"', '"' + "x" * 65 + '"', "true", "null", "1e999"])
def test_what_is_no_word(word: Input, raw: str) -> None:
    refused(f'{{"value": {raw}, {GOOD}}}'.encode(), word)


@pytest.mark.parametrize("value", ["20.5", "null", '"broken"', "true"])
def test_bad_never_yields_a_value(number: Input, value: str) -> None:
    reading = accepted(f'{{"value": {value}, "quality": "Bad", {GOOD}}}'.encode(), number)
    assert (reading.value, reading.word, reading.quality) == (None, None, Quality.BAD)
    assert accepted(f'{{"quality": "bad", {GOOD}}}'.encode(), number).value is None


def test_field_names_come_from_the_site_file(number: Input) -> None:
    source = Source(
        name="plant",
        kind=SourceKind.MQTT_JSON,
        address="mqtt://127.0.0.1",
        value_field="v",
        time_field="t",
        quality_field="q",
    )
    reading = accepted(b'{"v": 3, "t": 1767225600, "q": "uncertain", "value": 9}', number, source)
    assert (reading.value, reading.quality) == (3.0, Quality.UNCERTAIN)


json_values = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)
near_misses = st.fixed_dictionaries(
    {},
    optional={
        "value": json_values,
        "time": json_values | st.just(GOOD_TIME) | st.datetimes().map(str),
        "quality": json_values | st.sampled_from(["good", "uncertain", "bad"]),
        "more": json_values,
    },
).map(lambda content: json.dumps(content).encode())
lax = settings(max_examples=400, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])


def check(payload: bytes, entry: Input) -> None:
    """Whatever comes in: a clean reading or a reason."""
    outcome = decode(payload, entry, SOURCE, NOW)
    if isinstance(outcome, Rejection):
        assert outcome.reason
        return
    assert math.isfinite(outcome.source_time)
    assert NOW - PAST_LIMIT_S <= outcome.source_time <= NOW + FUTURE_LIMIT_S or entry.on_change
    if outcome.quality is Quality.BAD:
        assert outcome.value is outcome.word is None
    elif entry.unit == "word":
        assert outcome.word
        assert outcome.value is None
    else:
        assert type(outcome.value) is float
        assert math.isfinite(outcome.value)
        content = json.loads(payload)["value"]
        assert isinstance(content, bool | int | float)
        assert entry.unit == "switch" or not isinstance(content, bool)
        assert outcome.value == content


@lax
@given(payload=st.binary(max_size=200) | near_misses)
@example(payload=b'{"value":1,"time":"9999-12-31T23:59:59-23:59"}')
@example(payload=b'{"value":1,"time":"0001-01-01T00:00:00+23:59"}')
@example(payload=b'{"value":1,"time":"2026-01-01T00:00:60Z"}')
@example(payload=b'{"value":"\\ud800","time":"2026-01-01T00:00:00Z"}')
def test_any_bytes_give_a_clean_reading_or_a_reason(
    number: Input, word: Input, switch: Input, payload: bytes
) -> None:
    for entry in (number, word, switch):
        check(payload, entry)


@lax
@given(
    value=st.floats(allow_nan=False, allow_infinity=False, width=32),
    at=st.floats(-PAST_LIMIT_S, FUTURE_LIMIT_S),
)
def test_what_is_sent_right_arrives_unchanged(number: Input, value: float, at: float) -> None:
    payload = json.dumps({"value": value, "time": NOW + at}).encode()
    if abs(value) > 3e38:
        return
    reading = accepted(payload, number)
    assert (reading.value, reading.source_time) == (value, NOW + at)


@pytest.mark.parametrize("mark", ["true", "1", "0", "null", '"false"', "[]"])
def test_what_is_marked_as_simulated_is_refused_at_a_real_site(number: Input, mark: str) -> None:
    """A mark that is anything but a plain false counts."""
    payload = f'{{"value": 20.5, "simulated": {mark}, {GOOD}}}'.encode()
    assert refused(payload, number) == SIMULATED
    assert accepted(payload, number, replace(SOURCE, takes_simulated=True)).value == 20.5


def test_what_is_not_marked_is_taken_everywhere(number: Input) -> None:
    for payload in (f'{{"value": 20.5, {GOOD}}}', f'{{"value": 20.5, "simulated": false, {GOOD}}}'):
        for takes in (True, False):
            source = replace(SOURCE, takes_simulated=takes)
            assert accepted(payload.encode(), number, source).value == 20.5
