"""One Sparkplug metric becomes one reading, or the reason why not; it never becomes an invented number."""

import math
from collections.abc import Callable
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from agent.acquisition.rejection import Rejection
from agent.acquisition.sparkplug_metric import is_simulated, reading_from
from agent.records import Quality, Reading
from agent.siteplan.plan import Input
from agent.sparkplug.wire import DataType, Metric, PropertySet, PropertyValue, parsed

NOW = 1_800_000_000.4
MS = 1_800_000_000_400


@pytest.fixture
def tag(make_input: Callable[..., Input]) -> Input:
    return make_input("PT", address="node/K/PT")


def outcome(entry: Input, metric: Metric, kind: int, payload_time: float | None = NOW) -> Any:
    return reading_from(metric, kind, entry, "plant", payload_time=payload_time, received_time=NOW + 1)


def with_quality(code: int | None, **value: Any) -> Metric:
    held = PropertyValue(type=DataType.INT32, int_value=code) if code is not None else PropertyValue(type=3)
    return Metric(timestamp=MS, properties=PropertySet(keys=["Quality"], values=[held]), **value)


@pytest.mark.parametrize(
    ("kind", "value", "expected"),
    [
        # source: Sparkplug 3.0.0 section 6.4.16, data types and their fields; two's complement by hand
        (DataType.INT8, {"int_value": 0xFFFFFFFB}, -5.0),
        (DataType.INT8, {"int_value": 0xFB}, -5.0),
        (DataType.INT8, {"int_value": 127}, 127.0),
        (DataType.INT16, {"int_value": 0xFFFFFFFE}, -2.0),
        (DataType.INT16, {"int_value": 0x8000}, -32768.0),
        (DataType.INT32, {"int_value": 0xFFFFFF38}, -200.0),
        (DataType.INT32, {"int_value": 2**31 - 1}, 2147483647.0),
        (DataType.INT64, {"long_value": 2**64 - 3}, -3.0),
        (DataType.UINT8, {"int_value": 255}, 255.0),
        (DataType.UINT16, {"int_value": 65535}, 65535.0),
        (DataType.UINT32, {"int_value": 2**32 - 1}, 4294967295.0),
        (DataType.UINT32, {"long_value": 2**32 - 1}, 4294967295.0),
        (DataType.UINT64, {"long_value": 2**64 - 1}, 18446744073709551615.0),
        (DataType.FLOAT, {"float_value": 20.5}, 20.5),
        (DataType.DOUBLE, {"double_value": 20.1}, 20.1),
    ],
)
def test_numbers_of_every_type_are_read(
    tag: Input, kind: DataType, value: dict[str, Any], expected: float
) -> None:
    reading = outcome(tag, Metric(timestamp=MS, **value), kind)
    assert isinstance(reading, Reading)
    assert reading.value == expected
    assert (reading.quality, reading.word, reading.receipt) == (Quality.GOOD, None, None)
    assert (reading.source, reading.address, reading.source_time) == ("plant", "node/K/PT", NOW)


@pytest.mark.parametrize(
    ("kind", "value", "reason"),
    [
        (DataType.INT8, {"int_value": 256}, "out of range of its type"),
        (DataType.INT8, {"int_value": 0xFFFFFF00}, "out of range of its type"),
        (DataType.UINT8, {"int_value": 0xFFFFFFFB}, "out of range of its type"),
        (DataType.UINT32, {"long_value": 2**32}, "out of range of its type"),
        (DataType.INT32, {"long_value": 5}, "another type than its birth says"),
        (DataType.FLOAT, {"int_value": 5}, "another type than its birth says"),
        (DataType.DOUBLE, {"string_value": "5"}, "another type than its birth says"),
        (DataType.FLOAT, {"float_value": math.nan}, "not finite"),
        (DataType.DOUBLE, {"double_value": math.inf}, "not finite"),
        (DataType.DOUBLE, {"double_value": 1e300}, "out of range"),
        (DataType.BOOLEAN, {"boolean_value": True}, "not a number"),
        (DataType.STRING, {"string_value": "20.5"}, "not a number"),
        (DataType.DATETIME, {"long_value": MS}, "neither number"),
        (16, {}, "no scalar value"),  # a data set is no field of the message
        (99, {"int_value": 5}, "neither number"),
        (DataType.FLOAT, {}, "no scalar value"),
    ],
)
def test_what_is_no_number_is_rejected(tag: Input, kind: int, value: dict[str, Any], reason: str) -> None:
    rejected = outcome(tag, Metric(timestamp=MS, **value), kind)
    assert isinstance(rejected, Rejection)
    assert reason in rejected.reason


def test_words_and_switches_are_read(make_input: Callable[..., Input]) -> None:
    word = make_input("UY", unit="word", address="n/K/UY")
    switch = make_input("XS", unit="switch", address="n/K/XS")
    assert outcome(word, Metric(string_value="50"), DataType.STRING).word == "50"
    assert outcome(word, Metric(string_value="50"), DataType.TEXT).word == "50"
    assert outcome(word, Metric(int_value=50), DataType.INT32).word == "50"
    assert outcome(switch, Metric(boolean_value=True), DataType.BOOLEAN).value == 1.0
    assert outcome(switch, Metric(int_value=0), DataType.INT8).value == 0.0
    assert "not a switch" in outcome(switch, Metric(int_value=2), DataType.INT8).reason


@pytest.mark.parametrize(
    ("code", "expected"),
    # source: Sparkplug 3.0.0 section 6.4.14, quality codes
    [(192, Quality.GOOD), (0, Quality.BAD), (500, Quality.STALE)],
)
def test_the_quality_property_is_read_and_only_good_has_a_value(
    tag: Input, code: int, expected: Quality
) -> None:
    reading = outcome(tag, with_quality(code, float_value=20.5), DataType.FLOAT)
    assert isinstance(reading, Reading)
    assert reading.quality is expected
    assert reading.value == (20.5 if expected is Quality.GOOD else None)


@pytest.mark.parametrize("code", [1, 191, 2**31, None])
def test_an_unknown_quality_is_not_taken_for_good(tag: Input, code: int | None) -> None:
    rejected = outcome(tag, with_quality(code, float_value=20.5), DataType.FLOAT)
    assert isinstance(rejected, Rejection)
    assert "0, 192 or 500" in rejected.reason


def test_null_is_bad_without_a_value_whatever_stands_beside_it(tag: Input) -> None:
    reading = outcome(tag, Metric(timestamp=MS, is_null=True, float_value=20.5), DataType.FLOAT)
    assert isinstance(reading, Reading)
    assert (reading.quality, reading.value, reading.source_time) == (Quality.BAD, None, NOW)


def test_the_time_is_the_metrics_else_the_payloads_else_there_is_none(tag: Input) -> None:
    own = outcome(tag, Metric(timestamp=MS - 1000, float_value=1.0), DataType.FLOAT)
    assert own.source_time == NOW - 1
    assert outcome(tag, Metric(float_value=1.0), DataType.FLOAT).source_time == NOW
    assert "no timestamp" in outcome(tag, Metric(float_value=1.0), DataType.FLOAT, None).reason


def test_times_of_the_future_and_of_another_age_are_rejected(tag: Input) -> None:
    ahead = Metric(timestamp=MS + 12_000, float_value=1.0)
    assert outcome(tag, ahead, DataType.FLOAT).reason.startswith("future")
    assert "7 days ago" in outcome(tag, Metric(timestamp=0, float_value=1.0), DataType.FLOAT).reason
    assert outcome(tag, Metric(timestamp=2**64 - 1, float_value=1.0), DataType.FLOAT).reason.startswith(
        "future"
    )


@settings(max_examples=400, deadline=None)
@given(
    payload=st.binary(max_size=80), kind=st.integers(0, 40), unit=st.sampled_from(["barg", "word", "switch"])
)
def test_any_bytes_give_a_reading_or_a_reason(payload: bytes, kind: int, unit: str) -> None:
    message = parsed(b"\x12" + bytes([len(payload)]) + payload)  # one metric, whatever is in it
    if message is None:
        return
    entry = Input(
        quantity="suction_pressure", subject="stage1", tag="PT", source="plant", address="n/d/PT", unit=unit,
        scale=1.0, offset=0.0, span_low=-math.inf, span_high=math.inf, accuracy=0.0, tap="",
        stale_after_s=10.0, on_change=False, required=True,
    )  # fmt: skip
    for metric in message.metrics:
        told = outcome(entry, metric, kind)
        assert isinstance(told, Reading | Rejection)
        if isinstance(told, Reading) and told.value is not None:
            assert math.isfinite(told.value)
            assert told.quality.usable


def with_property(name: str, held: PropertyValue, **value: Any) -> Metric:
    return Metric(timestamp=MS, properties=PropertySet(keys=[name], values=[held]), **value)


TRUE = PropertyValue(type=DataType.BOOLEAN, boolean_value=True)
FALSE = PropertyValue(type=DataType.BOOLEAN, boolean_value=False)


@pytest.mark.parametrize(
    ("held", "expected"),
    [
        (TRUE, Quality.UNCERTAIN),
        (FALSE, Quality.GOOD),
        (PropertyValue(type=12, string_value="no"), Quality.UNCERTAIN),
    ],
)
def test_uncertain_is_a_property_beside_a_good_value(
    tag: Input, held: PropertyValue, expected: Quality
) -> None:
    reading = outcome(tag, with_property("uncertain", held, float_value=20.5), DataType.FLOAT)
    assert isinstance(reading, Reading)
    assert (reading.value, reading.quality) == (20.5, expected)


def test_uncertain_makes_a_bad_value_no_better(tag: Input) -> None:
    metric = with_quality(0, float_value=20.5)
    metric.properties.keys.append("uncertain")
    metric.properties.values.append(TRUE)
    reading = outcome(tag, metric, DataType.FLOAT)
    assert isinstance(reading, Reading)
    assert (reading.value, reading.quality) == (None, Quality.BAD)


@pytest.mark.parametrize(
    ("held", "expected"),
    [
        (TRUE, True),
        (FALSE, False),
        (PropertyValue(type=DataType.INT32, int_value=0), True),
        (PropertyValue(type=DataType.STRING, string_value="false"), True),
        (PropertyValue(type=DataType.BOOLEAN), True),
    ],
)
def test_the_mark_of_the_invented_is_believed_unless_it_is_a_plain_false(
    held: PropertyValue, expected: bool
) -> None:
    assert is_simulated(with_property("simulated", held)) is expected
    assert not is_simulated(with_property("engUnit", held))
