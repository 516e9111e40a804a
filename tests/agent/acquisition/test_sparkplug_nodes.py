"""Births, deaths and gaps: an input has a value only while an unbroken row since a birth gives it a name."""

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from agent.acquisition.rejection import SIMULATED
from agent.acquisition.sparkplug_nodes import STEP_S, EdgeNodes, NodeState, Outcome, subject_of
from agent.manipulation.frames import FrameBuilder
from agent.records import Quality, Reading
from agent.siteplan.load import load_site
from agent.siteplan.plan import Input, UnitPlan
from agent.sparkplug.wire import (
    DataType,
    MessageType,
    Metric,
    Payload,
    PropertySet,
    PropertyValue,
    Topic,
    topic_of,
)

SITE = Path(__file__).resolve().parents[2] / "config_errors" / "no_mistake.yaml"
T0 = 1_800_000_000.0
MakeInput = Callable[..., Input]


def topic(kind: MessageType, device: str = "K", node: str = "gw") -> Topic:
    of_device = kind.startswith("D")
    return Topic(group="g", type=kind, node=node, device=device if of_device else "")


def ms(at: float) -> int:
    return round(at * 1000)


class Gateway:
    """An edge node that speaks by the rules, unless a test makes it break one."""

    def __init__(self, *inputs: Input, takes_simulated: bool = False) -> None:
        self.nodes = EdgeNodes("plant", inputs, takes_simulated=takes_simulated)
        self.seq = 0
        self.bdseq = 0

    def node_birth(self, at: float, *metrics: Metric, seq: int = 0) -> Outcome:
        self.seq = seq
        session = Metric(name="bdSeq", datatype=DataType.INT64, long_value=self.bdseq)
        payload = Payload(timestamp=ms(at), seq=seq, metrics=[session, *metrics])
        return self.nodes.accept(topic(MessageType.NODE_BIRTH), payload, at)

    def birth(
        self,
        at: float,
        value: float = 1.0,
        step: str = "100",
        step_at: float | None = None,
        now: float | None = None,
    ) -> Outcome:
        stepped = ms(at if step_at is None else step_at)
        return self.send(
            MessageType.DEVICE_BIRTH,
            at,
            Metric(name="PT", alias=1, datatype=DataType.FLOAT, timestamp=ms(at), float_value=value),
            Metric(name="UY", alias=2, datatype=DataType.STRING, timestamp=stepped, string_value=step),
            now=now,
        )

    def born(self, at: float, **values: Any) -> Outcome:
        self.node_birth(at)
        return self.birth(at, **values)

    def send(self, kind: MessageType, at: float, *metrics: Metric, now: float | None = None) -> Outcome:
        self.seq = (self.seq + 1) % 256
        payload = Payload(timestamp=ms(at), seq=self.seq, metrics=metrics)
        return self.nodes.accept(topic(kind), payload, at if now is None else now)

    def data(self, at: float, value: float, now: float | None = None) -> Outcome:
        return self.send(MessageType.DEVICE_DATA, at, Metric(alias=1, float_value=value), now=now)

    def step(self, at: float, word: str, now: float | None = None) -> Outcome:
        return self.send(MessageType.DEVICE_DATA, at, Metric(alias=2, string_value=word), now=now)

    def death(self, at: float, bdseq: int | None = None) -> Outcome:
        session = Metric(name="bdSeq", long_value=self.bdseq if bdseq is None else bdseq)
        payload = Payload(timestamp=ms(at), metrics=[session])
        return self.nodes.accept(topic(MessageType.NODE_DEATH), payload, at)

    @property
    def state(self) -> NodeState:
        return self.nodes.states()["gw"]


@pytest.fixture
def inputs(make_input: MakeInput) -> tuple[Input, Input]:
    return (
        make_input("PT", address="gw/K/PT"),
        make_input("UY", unit="word", address="gw/K/UY", on_change=True),
    )


@pytest.fixture
def gateway(inputs: tuple[Input, Input]) -> Gateway:
    return Gateway(*inputs)


def values(outcome: Outcome) -> list[float | str | None]:
    return [r.word if r.value is None else r.value for r in outcome.readings]


def marked(outcome: Outcome) -> set[str]:
    assert all(m.quality is Quality.BAD and m.value is m.word is m.receipt is None for m in outcome.marks)
    return {m.address for m in outcome.marks}


BOTH = {"gw/K/PT", "gw/K/UY"}


def test_a_birth_gives_values_and_then_the_alias_does(gateway: Gateway) -> None:
    assert values(gateway.born(T0, value=20.5)) == [20.5, "100"]
    assert values(gateway.data(T0 + 1, 21.5)) == [21.5]
    by_name = gateway.send(MessageType.DEVICE_DATA, T0 + 2, Metric(name="PT", float_value=22.5))
    assert values(by_name) == [22.5]
    assert gateway.state is NodeState.ALIVE


def test_before_the_first_birth_nothing_is_read_and_it_is_told(gateway: Gateway) -> None:
    told = gateway.data(T0, 21.5)
    assert (told.readings, told.marks) == ([], [])
    assert told.refused == [("spBv1.0/g/DDATA/gw/K", "edge node gw: no birth since we listen")]
    assert gateway.state is NodeState.UNKNOWN


def test_a_gap_makes_all_inputs_bad_until_the_next_birth(gateway: Gateway) -> None:
    gateway.born(T0)
    gateway.seq += 1  # one message is lost
    told = gateway.data(T0 + 2, 21.5)
    assert told.readings == []
    assert marked(told) == BOTH
    assert told.refused[0][1] == "a gap in the sequence numbers"
    assert gateway.data(T0 + 3, 21.5).readings == []
    assert gateway.birth(T0 + 4).readings == []  # that of a device does not mend it
    assert values(gateway.born(T0 + 5, value=23.0)) == [23.0, "100"]


def test_sequence_numbers_start_over_after_255(gateway: Gateway) -> None:
    gateway.born(T0)
    for n in range(600):
        assert values(gateway.data(T0 + n, float(n))) == [float(n)]


@pytest.mark.parametrize("seq", [None, 0, 1, 3, 257, 300])
def test_any_other_number_than_the_next_is_a_gap(gateway: Gateway, seq: int | None) -> None:
    gateway.born(T0)  # its device's birth was number 1
    payload = Payload(timestamp=ms(T0), seq=seq, metrics=[Metric(alias=1, float_value=3.0)])
    told = gateway.nodes.accept(topic(MessageType.DEVICE_DATA), payload, T0)
    assert told.readings == []
    assert gateway.state is NodeState.GAP


def test_a_payload_that_cannot_be_read_shows_as_a_gap_at_the_next(gateway: Gateway) -> None:
    gateway.born(T0)
    told = gateway.nodes.accept(topic(MessageType.DEVICE_DATA), None, T0 + 1)
    assert told.refused == [("spBv1.0/g/DDATA/gw/K", "the payload is not a Sparkplug payload")]
    gateway.seq += 1
    assert marked(gateway.data(T0 + 2, 5.0)) == BOTH


def test_a_death_of_this_session_makes_all_inputs_bad_and_that_of_another_does_not(gateway: Gateway) -> None:
    gateway.bdseq = 7
    gateway.born(T0)
    other = gateway.death(T0 + 1, bdseq=6)
    assert (other.marks, other.refused[0][1]) == ([], "the death of another session (bdSeq)")
    assert values(gateway.data(T0 + 1, 4.0)) == [4.0]
    assert marked(gateway.death(T0 + 2)) == BOTH
    assert gateway.state is NodeState.DEAD
    assert gateway.data(T0 + 3, 4.0).refused[0][1] == "edge node gw: dead"
    gateway.bdseq = 8
    assert values(gateway.born(T0 + 4)) == [1.0, "100"]


def test_a_death_of_a_device_makes_its_inputs_bad_and_no_others(make_input: MakeInput) -> None:
    tags = [make_input("A", address="gw/K/A"), make_input("B", address="gw/L/B")]
    gateway = Gateway(*tags)
    gateway.node_birth(T0)
    for alias, (device, name) in enumerate([("K", "A"), ("L", "B")]):
        gateway.seq += 1
        metric = Metric(name=name, alias=alias, datatype=DataType.FLOAT, float_value=1.0)
        payload = Payload(timestamp=ms(T0), seq=gateway.seq, metrics=[metric])
        gateway.nodes.accept(topic(MessageType.DEVICE_BIRTH, device), payload, T0)
    assert marked(gateway.send(MessageType.DEVICE_DEATH, T0 + 1)) == {"gw/K/A"}
    assert gateway.send(MessageType.DEVICE_DATA, T0 + 2).refused[0][1] == "no birth of this device"
    gateway.seq += 1
    payload = Payload(timestamp=ms(T0 + 3), seq=gateway.seq, metrics=[Metric(alias=1, float_value=2.0)])
    assert values(gateway.nodes.accept(topic(MessageType.DEVICE_DATA, "L"), payload, T0 + 3)) == [2.0]


def test_an_alias_is_forgotten_with_the_birth_that_gave_it(gateway: Gateway) -> None:
    gateway.born(T0)
    gateway.node_birth(T0 + 1)
    gateway.send(
        MessageType.DEVICE_BIRTH, T0 + 1, Metric(name="TT", alias=1, datatype=DataType.FLOAT, float_value=1.0)
    )
    told = gateway.send(
        MessageType.DEVICE_DATA, T0 + 2, Metric(alias=1, float_value=9.0), Metric(alias=2, string_value="50")
    )
    assert told.readings == []  # 1 is another metric now, 2 is none
    assert told.refused == [("spBv1.0/g/DDATA/gw/K", "a metric that its birth does not name")]


def test_an_input_that_a_new_birth_no_longer_names_is_bad(gateway: Gateway) -> None:
    gateway.born(T0)
    gateway.node_birth(T0 + 1)
    metric = Metric(name="PT", alias=1, datatype=DataType.FLOAT, float_value=2.0)
    told = gateway.send(MessageType.DEVICE_BIRTH, T0 + 1, metric)
    assert values(told) == [2.0]
    assert marked(told) == {"gw/K/UY"}


def test_an_alias_given_twice_names_the_first_only(gateway: Gateway) -> None:
    gateway.node_birth(T0)
    told = gateway.send(
        MessageType.DEVICE_BIRTH,
        T0,
        Metric(name="TT", alias=1, datatype=DataType.FLOAT, float_value=1.0),
        Metric(name="PT", alias=1, datatype=DataType.FLOAT, float_value=2.0),
    )
    assert told.readings == []
    assert told.refused == [("gw/K/PT", "its alias is taken by another metric")]
    assert gateway.data(T0 + 1, 3.0).readings == []


def test_a_birth_without_session_or_number_is_none(gateway: Gateway) -> None:
    session = Metric(name="bdSeq", long_value=0)
    for payload in (Payload(seq=0), Payload(metrics=[session]), Payload(seq=256, metrics=[session])):
        told = gateway.nodes.accept(topic(MessageType.NODE_BIRTH), payload, T0)
        assert told.refused[0][1] == "a birth without bdSeq or sequence number"
    assert gateway.state is NodeState.UNKNOWN


def test_metrics_of_the_node_itself_are_read(make_input: MakeInput) -> None:
    gateway = Gateway(make_input("PT", address="gw//Area/PT"))
    told = gateway.node_birth(T0, Metric(name="Area/PT", alias=5, datatype=DataType.FLOAT, float_value=2.0))
    assert values(told) == [2.0]
    assert values(gateway.send(MessageType.NODE_DATA, T0 + 1, Metric(alias=5, float_value=3.0))) == [3.0]


def test_a_device_that_does_not_follow_its_nodes_birth_is_bad_after_a_while(gateway: Gateway) -> None:
    gateway.born(T0)
    assert gateway.node_birth(T0 + 10).node_born
    assert gateway.nodes.overdue(T0 + 14.9) == []
    assert {m.address for m in gateway.nodes.overdue(T0 + 15.0)} == BOTH
    gateway.born(T0 + 20)
    assert gateway.nodes.overdue(T0 + 25.0) == []


def test_transient_metrics_are_ignored_and_historical_ones_keep_their_old_time(gateway: Gateway) -> None:
    gateway.born(T0 + 100)
    told = gateway.send(
        MessageType.DEVICE_DATA,
        T0 + 101,
        Metric(alias=1, timestamp=ms(T0 + 40), is_historical=True, float_value=7.0),
        Metric(alias=2, timestamp=ms(T0 + 41), is_historical=True, string_value="50"),
        Metric(alias=1, is_transient=True, float_value=8.0),
    )
    seen = [(r.source_time, r.value, r.word) for r in told.readings]
    assert seen == [(T0 + 40, 7.0, None), (T0 + 41, None, "50")]
    assert told.refused == []


def test_other_nodes_and_commands_are_passed_over(gateway: Gateway) -> None:
    gateway.born(T0)
    stranger = gateway.nodes.accept(topic(MessageType.DEVICE_DATA, node="other"), Payload(seq=9), T0)
    command = gateway.nodes.accept(topic(MessageType.NODE_COMMAND), Payload(), T0)
    assert stranger == command == Outcome()
    assert values(gateway.data(T0 + 1, 2.0)) == [2.0]


def test_a_new_connection_knows_nothing_and_marks_what_was_told(gateway: Gateway) -> None:
    assert gateway.nodes.begin(T0 - 5) == []
    gateway.born(T0)
    assert {m.address for m in gateway.nodes.begin(T0 + 5)} == BOTH
    assert gateway.state is NodeState.UNKNOWN


@pytest.mark.parametrize("state", list(NodeState))
@pytest.mark.parametrize("event", ["birth", "data", "gap", "death", "other death", "device death"])
def test_every_state_answers_every_event(gateway: Gateway, state: NodeState, event: str) -> None:
    expected = {("birth", s): NodeState.ALIVE for s in NodeState} | {
        ("gap", NodeState.ALIVE): NodeState.GAP,
        ("death", NodeState.ALIVE): NodeState.DEAD,
        ("death", NodeState.GAP): NodeState.DEAD,
    }  # everything else stays as it is
    if state is not NodeState.UNKNOWN:
        gateway.born(T0)
    if state is NodeState.GAP:
        gateway.seq += 1
        gateway.data(T0, 1.0)
    if state is NodeState.DEAD:
        gateway.death(T0)
    assert gateway.state is state
    at = T0 + 1
    match event:
        case "birth":
            gateway.born(at)
        case "data":
            gateway.data(at, 2.0)
        case "gap":
            gateway.seq += 1
            gateway.data(at, 2.0)
        case "death":
            gateway.death(at)
        case "other death":
            gateway.death(at, bdseq=99)
        case "device death":
            gateway.send(MessageType.DEVICE_DEATH, at)
    assert gateway.state is expected.get((event, state), state)


# --- how it reaches the frame -----------------------------------------------------------------------------


class Frames:
    def __init__(self, plan: UnitPlan) -> None:
        self.builder = FrameBuilder(plan)

    def take(self, *told: Outcome | list[Reading]) -> None:
        for one in told:
            found = one if isinstance(one, list) else one.readings + one.marks
            self.builder.accept(found, None)

    def at(self, tick: float) -> tuple[list[Quality], list[float]]:
        frame = self.builder.frame(int(tick), {"plant"})
        return [Quality(q) for q in frame.quality], [float(v) for v in frame.values]


@pytest.fixture
def frames(inputs: tuple[Input, Input]) -> Frames:
    plan = load_site(SITE).units[0]
    steps = tuple(replace(plan.unit.load_steps[0], word=w, index=n) for n, w in enumerate(("100", "50")))
    return Frames(replace(plan, unit=replace(plan.unit, load_steps=steps), inputs=inputs))


BAD = [Quality.BAD, Quality.BAD]
GOOD = [Quality.GOOD, Quality.GOOD]


@pytest.mark.parametrize("skew", [0.0, 3.0, -3.0], ids=["same clock", "plant ahead", "plant behind"])
def test_inputs_are_bad_from_death_to_birth_whatever_the_clocks_say(
    gateway: Gateway, frames: Frames, skew: float
) -> None:
    """Also the one sent on change, whose birth repeats a word that is hours old."""
    frames.take(gateway.born(T0 + 0.4 + skew, value=20.0))
    for n in range(1, 10):
        frames.take(gateway.data(T0 + n + 0.4 + skew, 20.0, now=T0 + n + 0.4))
    frames.take(gateway.death(T0 + 9.6))
    bad_from = T0 + 10 + max(skew, 0)
    assert frames.at(bad_from)[0] == BAD
    assert frames.at(bad_from + 6)[0] == BAD
    gateway.node_birth(T0 + 20.4)
    frames.take(gateway.birth(T0 + 20.4 + skew, step_at=T0 - 3600, now=T0 + 20.4))
    assert frames.at(T0 + 21 + max(skew, 0))[0] == GOOD
    frames.take(
        gateway.step(T0 + 21.4 + skew, "50", now=T0 + 21.4),
        gateway.data(T0 + 21.4 + skew, 20.0, now=T0 + 21.4),
    )
    assert frames.at(T0 + 22 + max(skew, 0)) == (GOOD, [20.0, 1.0])


def test_a_mark_is_later_than_what_it_revokes(gateway: Gateway) -> None:
    told = gateway.born(T0 + 4, value=20.0)
    marks = gateway.death(T0).marks  # by the agent's clock four seconds earlier
    assert {m.source_time for m in marks} == {max(r.source_time for r in told.readings) + STEP_S}


def test_addresses_of_the_site_file() -> None:
    assert subject_of("gw/K-330/PT-1") == ("gw", "K-330", "PT-1")
    assert subject_of("gw//Node Info/Uptime") == ("gw", "", "Node Info/Uptime")
    for wrong in ("", "gw", "gw/K", "/K/PT", "gw/K/"):
        with pytest.raises(ValueError, match="edge node"):
            subject_of(wrong)


@pytest.mark.parametrize(
    "text",
    [
        "",
        "spBv1.0",
        "spBv1.0/g/NDATA",
        "spBv1.0/g/NDATA/n/d",
        "spBv1.0/g/DDATA/n",
        "spAv1.0/g/NDATA/n",
        "spBv1.0/g/XDATA/n",
        "spBv1.0/g/DDATA/n/d/e",
        "spBv1.0/STATE/host",
        "spBv1.0//NDATA/n",
    ],
)
def test_what_is_no_topic_of_an_edge_node(text: str) -> None:
    assert topic_of(text) is None


def test_topics_are_written_as_they_are_read() -> None:
    for text in ("spBv1.0/g/NBIRTH/n", "spBv1.0/g/DDATA/n/d"):
        assert str(topic_of(text)) == text


MARK = PropertySet(keys=["simulated"], values=[PropertyValue(type=DataType.BOOLEAN, boolean_value=True)])


def invented(at: float) -> list[Metric]:
    return [
        Metric(
            name="PT", alias=1, datatype=DataType.FLOAT, timestamp=ms(at), float_value=7.0, properties=MARK
        ),
        Metric(
            name="UY", alias=2, datatype=DataType.STRING, timestamp=ms(at), string_value="50", properties=MARK
        ),
    ]


def test_what_is_marked_as_simulated_is_refused_at_a_real_site(gateway: Gateway) -> None:
    gateway.node_birth(T0)
    outcome = gateway.send(MessageType.DEVICE_BIRTH, T0, *invented(T0))
    assert outcome.readings == []
    assert outcome.refused == [("gw/K/PT", SIMULATED), ("gw/K/UY", SIMULATED)]
    # data says no more than the alias: the mark of the birth holds
    outcome = gateway.data(T0 + 1, 8.0)
    assert (outcome.readings, outcome.refused) == ([], [("gw/K/PT", SIMULATED)])


def test_an_invented_node_in_place_of_a_real_one_blinds_the_inputs(gateway: Gateway) -> None:
    gateway.born(T0)
    gateway.node_birth(T0 + 5)
    outcome = gateway.send(MessageType.DEVICE_BIRTH, T0 + 5, *invented(T0 + 5))
    assert outcome.readings == []
    assert marked(outcome) == BOTH
    gateway.born(T0 + 10, value=3.0)  # the real one again: its birth takes the mark away
    assert values(gateway.data(T0 + 11, 4.0)) == [4.0]


def test_a_mark_that_stands_in_the_data_alone_counts_as_well(gateway: Gateway) -> None:
    gateway.born(T0)
    outcome = gateway.send(MessageType.DEVICE_DATA, T0 + 1, Metric(alias=1, float_value=8.0, properties=MARK))
    assert (outcome.readings, outcome.refused) == ([], [("gw/K/PT", SIMULATED)])


def test_a_simulated_site_takes_what_is_marked(inputs: tuple[Input, Input]) -> None:
    gateway = Gateway(*inputs, takes_simulated=True)
    gateway.node_birth(T0)
    outcome = gateway.send(MessageType.DEVICE_BIRTH, T0, *invented(T0))
    assert (values(outcome), outcome.refused) == ([7.0, "50"], [])
