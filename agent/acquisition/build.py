"""From a source of the site file to the source that reads it."""

from collections.abc import Sequence
from typing import assert_never

from agent.acquisition.mqtt_json import MqttJsonSource
from agent.acquisition.mqtt_sparkplug import MqttSparkplugSource
from agent.acquisition.opcua import OpcUaSource
from agent.acquisition.source import PlantSource
from agent.clock import Clock
from agent.siteplan.plan import Input, Source, SourceKind


def build_source(source: Source, inputs: Sequence[Input], clock: Clock) -> PlantSource:
    """A source that is not opened yet; of ``inputs`` it takes its own.

    Raises
    ------
    ValueError
        The entry cannot work: address, client id or topics missing, or one tag entered as two kinds of value.
    """
    own = tuple(i for i in inputs if i.source == source.name)
    units: dict[str, str] = {}
    for entry in own:
        known = units.setdefault(entry.address, entry.unit)
        if known != entry.unit:
            raise ValueError(
                f"source {source.name}: {entry.address} is entered as {known} and as {entry.unit}"
            )
    match source.kind:
        case SourceKind.MQTT_JSON:
            return MqttJsonSource(source, own, clock)
        case SourceKind.MQTT_SPARKPLUG:
            return MqttSparkplugSource(source, own, clock)
        case SourceKind.OPCUA:
            return OpcUaSource(source, own, clock)
        case _:
            assert_never(source.kind)
