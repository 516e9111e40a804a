"""Builds the sources: one connection each, read only."""

import re
from collections.abc import Mapping
from typing import Final
from urllib.parse import urlsplit

from agent.siteplan.document import Place
from agent.siteplan.plan import MqttVersion, Source, SourceKind
from agent.siteplan.reader import Reader
from agent.siteplan.schema import SourceBlock

_SCHEMES: Final = {
    SourceKind.MQTT_JSON: "mqtt",
    SourceKind.MQTT_SPARKPLUG: "mqtt",
    SourceKind.OPCUA: "opc.tcp",
}
_EXAMPLES: Final = {
    SourceKind.MQTT_JSON: "an address such as mqtt://host:1883",
    SourceKind.MQTT_SPARKPLUG: "an address such as mqtt://host:1883",
    SourceKind.OPCUA: "an address such as opc.tcp://host:4840/path",
}
_JSON_ONLY: Final = ("topics", "value_field", "time_field", "quality_field")
# Keys of a source beyond kind and address that each kind does not take, and the words for those it does.
_FOREIGN: Final = {
    SourceKind.MQTT_JSON: (("group",), "no group: that is a key of kind mqtt_sparkplug"),
    SourceKind.MQTT_SPARKPLUG: (
        _JSON_ONLY,
        "only keys of kind mqtt_sparkplug: kind, address, group, mqtt_version and client_id",
    ),
    SourceKind.OPCUA: (
        ("mqtt_version", "client_id", "group", *_JSON_ONLY),
        "only keys of kind opcua: kind and address",
    ),
}


def read_sources(
    reader: Reader, place: Place, site_name: str, names: Mapping[str, object]
) -> dict[str, Source]:
    """The sources that could be read."""
    sources: dict[str, Source] = {}
    clients: dict[tuple[str, str], str] = {}
    for name in names:
        here = (*place, name)
        block = reader.block(SourceBlock, here)
        if block is None:
            continue
        good = check_address(reader, (*here, "address"), block.kind, block.address)
        source = _source(reader, here, name, block, site_name)
        if source is None or not good:
            continue
        sources[name] = source
        if source.client_id:
            other = clients.setdefault((source.address, source.client_id), name)
            if other != name:
                hint = f"source {other} has it; the broker would throw out one of the two"
                reader.fault((*here, "client_id"), "a client_id of its own", hint)
    return sources


def check_address(reader: Reader, place: Place, kind: SourceKind, address: str) -> bool:
    """Note what is wrong with the address of a source; true if nothing is."""
    if "@" in address:
        hint = "secrets never stand in the site file"
        shown = repr("…@" + address.rpartition("@")[2])
        reader.fault(place, "an address without user and password", hint, value=shown)
        return False
    try:
        url = urlsplit(address)
        port = url.port
    except ValueError:
        reader.fault(place, _EXAMPLES[kind], "a port is a number from 1 to 65535", value=repr(address))
        return False
    if url.scheme != _SCHEMES[kind] or not url.hostname or port == 0:
        reader.fault(place, _EXAMPLES[kind], value=repr(address))
        return False
    if kind is not SourceKind.OPCUA and (url.path.strip("/") or url.query):
        hint = (
            "topics have a key of their own" if kind is SourceKind.MQTT_JSON else "group is a key of its own"
        )
        reader.fault(place, _EXAMPLES[kind], f"no path: {hint}", value=repr(address))
        return False
    return True


def _source(reader: Reader, place: Place, name: str, block: SourceBlock, site_name: str) -> Source | None:
    keys, expected = _FOREIGN[block.kind]
    foreign = [key for key in keys if getattr(block, key) is not None]
    for key in foreign:
        reader.fault((*place, key), expected, value="")
    if block.kind is SourceKind.MQTT_JSON:
        source = _mqtt_json(reader, place, name, block, site_name)
    elif block.kind is SourceKind.MQTT_SPARKPLUG:
        source = _mqtt_sparkplug(reader, place, name, block, site_name)
    else:
        source = Source(name=name, kind=block.kind, address=block.address)
    return None if foreign else source


def _mqtt_sparkplug(
    reader: Reader, place: Place, name: str, block: SourceBlock, site_name: str
) -> Source | None:
    if block.group is None:
        if "group" not in reader.keys(place):
            reader.fault((*place, "group"), "the Sparkplug group whose edge nodes are read", value="")
        return None
    return Source(
        name=name,
        kind=block.kind,
        address=block.address,
        mqtt_version=block.mqtt_version or MqttVersion.V5,
        client_id=block.client_id or _client_id(site_name, name),
        group=block.group,
    )


def _client_id(site_name: str, name: str) -> str:
    return _slug(f"throwline-{site_name}-{name}")


def _mqtt_json(reader: Reader, place: Place, name: str, block: SourceBlock, site_name: str) -> Source | None:
    topics = tuple(block.topics or ())
    wrong = [index for index, topic in enumerate(topics) if not _is_filter(topic)]
    for index in wrong:
        reader.fault(
            (*place, "topics", index), "a topic filter", "+ fills one whole level, # only the last one"
        )
    if wrong:
        return None
    return Source(
        name=name,
        kind=block.kind,
        address=block.address,
        mqtt_version=block.mqtt_version or MqttVersion.V5,
        client_id=block.client_id or _client_id(site_name, name),
        topics=topics,
        value_field=block.value_field or "value",
        time_field=block.time_field or "time",
        quality_field=block.quality_field or "quality",
    )


def _slug(text: str) -> str:
    return re.sub(r"[^a-z0-9]+", "-", text.lower()).strip("-")


def _is_filter(topic: str) -> bool:
    levels = topic.split("/")
    whole = all(level in ("+", "#") or not set(level) & {"+", "#"} for level in levels)
    return whole and "#" not in levels[:-1]


def covers(topic_filter: str, topic: str) -> bool:
    """Whether a subscription to the filter delivers the topic."""
    wanted, given = topic_filter.split("/"), topic.split("/")
    for index, level in enumerate(wanted):
        if level == "#":
            return True
        if index >= len(given) or level not in ("+", given[index]):
            return False
    return len(wanted) == len(given)
