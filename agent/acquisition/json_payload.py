"""One MQTT payload to one reading: a JSON object with value, time and, if the plant sends it, quality.

One that is marked as simulated is refused unless the site is.

Pure. Whatever the bytes are, `decode` returns a reading or the reason why there is none; it never raises and
never makes a number out of something that is not one.
"""

import json
from datetime import datetime
from types import MappingProxyType
from typing import Final, NoReturn

from agent.acquisition.rejection import SIMULATED, Rejected, Rejection, check_time, value_and_word
from agent.records import Quality, Reading
from agent.siteplan.plan import Input, Source

LARGEST_PAYLOAD: Final = 64 * 1024

_QUALITIES: Final = MappingProxyType(
    {"good": Quality.GOOD, "uncertain": Quality.UNCERTAIN, "bad": Quality.BAD}
)

# A number of seconds this large lies in the year 5138; read as milliseconds it lies in 1973.
_MILLISECONDS_FROM: Final = 1e11

_MARK: Final = "simulated"  # an invented plant says true; whatever is not false counts as such

_MISSING: Final = object()


def decode(payload: bytes, entry: Input, source: Source, received_time: float) -> Reading | Rejection:
    """A reading of ``entry``, without a receipt, or the reason why the payload gives none.

    The time must be there: it is what the tick rule stands on. It is ISO 8601 with Z or an offset, or Unix
    time in seconds or milliseconds.
    """
    try:
        fields = _fields(payload)
        if not source.takes_simulated and fields.get(_MARK, False) is not False:
            raise Rejected(SIMULATED)
        quality = _quality(fields.get(source.quality_field, _MISSING))
        source_time = _source_time(fields.get(source.time_field, _MISSING), source.time_field)
        check_time(entry, source_time, received_time)
        value: float | None = None
        word: str | None = None
        if quality is not Quality.BAD:  # bad never yields a value, whatever stands there
            value, word = value_and_word(entry, _present(fields, source.value_field))
    except Rejected as rejected:
        return Rejection(reason=str(rejected))
    return Reading(
        source=source.name,
        address=entry.address,
        source_time=source_time,
        received_time=received_time,
        value=value,
        word=word,
        quality=quality,
    )


def _fields(payload: bytes) -> dict[str, object]:
    if len(payload) > LARGEST_PAYLOAD:
        raise Rejected(f"the payload is larger than {LARGEST_PAYLOAD // 1024} kB")
    try:
        text = payload.decode("utf-8")
    except UnicodeDecodeError:
        raise Rejected("the payload is not UTF-8") from None
    try:
        # Objects inside the object are legal and ignored; a field that stands twice is not.
        content = json.loads(text, parse_constant=_no_constant, object_pairs_hook=_each_once)
    except RecursionError:
        raise Rejected("the payload is nested too deeply") from None
    except ValueError:  # also integers of thousands of digits
        raise Rejected("the payload is not JSON") from None
    if not isinstance(content, dict):
        raise Rejected("the payload is not a JSON object")
    return content


def _no_constant(name: str) -> NoReturn:
    """NaN and Infinity are not JSON, though the parser would take them."""
    del name
    raise Rejected("the payload holds NaN or Infinity")


def _each_once(pairs: list[tuple[str, object]]) -> dict[str, object]:
    fields = dict(pairs)
    if len(fields) != len(pairs):
        raise Rejected("a field stands twice in the payload")
    return fields


def _present(fields: dict[str, object], name: str) -> object:
    if name not in fields:
        raise Rejected(f"there is no field {name!r}")
    return fields[name]


def _quality(raw: object) -> Quality:
    if raw is _MISSING:
        return Quality.GOOD
    if isinstance(raw, str) and raw.lower() in _QUALITIES:
        return _QUALITIES[raw.lower()]
    raise Rejected("the quality is not good, uncertain or bad")


def _source_time(raw: object, field: str) -> float:
    if raw is _MISSING:
        raise Rejected(f"there is no field {field!r}: a value without its time is not used")
    if isinstance(raw, str):
        return _iso_time(raw)
    if isinstance(raw, bool) or not isinstance(raw, int | float):
        raise Rejected("the time is neither text nor number")
    try:
        number = float(raw)
    except OverflowError:
        raise Rejected("the time is out of range") from None
    seconds = number / 1000 if abs(number) >= _MILLISECONDS_FROM else number
    if not 0 <= seconds < _MILLISECONDS_FROM:  # also false for NaN and infinity
        raise Rejected("the time is out of range")
    return seconds


def _iso_time(text: str) -> float:
    try:
        moment = datetime.fromisoformat(text)
        if moment.tzinfo is None:
            raise Rejected("the time has no zone: Z or an offset is needed")
        return moment.timestamp()
    except (ValueError, OverflowError):
        raise Rejected("the time is not ISO 8601") from None
