"""Payloads, data types, quality codes and topics of Sparkplug B 3.0."""

from dataclasses import dataclass
from enum import IntEnum, StrEnum
from typing import Final

from google.protobuf.message import DecodeError

from agent.sparkplug.payload_pb2 import Metric, Payload, PropertySet, PropertyValue

__all__ = [
    "BDSEQ", "NAMESPACE", "QUALITY", "REBIRTH", "SEQUENCE", "SIMULATED", "UNCERTAIN", "DataType",
    "MessageType", "Metric", "Payload", "PropertySet", "PropertyValue", "QualityCode", "Topic", "parsed",
    "topic_of",
]  # fmt: skip

NAMESPACE: Final = "spBv1.0"
BDSEQ: Final = "bdSeq"  # metric that ties a death to its birth
REBIRTH: Final = "Node Control/Rebirth"
QUALITY: Final = "Quality"  # property of a metric
# Properties of our own: the specification has no word for either.
SIMULATED: Final = "simulated"  # true: an invented plant
UNCERTAIN: Final = "uncertain"  # true: a value that is neither good nor bad
SEQUENCE: Final = 256  # sequence numbers run from 0 to 255 and start over


class MessageType(StrEnum):
    NODE_BIRTH = "NBIRTH"
    NODE_DATA = "NDATA"
    NODE_DEATH = "NDEATH"
    NODE_COMMAND = "NCMD"
    DEVICE_BIRTH = "DBIRTH"
    DEVICE_DATA = "DDATA"
    DEVICE_DEATH = "DDEATH"
    DEVICE_COMMAND = "DCMD"


class DataType(IntEnum):
    """The basic types; arrays, data sets, templates and files are not read here."""

    INT8 = 1
    INT16 = 2
    INT32 = 3
    INT64 = 4
    UINT8 = 5
    UINT16 = 6
    UINT32 = 7
    UINT64 = 8
    FLOAT = 9
    DOUBLE = 10
    BOOLEAN = 11
    STRING = 12
    DATETIME = 13
    TEXT = 14
    UUID = 15


class QualityCode(IntEnum):
    BAD = 0
    GOOD = 192
    STALE = 500


@dataclass(frozen=True, slots=True, kw_only=True)
class Topic:
    group: str
    type: MessageType
    node: str
    device: str  # "" for messages of the node itself

    def __str__(self) -> str:
        return "/".join(
            (NAMESPACE, self.group, self.type, self.node, *([self.device] if self.device else []))
        )


def topic_of(text: str) -> Topic | None:
    """The parts of a topic; None if it is no topic of an edge node or a device."""
    levels = text.split("/")
    if len(levels) not in (4, 5) or levels[0] != NAMESPACE or not all(levels):
        return None
    try:
        kind = MessageType(levels[2])
    except ValueError:
        return None
    of_device = kind.startswith("D")
    if of_device != (len(levels) == 5):
        return None
    return Topic(group=levels[1], type=kind, node=levels[3], device=levels[4] if of_device else "")


def parsed(payload: bytes) -> Payload | None:
    """The message in these bytes; None if there is none."""
    try:
        message: Payload = Payload.FromString(payload)
    except DecodeError:
        return None
    return message
