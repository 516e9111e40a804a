"""One OPC UA data value to one reading. Pure: it returns a reading or the reason why there is none."""

from datetime import datetime
from typing import Final

from asyncua import ua

from agent.acquisition.rejection import Rejected, Rejection, check_not_future, value_and_word
from agent.records import Quality, Reading
from agent.siteplan.plan import Input

_NUMBER_TYPES: Final = frozenset(
    {
        ua.VariantType.SByte,
        ua.VariantType.Byte,
        ua.VariantType.Int16,
        ua.VariantType.UInt16,
        ua.VariantType.Int32,
        ua.VariantType.UInt32,
        ua.VariantType.Int64,
        ua.VariantType.UInt64,
        ua.VariantType.Float,
        ua.VariantType.Double,
    }
)
_PLAIN_TYPES: Final = _NUMBER_TYPES | {ua.VariantType.Boolean, ua.VariantType.String}

# An unset time arrives as the first day the protocol can name.
_FIRST_YEAR: Final = 1601


def reading_from(
    value: ua.DataValue, entry: Input, source_name: str, received_time: float
) -> Reading | Rejection:
    """A reading of ``entry``, or the reason why the data value gives none.

    The time is the source's, else the server's, else that of arrival, which makes a good value uncertain.
    """
    quality = _quality(value.StatusCode)
    source_time = _unix(value.SourceTimestamp)
    if source_time is None:
        source_time = _unix(value.ServerTimestamp)
    if source_time is None:
        source_time = received_time
        quality = max(quality, Quality.UNCERTAIN)
    number: float | None = None
    word: str | None = None
    try:
        check_not_future(source_time, received_time)
        if quality is not Quality.BAD:  # bad never yields a value, whatever stands there
            number, word = value_and_word(entry, _plain(value.Value))
    except Rejected as rejected:
        return Rejection(reason=str(rejected))
    return Reading(
        source=source_name,
        address=entry.address,
        source_time=source_time,
        received_time=received_time,
        value=number,
        word=word,
        quality=quality,
    )


def _quality(code: ua.StatusCode | None) -> Quality:
    """The severity, the top two bits; none given means good."""
    severity = 0 if code is None else int(code.value) >> 30
    return {0: Quality.GOOD, 1: Quality.UNCERTAIN}.get(severity, Quality.BAD)


def _unix(moment: datetime | None) -> float | None:
    if not isinstance(moment, datetime) or moment.year <= _FIRST_YEAR or moment.tzinfo is None:
        return None
    return moment.timestamp()


def _plain(variant: ua.Variant | None) -> object:
    """The content of a scalar of a plain type."""
    if variant is None or variant.Value is None:
        raise Rejected("there is no value")
    if variant.is_array:
        raise Rejected("the value is an array")
    if variant.VariantType not in _PLAIN_TYPES:
        raise Rejected("the value is of a type that is neither number, switch nor word")
    return variant.Value
