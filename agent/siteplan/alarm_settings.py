"""Reads a unit's own settings of alarms."""

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

from agent.siteplan.document import Place
from agent.siteplan.plan import AlarmSetting
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import AlarmBlock
from model import units


@dataclass(frozen=True, slots=True, kw_only=True)
class Settable:
    """What of one alarm a site may set, and within which bounds (as text, low and high)."""

    dimension: str  # of the setting
    low: str
    high: str
    deadband: tuple[str, str, str] | None  # dimension, low, high; None where it is not settable


_LOAD: Final = Settable(
    dimension="fraction", low="50 %", high="100 %", deadband=("fraction", "0.1 %", "20 %")
)

# The same keys as the alarm catalogue's, which this room does not import: a test holds both equal.
# A load and a reversal are set as a share of the entered limit, a temperature as what must be left to it.
# Reversal watches a duration and a magnitude, so one deadband would not fit both.
ALARMS: Final[Mapping[str, Settable]] = MappingProxyType(
    {
        "gas_load_tension": _LOAD,
        "gas_load_compression": _LOAD,
        "pin_load_tension": _LOAD,
        "pin_load_compression": _LOAD,
        "discharge_temperature": Settable(
            dimension="temperature_difference",
            low="0 K",
            high="60 K",
            deadband=("temperature_difference", "0.1 K", "20 K"),
        ),
        "reversal": Settable(dimension="fraction", low="100 %", high="300 %", deadband=None),
    }
)


def read_alarm_settings(reader: Reader, place: Place) -> tuple[AlarmSetting, ...]:
    """The settings that could be read."""
    raw = reader.at(place)
    read = [_read(reader, (*place, key), key) for key in (raw if isinstance(raw, dict) else ())]
    return tuple(setting for setting in read if setting is not None)


def _read(reader: Reader, place: Place, key: str) -> AlarmSetting | None:
    block = reader.block(AlarmBlock, place)
    settable = ALARMS.get(key)
    if settable is None:
        reader.fault(place, "an alarm of the catalogue", closest(key, ALARMS), value="")
        return None
    if block is None:
        return None
    setting = deadband = None
    if block.setting is not None:
        bounds = (settable.dimension, settable.low, settable.high)
        setting = _bounded(reader, (*place, "setting"), block.setting, bounds)
    if block.deadband is not None:
        if settable.deadband is None:
            reader.fault((*place, "deadband"), f"no deadband for {key}, which watches two quantities")
            return None
        deadband = _bounded(reader, (*place, "deadband"), block.deadband, settable.deadband)
    return AlarmSetting(alarm=key, setting=setting, deadband=deadband, on_delay_s=block.on_delay)


def _bounded(reader: Reader, place: Place, text: str, bounds: tuple[str, str, str]) -> float | None:
    dimension, low, high = bounds
    value = reader.quantity(place, text, dimension)
    if value is None or units.parse(low, dimension) <= value <= units.parse(high, dimension):
        return value
    reader.fault(place, f"{units.words(dimension)} from {low} to {high}")
    return None
