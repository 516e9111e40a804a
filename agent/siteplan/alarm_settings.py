"""Reads a unit's own settings of alarms."""

from collections.abc import Mapping
from types import MappingProxyType
from typing import Final

from agent.siteplan.document import Place
from agent.siteplan.plan import AlarmSetting
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import AlarmBlock

# Alarm -> the quantity it watches; its setting and its deadband are differences of that quantity.
# The same keys as the alarm catalogue's, which this room does not import: a test holds both equal.
ALARMS: Final[Mapping[str, str]] = MappingProxyType({})


def read_alarm_settings(reader: Reader, place: Place) -> tuple[AlarmSetting, ...]:
    raw = reader.at(place)
    return tuple(
        setting
        for key in (raw if isinstance(raw, dict) else ())
        if (setting := _read(reader, (*place, key), key))
    )


def _read(reader: Reader, place: Place, key: str) -> AlarmSetting | None:
    block = reader.block(AlarmBlock, place)
    if key not in ALARMS:
        reader.fault(place, "an alarm of the catalogue", closest(key, ALARMS), value="")
        return None
    if block is None:
        return None
    return None
