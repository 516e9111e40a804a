"""One Sparkplug metric to one reading. Pure: it returns a reading or the reason why there is none."""

from types import MappingProxyType
from typing import Final

from agent.acquisition.rejection import Rejected, Rejection, check_time, value_and_word
from agent.records import Quality, Reading
from agent.siteplan.plan import Input
from agent.sparkplug.wire import QUALITY, SIMULATED, UNCERTAIN, DataType, Metric, PropertyValue, QualityCode

# Which field of the payload carries a type. Whole numbers: bits, and whether two's complement.
_INTEGERS: Final = MappingProxyType(
    {
        DataType.INT8: ("int_value", 8, True),
        DataType.INT16: ("int_value", 16, True),
        DataType.INT32: ("int_value", 32, True),
        DataType.INT64: ("long_value", 64, True),
        DataType.UINT8: ("int_value", 8, False),
        DataType.UINT16: ("int_value", 16, False),
        DataType.UINT32: ("int_value", 32, False),
        DataType.UINT64: ("long_value", 64, False),
    }
)
_OTHERS: Final = MappingProxyType(
    {
        DataType.FLOAT: "float_value",
        DataType.DOUBLE: "double_value",
        DataType.BOOLEAN: "boolean_value",
        DataType.STRING: "string_value",
        DataType.TEXT: "string_value",
    }
)
# Some encoders carry an unsigned 32-bit number in the 64-bit field.
_WIDE: Final = MappingProxyType({DataType.UINT32: "long_value"})

_QUALITIES: Final = MappingProxyType(
    {QualityCode.GOOD: Quality.GOOD, QualityCode.BAD: Quality.BAD, QualityCode.STALE: Quality.STALE}
)


def reading_from(
    metric: Metric,
    datatype: int,
    entry: Input,
    source_name: str,
    *,
    payload_time: float | None,
    received_time: float,
) -> Reading | Rejection:
    """A reading of ``entry``; ``datatype`` is what its birth named, ``payload_time`` stands in for none."""
    try:
        source_time = seconds(metric.timestamp) if metric.HasField("timestamp") else payload_time
        if source_time is None:
            raise Rejected("there is no timestamp: a value without its time is not used")
        check_time(entry, source_time, received_time)
        quality = Quality.BAD if metric.is_null else _quality(metric)
        value: float | None = None
        word: str | None = None
        if quality.usable:  # neither null, bad nor stale ever yields a value, whatever stands there
            value, word = value_and_word(entry, _plain(metric, datatype))
    except Rejected as rejected:
        return Rejection(reason=str(rejected))
    return Reading(
        source=source_name,
        address=entry.address,
        source_time=source_time,
        received_time=received_time,
        value=value,
        word=word,
        quality=quality,
    )


def seconds(milliseconds: int) -> float:
    return milliseconds / 1000


def whole_number(metric: Metric) -> int | None:
    """The content of a metric of any whole-number field, as it stands on the wire."""
    match metric.WhichOneof("value"):
        case "int_value":
            return metric.int_value
        case "long_value":
            return metric.long_value
        case _:
            return None


def is_simulated(metric: Metric) -> bool:
    """Whether it is marked as invented; a mark that is not a plain false counts."""
    return any(_is_set(value) for value in _properties(metric, SIMULATED))


def _quality(metric: Metric) -> Quality:
    """Good unless the metric says otherwise."""
    found = _properties(metric, QUALITY)
    if len(found) > 1:
        raise Rejected("the quality stands twice")
    quality = Quality.GOOD
    if found:
        code = found[0].int_value if found[0].WhichOneof("value") == "int_value" else -1
        if code not in _QUALITIES:
            raise Rejected("the quality is not 0, 192 or 500")
        quality = _QUALITIES[QualityCode(code)]
    if any(_is_set(value) for value in _properties(metric, UNCERTAIN)):
        return max(quality, Quality.UNCERTAIN)
    return quality


def _properties(metric: Metric, name: str) -> list[PropertyValue]:
    pairs = zip(metric.properties.keys, metric.properties.values, strict=False)
    return [value for key, value in pairs if key == name]


def _is_set(value: PropertyValue) -> bool:
    return value.WhichOneof("value") != "boolean_value" or value.boolean_value


def _plain(metric: Metric, datatype: int) -> object:
    """The content of a scalar, by the type its birth named."""
    field = metric.WhichOneof("value")
    if field is None:
        raise Rejected("there is no scalar value")
    if datatype in _INTEGERS:
        kind = DataType(datatype)
        expected, bits, signed = _INTEGERS[kind]
        if field in (expected, _WIDE.get(kind)):
            return _integer(getattr(metric, field), bits, signed=signed)
    elif datatype in _OTHERS:
        if field == _OTHERS[DataType(datatype)]:
            return getattr(metric, field)
    else:
        raise Rejected("the value is of a type that is neither number, switch nor word")
    raise Rejected("the value is of another type than its birth says")


def _integer(raw: int, bits: int, *, signed: bool) -> int:
    """Signed numbers come in two's complement, of their own width or of the whole field."""
    top = 1 << bits
    if raw < top:
        return raw - top if signed and raw >= top // 2 else raw
    field = 1 << 32
    if signed and bits < 32 and field - top // 2 <= raw < field:
        return raw - field
    raise Rejected("the value is out of range of its type")
