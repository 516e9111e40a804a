"""The site as frozen values: what `agent.siteplan.load` makes of a site file."""

from collections.abc import Mapping
from dataclasses import dataclass
from enum import StrEnum
from typing import Final
from zoneinfo import ZoneInfo

from model.machine import Unit
from model.quantities import (
    PROBABILITY_SUFFIX,
    QUANTITIES,
    UNCERTAINTY_SUFFIX,
    Kind,
    Scope,
    series_name,
)

# Units, in a site file, of inputs that send no number.
WORD: Final = "word"
SWITCH: Final = "switch"


class SourceKind(StrEnum):
    MQTT_JSON = "mqtt_json"
    MQTT_SPARKPLUG = "mqtt_sparkplug"
    OPCUA = "opcua"


class MqttVersion(StrEnum):
    V311 = "3.1.1"
    V5 = "5"


@dataclass(frozen=True, slots=True, kw_only=True)
class Source:
    """One connection to the plant. ``address`` is a URL: mqtt://host:port or opc.tcp://host:port/path."""

    name: str
    kind: SourceKind
    address: str
    takes_simulated: bool = False  # only at a site that is an invented plant
    # both kinds of MQTT
    mqtt_version: MqttVersion = MqttVersion.V5
    client_id: str = ""
    # mqtt_sparkplug only
    group: str = ""
    # mqtt_json only
    topics: tuple[str, ...] = ()  # filters subscribed to
    value_field: str = "value"
    time_field: str = "time"
    quality_field: str = "quality"


@dataclass(frozen=True, slots=True, kw_only=True)
class Input:
    """One tag of the plant and what it stands for.

    SI value = value * scale + offset (gauge pressures have the barometer in the offset).
    """

    quantity: str  # key of model.quantities
    subject: str  # "unit", "stage1", ...
    tag: str  # the plant's name for it
    source: str
    address: str  # topic, node id, or <edge node>/<device>/<metric>
    unit: str  # the plant's unit, as entered
    scale: float
    offset: float
    span_low: float  # SI; -inf where none applies (words)
    span_high: float
    accuracy: float  # SI, limit of error; 0 where none applies
    tap: str  # where it sits, in words
    stale_after_s: float
    on_change: bool  # sent only when it changes: current as long as its source is up
    required: bool

    @property
    def name(self) -> str:
        """Name of its stored series."""
        return series_name(self.subject, self.quantity)


@dataclass(frozen=True, slots=True, kw_only=True)
class FlowReference:
    temperature_k: float
    pressure_pa: float
    dry: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class AlarmSetting:
    """A site's own setting of one alarm of the catalogue; None keeps the catalogue's value (SI)."""

    alarm: str
    setting: float | None = None
    deadband: float | None = None
    on_delay_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class UnitPlan:
    unit: Unit
    inputs: tuple[Input, ...]
    alarm_settings: tuple[AlarmSetting, ...] = ()
    flow_reference: FlowReference | None = None

    @property
    def id(self) -> str:
        return self.unit.id

    def input(self, name: str) -> Input | None:
        return next((i for i in self.inputs if i.name == name), None)

    def input_names(self) -> tuple[str, ...]:
        return tuple(i.name for i in self.inputs)

    def result_names(self) -> tuple[str, ...]:
        """Every series the agent derives for this unit, in glossary order; the store starts with it."""
        subjects = {
            Scope.UNIT: ("unit",),
            Scope.STAGE: tuple(s.subject for s in self.unit.stages),
            Scope.CYLINDER: tuple(c.subject for c in self.unit.cylinders),
        }
        names = []
        for quantity in QUANTITIES.values():
            if quantity.kind is Kind.MEASURED:
                continue
            for subject in subjects[quantity.scope]:
                name = series_name(subject, quantity.key)
                names.append(name)
                if quantity.has_uncertainty:
                    names.append(name + UNCERTAINTY_SUFFIX)
                if quantity.kind is Kind.MARGIN:
                    names.append(name + PROBABILITY_SUFFIX)
        return tuple(names)


@dataclass(frozen=True, slots=True, kw_only=True)
class SitePlan:
    schema: int
    name: str
    time_zone: str
    barometer_pa: float
    simulated: bool  # an invented plant: every page says so
    sources: Mapping[str, Source]
    units: tuple[UnitPlan, ...]
    text: str  # the file as read; stored beside what it computed
    digest: str  # of the text
    notices: tuple[str, ...] = ()  # nothing wrong, but worth knowing

    @property
    def zone(self) -> ZoneInfo:
        return ZoneInfo(self.time_zone)

    def unit(self, unit_id: str) -> UnitPlan:
        for plan in self.units:
            if plan.id == unit_id:
                return plan
        raise KeyError(unit_id)
