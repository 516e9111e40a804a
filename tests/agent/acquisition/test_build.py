import ast
from collections.abc import Callable
from pathlib import Path

import pytest

import agent.acquisition
from agent.acquisition.build import build_source
from agent.clock import HandClock
from agent.records import LinkState
from agent.siteplan.plan import Input, Source, SourceKind

MQTT = {
    "name": "plant",
    "kind": SourceKind.MQTT_JSON,
    "address": "mqtt://h:1883",
    "client_id": "c",
    "topics": ("#",),
}


def build(inputs: tuple[Input, ...] = (), **changes: object) -> object:
    return build_source(Source(**(MQTT | changes)), inputs, HandClock(50.0))  # type: ignore[arg-type]


def test_a_source_that_is_not_opened_is_connecting() -> None:
    status = build().status()  # type: ignore[attr-defined]
    assert (status.source, status.state, status.since) == ("plant", LinkState.CONNECTING, 50.0)
    assert (status.received, status.rejected, status.dropped, status.connections) == (0, 0, 0, 0)


@pytest.mark.parametrize(
    ("changes", "reason"),
    [
        ({"address": "http://h"}, "mqtt://host:port"),
        ({"address": "mqtt://"}, "mqtt://host:port"),
        ({"client_id": ""}, "client id"),
        ({"topics": ()}, "no topic"),
        ({"kind": SourceKind.OPCUA}, "opc.tcp://"),
    ],
)
def test_what_cannot_work_is_refused(changes: dict[str, object], reason: str) -> None:
    with pytest.raises(ValueError, match=reason):
        build(**changes)


def test_a_node_id_that_is_none_is_refused_at_the_start(make_input: Callable[..., Input]) -> None:
    with pytest.raises(ValueError, match="node id"):
        build((make_input("PT"),), kind=SourceKind.OPCUA, address="opc.tcp://h:4840")


def test_one_tag_as_two_kinds_of_value_is_refused(make_input: Callable[..., Input]) -> None:
    with pytest.raises(ValueError, match="as barg and as word"):
        build((make_input("PT"), make_input("PT", unit="word")))


# Everything a client of either library could do to the plant beyond subscribing, reading and acknowledging.
FORBIDDEN = {
    "publish",
    "will_set",
    "write_value",
    "write_values",
    "write_attribute",
    "write_attribute_value",
    "set_value",
    "set_values",
    "set_attribute",
    "call_method",
    "call",
    "add_nodes",
    "delete_nodes",
    "history_update",
}


def test_no_source_publishes_writes_or_calls() -> None:
    folder = Path(agent.acquisition.__file__).parent
    files = sorted(folder.glob("*.py"))
    assert len(files) > 5
    for file in files:
        for node in ast.walk(ast.parse(file.read_text())):
            if isinstance(node, ast.Attribute):
                assert node.attr not in FORBIDDEN, f"{file.name}:{node.lineno}: {node.attr}"
