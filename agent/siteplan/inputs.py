"""Builds the inputs of a unit: which tag is which quantity, in which unit, from which source."""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Final

from agent.siteplan.document import Place
from agent.siteplan.plan import SWITCH, WORD, FlowReference, Input, Source, SourceKind
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import FlowReferenceBlock, InputBlock
from agent.siteplan.sources import covers
from agent.siteplan.subjects import Declared, spoken
from model import units
from model.quantities import QUANTITIES, Kind, Quantity, Scope, series_name

_MEASURED: Final = tuple(q.key for q in QUANTITIES.values() if q.kind is Kind.MEASURED)
_NEEDED: Final = ("suction_pressure", "discharge_pressure", "suction_temperature")
_STATE_UNITS: Final = {"load_step": WORD, "run_signal": SWITCH}
_DIFFERENCES: Final = {"pressure": "pressure_difference", "temperature": "temperature_difference"}
_NODE_ID: Final = re.compile(r"((nsu=[^;]+|ns=\d+);)?(i=\d+|s=.+|g=[0-9A-Fa-f-]{36}|b=.+)")
_METRIC: Final = re.compile(r"[^+/#]+/[^+/#]*/.+")
_OF_SPAN: Final = re.compile(r"(?P<share>.*%)\s*of\s+span")
_MOST_INACCURATE: Final = 0.2  # of span; more is a slip of the pen
# Reference state that a unit of flow has in its name: K, Pa.
_FLOW_STATES: Final = {
    "N": (273.15, 101325.0),
    "S": (288.15, 101325.0),
    "M": ((60 + 459.67) * 5 / 9, 101325.0),
}


@dataclass(slots=True)
class Taken:
    """Addresses and quantities that some input has already."""

    addresses: dict[tuple[str, str], Place] = field(default_factory=dict)
    subjects: dict[str, Place] = field(default_factory=dict)


def read_inputs(
    reader: Reader,
    place: Place,
    has: Declared,
    sources: Mapping[str, Source],
    addresses: dict[tuple[str, str], Place],
) -> tuple[Input, ...]:
    """The inputs that could be read. ``addresses`` holds those taken so far on the whole site."""
    taken = Taken(addresses=addresses)
    inputs = [_read_input(reader, (*place, k), has, sources, taken) for k in range(reader.count(place))]
    _needed_by_stages(reader, place, has, taken)
    return tuple(i for i in inputs if i is not None)


def _read_input(
    reader: Reader, place: Place, has: Declared, sources: Mapping[str, Source], taken: Taken
) -> Input | None:
    block = reader.block(InputBlock, place)
    if block is None:
        _note_name(reader, place, has, taken)
        return None
    before = len(reader.faults)
    _check_source(reader, place, block, sources, taken)
    if block.quantity not in _MEASURED:
        reader.fault((*place, "quantity"), "a measured quantity", closest(block.quantity, _MEASURED))
        return None
    quantity = QUANTITIES[block.quantity]
    subject = _note_name(reader, place, has, taken)
    there = _conversion(reader, place, block, quantity)
    span = _span(reader, place, block, quantity)
    accuracy = _accuracy(reader, place, block, quantity, span)
    if quantity.key in _NEEDED and not block.required:
        reader.fault((*place, "required"), "true", f"the model needs the {quantity.words} of every stage")
    if there is None or subject is None or span is None or accuracy is None or len(reader.faults) > before:
        return None
    return Input(
        quantity=quantity.key, subject=subject, tag=block.tag, source=block.source, address=block.address,
        unit=block.unit, scale=there.scale, offset=there.offset, span_low=span[0], span_high=span[1],
        accuracy=accuracy, tap=block.tap, stale_after_s=block.stale_after,
        on_change=block.updates == "on change", required=block.required,
    )  # fmt: skip


def _note_name(reader: Reader, place: Place, has: Declared, taken: Taken) -> str | None:
    """The subject of an input, noted as taken; also of one whose other keys are wrong."""
    key, of = reader.at((*place, "quantity")), reader.at((*place, "of"))
    if key not in _MEASURED or not isinstance(of, str):
        return None
    scope = QUANTITIES[key].scope
    named = has.named(of, scope)
    if len(named) != 1 or of.strip().startswith("every"):
        if has.sure:
            one = (
                "'unit'" if scope is Scope.UNIT else f"one {scope.value} of this unit, e.g. '{scope.value} 1'"
            )
            reader.fault((*place, "of"), one)
        for subject in named:  # meant, if not said: nobody is told that they are missing
            taken.subjects.setdefault(series_name(subject, key), place)
        return None
    first = taken.subjects.setdefault(series_name(named[0], key), place)
    if first != place:
        line = reader.document.line(first)
        expected = f"one input for the {QUANTITIES[key].words} of {spoken(named[0])}"
        reader.fault(place, expected, f"line {line} has it already", value="")
        return None
    return named[0]


def _check_source(
    reader: Reader, place: Place, block: InputBlock, sources: Mapping[str, Source], taken: Taken
) -> None:
    names = reader.keys(("sources",))
    if block.source not in names:
        reader.fault((*place, "source"), "a source of this file", closest(block.source, names))
        return
    first = taken.addresses.setdefault((block.source, block.address), place)
    if first != place:
        line = reader.document.line(first)
        reader.fault((*place, "address"), "an address of its own", f"line {line} reads it already")
    source = sources.get(block.source)
    if source is not None:
        _check_address(reader, (*place, "address"), block.address, source)


def _check_address(reader: Reader, place: Place, address: str, source: Source) -> None:
    if source.kind is SourceKind.OPCUA:
        if not _NODE_ID.fullmatch(address):
            reader.fault(place, "a node id", "e.g. nsu=urn:maker:plant;s=K-110.PT-1101 or ns=2;i=1001")
    elif source.kind is SourceKind.MQTT_SPARKPLUG:
        if not _METRIC.fullmatch(address):
            expected = "<edge node>/<device>/<metric>"
            reader.fault(place, expected, "a metric of the edge node itself: <edge node>//<metric>")
    elif "+" in address or "#" in address:
        reader.fault(place, "one topic", "wildcards stand in the topics of the source")
    elif source.topics and not any(covers(topic, address) for topic in source.topics):
        listed = ", ".join(source.topics)
        reader.fault(place, f"a topic that source {source.name} subscribes to", f"it subscribes to {listed}")


def _conversion(
    reader: Reader, place: Place, block: InputBlock, quantity: Quantity
) -> units.Conversion | None:
    here = (*place, "unit")
    state = _STATE_UNITS.get(quantity.key)
    if state is not None and block.unit != state:
        reader.fault(here, f"'{state}' for the {quantity.words}")
        return None
    try:
        return units.conversion(block.unit, quantity.dimension, barometer_pa=reader.barometer_pa)
    except units.UnitError as error:
        mass = quantity.key == "flow" and _is_mass_flow(block.unit)
        reader.fault(here, error.expected, "a mass flow meter cannot be read yet" if mass else error.hint)
        return None


def _is_mass_flow(unit: str) -> bool:
    try:
        units.conversion(unit, "mass_flow")
    except units.UnitError:
        return False
    return True


def _span(reader: Reader, place: Place, block: InputBlock, quantity: Quantity) -> tuple[float, float] | None:
    here = (*place, "span")
    if quantity.key in _STATE_UNITS:
        if block.span is not None:
            reader.fault(here, f"no span for the {quantity.words}")
        return -math.inf, math.inf
    if block.span is None:
        reader.fault(here, "the transmitter's span, e.g. " + _span_example(block.unit), value="")
        return None
    try:
        return units.parse_range(block.span, quantity.dimension, barometer_pa=reader.barometer_pa)
    except units.UnitError as error:
        reader.fault(here, error.expected, error.hint)
        return None


def _span_example(unit: str) -> str:
    return f"0 {unit} to 100 {unit}"


def _accuracy(
    reader: Reader, place: Place, block: InputBlock, quantity: Quantity, span: tuple[float, float] | None
) -> float | None:
    """Limit of error in SI, as a difference."""
    here = (*place, "accuracy")
    if quantity.key in _STATE_UNITS:
        if block.accuracy is not None:
            reader.fault(here, f"no accuracy for the {quantity.words}")
        return 0.0
    if block.accuracy is None:
        reader.fault(here, "the limit of error, e.g. 0.25 % of span", value="")
        return None
    of_span = _OF_SPAN.fullmatch(block.accuracy.strip())
    if of_span is None and "%" in block.accuracy:
        reader.fault(here, "a share of the span, e.g. 0.25 % of span", "say 'of span'")
        return None
    dimension = "fraction" if of_span else _DIFFERENCES.get(quantity.dimension, quantity.dimension)
    text = of_span["share"] if of_span else block.accuracy
    value = reader.quantity(here, text, dimension)
    if value is None or span is None:
        return None
    width = span[1] - span[0]
    limit_of_error = value * width if of_span else value
    if not 0 < limit_of_error <= _MOST_INACCURATE * width:
        reader.fault(here, f"a limit of error above 0 and up to {100 * _MOST_INACCURATE:.0f} % of span")
        return None
    return limit_of_error


def _needed_by_stages(reader: Reader, place: Place, has: Declared, taken: Taken) -> None:
    if reader.count(place) == 0:
        return  # told already
    for subject in has.subjects(Scope.STAGE):
        for key in _NEEDED:
            if series_name(subject, key) not in taken.subjects and has.sure:
                words = f"an input for the {QUANTITIES[key].words} of {spoken(subject)}"
                reader.fault(place, words, "the model needs it", value="")


def read_flow_reference(reader: Reader, unit_place: Place, inputs: Sequence[Input]) -> FlowReference | None:
    """The state at which the flow meter counts; checked against the unit it is read in."""
    place = (*unit_place, "flow_reference")
    flow = next((i for i in inputs if i.quantity == "flow"), None)
    if reader.at(place) is None:
        if flow is not None:
            reader.fault(
                place, "the reference state of the measured flow", "temperature, pressure, dry", value=""
            )
        return None
    block = reader.block(FlowReferenceBlock, place)
    if block is None:
        return None
    state = _FLOW_STATES.get(flow.unit[:1]) if flow is not None else None
    if flow is not None and state is not None:
        same = abs(block.temperature - state[0]) < 0.5 and abs(block.pressure - state[1]) < 100
        if not same:
            shown = f"{state[0] - 273.15:.4g} degC, {state[1] / 1e5:.5f} bara"
            reader.fault(
                place, f"the state that {flow.unit} of tag {flow.tag} has in its name, {shown}", value=""
            )
    return FlowReference(temperature_k=block.temperature, pressure_pa=block.pressure, dry=block.dry)
