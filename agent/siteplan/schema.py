"""The blocks of a site file: which keys they take and what each value must be.

Each block is checked by itself, so that one wrong value hides no other. What blocks must say to each other
(a limit on a cylinder that exists, an input of a declared source) is checked where the plan is built.
"""

import difflib
import re
import zoneinfo
from collections.abc import Mapping
from types import MappingProxyType
from typing import Annotated, Any, ClassVar, Final, Literal

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, StrictBool, ValidationInfo

from agent.siteplan.errors import ValueRefusedError
from agent.siteplan.plan import MqttVersion, SourceKind
from model import units
from model.machine import DriverKind, OtherSide

SCHEMA: Final = 1  # the newest form of the file that this version reads

# The same words as the gas model's, which this room does not import: a test holds both equal.
COMPONENTS: Final = (
    "methane", "ethane", "propane", "n-butane", "isobutane", "n-pentane", "isopentane", "n-hexane",
    "n-heptane", "n-octane", "n-nonane", "n-decane", "nitrogen", "carbon dioxide", "hydrogen",
    "hydrogen sulfide", "water", "carbon monoxide", "oxygen", "helium", "argon",
)  # fmt: skip


def _parsed(value: Any, dimension: str, info: ValidationInfo) -> float:
    if not isinstance(value, str):
        raise ValueRefusedError(units.example(dimension))
    barometer = (info.context or {}).get("barometer_pa")
    try:
        return units.parse(value, dimension, barometer_pa=barometer)
    except units.UnitError as error:
        raise ValueRefusedError(error.expected, error.hint) from None


def _si(dimension: str, low: str, high: str) -> BeforeValidator:
    """Text to SI, within bounds that only a slip of the pen leaves."""
    least, most = units.parse(low, dimension), units.parse(high, dimension)

    def check(value: Any, info: ValidationInfo) -> float:
        number = _parsed(value, dimension, info)
        if not least <= number <= most:
            raise ValueRefusedError(f"{units.words(dimension)} from {low} to {high}")
        return number

    return BeforeValidator(check)


def _range(dimension: str) -> BeforeValidator:
    def check(value: Any, info: ValidationInfo) -> tuple[float, float]:
        if not isinstance(value, str):
            raise ValueRefusedError("two values with 'to' between them")
        barometer = (info.context or {}).get("barometer_pa")
        try:
            return units.parse_range(value, dimension, barometer_pa=barometer)
        except units.UnitError as error:
            raise ValueRefusedError(error.expected, error.hint) from None

    return BeforeValidator(check)


def _pattern(pattern: str, expected: str) -> BeforeValidator:
    compiled = re.compile(pattern)

    def check(value: Any) -> str:
        if not isinstance(value, str) or not compiled.fullmatch(value.strip()):
            raise ValueRefusedError(expected)
        return value.strip()

    return BeforeValidator(check)


def _whole(value: Any) -> int:
    if not isinstance(value, str) or not re.fullmatch("[0-9]{1,9}", value):
        raise ValueRefusedError("a whole number")
    return int(value)


def _clearance(value: Any, info: ValidationInfo) -> float:
    return _fraction(value, info, "a clearance above 0 % and up to 300 % of the swept volume", 1e-9, 3.0)


def _pocket(value: Any, info: ValidationInfo) -> float:
    expected = "what a pocket adds, above 0 % and up to 300 % of the swept volume"
    return _fraction(value, info, expected, 1e-9, 3.0)


def _part(value: Any, info: ValidationInfo) -> float:
    return _fraction(value, info, "a share from 0 % to 100 %", 0.0, 1.0)


def _loss(value: Any) -> float:
    expected = "pressure loss / (density x volume flow^2) of the stage, above 0, e.g. 250 1/m4"
    match = (
        re.fullmatch(r"([0-9]+(?:\.[0-9]+)?(?:e[0-9]+)?) ?1/m4", value.strip())
        if isinstance(value, str)
        else None
    )
    if match is None or not 0 < float(match[1]) < 1e12:
        raise ValueRefusedError(expected)
    return float(match[1])


def _share(value: Any, info: ValidationInfo) -> float:
    return _fraction(value, info, "a mole fraction from 0 to 1", 0.0, 1.0)


def _fraction(value: Any, info: ValidationInfo, expected: str, low: float, high: float) -> float:
    number = _parsed(value, "fraction", info)
    if not low <= number <= high:
        bare = not value.strip().endswith("%")
        raise ValueRefusedError(
            expected, f"write {value.strip()} %" if bare and high < number <= 100 * high else ""
        )
    return number


def _time_zone(value: str) -> str:
    known = zoneinfo.available_timezones()
    if value not in known:
        near = difflib.get_close_matches(value, known, n=1)
        hint = f"did you mean {near[0]}?" if near else ""
        raise ValueRefusedError("a time zone of the IANA list, e.g. Europe/Copenhagen", hint)
    return value


Text = Annotated[str, _pattern(r"(?s).*\S.*", "some text")]
Identity = Annotated[
    str, _pattern(r"[A-Za-z0-9][A-Za-z0-9_-]{0,39}", "letters, digits, - and _, at most 40, e.g. K-110")
]
FieldName = Annotated[str, _pattern(r"\S+", "the name of a field, e.g. value")]
Level = Annotated[str, _pattern(r"[^+/#]+", "one name without +, / and #")]
Whole = Annotated[int, BeforeValidator(_whole)]
Count = Annotated[Whole, Field(ge=1, le=99)]
Bore = Annotated[float, _si("length", "20 mm", "2 m")]
Rod = Annotated[float, _si("length", "5 mm", "1 m")]
Stroke = Annotated[float, _si("length", "20 mm", "1 m")]
ConnectingRod = Annotated[float, _si("length", "20 mm", "5 m")]
RatedSpeed = Annotated[float, _si("rotation", "50 rpm", "3600 rpm")]
MovingMass = Annotated[float, _si("mass", "0.5 kg", "20000 kg")]
ValveFrequency = Annotated[float, _si("frequency", "5 Hz", "2000 Hz")]
ValveArea = Annotated[float, _si("area", "1 mm2", "1 m2")]
Pocket = Annotated[float, BeforeValidator(_pocket)]
Part = Annotated[float, BeforeValidator(_part)]
Loss = Annotated[float, BeforeValidator(_loss)]
ClosingAngle = Annotated[float, _si("angle", "0 deg", "180 deg")]
RatedPower = Annotated[float, _si("power", "1 kW", "100 MW")]
Friction = Annotated[float, _si("power", "0 kW", "10 MW")]
DesignFlow = Annotated[float, _si("molar_flow", "0.01 mol/s", "1000000 mol/s")]
Clearance = Annotated[float, BeforeValidator(_clearance)]
Barometer = Annotated[float, _si("pressure", "0.6 bara", "1.1 bara")]
Temperature = Annotated[float, _si("temperature", "100 K", "1000 K")]
Pressure = Annotated[float, _si("pressure", "0.1 bara", "2000 bara")]
StaleLimit = Annotated[float, _si("time", "1 s", "1 d")]
Delay = Annotated[float, _si("time", "0 s", "1 d")]


class Block(BaseModel):
    """A block of keys; an unknown key is a fault, never ignored.

    ``stand_ins`` are values that offend nothing. They take the place of wrong ones so that the rest of the
    block can still be checked; a file with a fault never becomes a plan.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)
    stand_ins: ClassVar[Mapping[str, Any]] = MappingProxyType({})


class FileBlock(Block):
    schema_: Annotated[Whole, Field(alias="schema", ge=1)]
    site: Any
    sources: dict[str, Any]
    units: Annotated[list[Any], Field(min_length=1)]


class SiteBlock(Block):
    stand_ins = MappingProxyType({"name": "-", "time_zone": "UTC"})
    name: Text
    time_zone: Annotated[Text, AfterValidator(_time_zone)]
    barometer: Barometer
    simulated: StrictBool = False


class SourceBlock(Block):
    kind: SourceKind
    address: Text
    mqtt_version: MqttVersion | None = None
    client_id: Text | None = None
    group: Level | None = None
    topics: Annotated[list[Text], Field(min_length=1)] | None = None
    value_field: FieldName | None = None
    time_field: FieldName | None = None
    quality_field: FieldName | None = None


class UnitBlock(Block):
    id: Identity
    name: Text
    service: Text
    frame: Any
    gas: Any
    stages: Annotated[list[Any], Field(min_length=1)]
    load_steps: Annotated[list[Any], Field(min_length=1)]
    limits: list[Any] = []
    alarms: dict[str, Any] = {}
    flow_reference: Any = None
    driver: Any = None
    packing_vent: Pressure | None = None
    recycles: list[Literal["first", "final"]] = []
    stepless_valves: StrictBool = False
    inputs: Annotated[list[Any], Field(min_length=1)]


class FrameBlock(Block):
    stand_ins = MappingProxyType({"stroke": "20 mm", "connecting_rod": "5 m", "rated_speed": "50 rpm"})
    stroke: Stroke
    connecting_rod: ConnectingRod
    rated_speed: RatedSpeed


class GasBlock(Block):
    stand_ins = MappingProxyType(
        {"temperature_range": "1 K to 5000 K", "pressure_range": "1 bara to 9999 bara"}
    )
    composition: Annotated[dict[str, Annotated[float, BeforeValidator(_share)]], Field(min_length=1)]
    temperature_range: Annotated[tuple[float, float], _range("temperature")]
    pressure_range: Annotated[tuple[float, float], _range("pressure")]


class StageBlock(Block):
    stand_ins = MappingProxyType({"cylinders": [None]})
    number: Count
    service: Text | None = None
    relief: Pressure | None = None
    lowest_suction: Pressure | None = None
    cooler: Any = None
    suction_approach: Any = None
    discharge_approach: Any = None
    suction_taps: Count = 1
    cylinders: Annotated[list[Any], Field(min_length=1)]


class CoolerBlock(Block):
    stand_ins = MappingProxyType({"effectiveness": "1 %", "design_flow": "1 mol/s"})
    effectiveness: Part
    design_flow: DesignFlow
    pressure_drop: Part = 0.0
    knock_out: StrictBool = True


class ApproachBlock(Block):
    stand_ins = MappingProxyType({"tap": "-", "loss": "1 1/m4"})
    tap: Text
    loss: Loss


class DriverBlock(Block):
    stand_ins = MappingProxyType({"kind": "synchronous", "rated_power": "1 kW"})
    kind: DriverKind
    rated_power: RatedPower
    mechanical_efficiency: Part | None = None
    friction: Friction = 0.0
    motor_efficiency: dict[str, Any] = {}
    full_load_slip: Part = 0.0


class CylinderBlock(Block):
    stand_ins = MappingProxyType(
        {
            "bore": "2 m",
            "rod": "5 mm",
            "reciprocating_mass": "1 kg",
            "valve_natural_frequency": "9 Hz",
            "ends": {},
        }
    )
    number: Count
    bore: Bore
    rod: Rod
    tail_rod: Rod | None = None
    piston: Literal["plain", "tandem", "step"] = "plain"
    other_side: OtherSide | None = None
    distance_piece: Pressure | None = None
    reciprocating_mass: MovingMass
    crosshead_mass: MovingMass | None = None
    valve_natural_frequency: ValveFrequency
    ends: dict[Literal["head", "crank"], Any]


class EndBlock(Block):
    stand_ins = MappingProxyType(
        {"clearance": "1 %", "suction_valve_area": "1 mm2", "discharge_valve_area": "1 mm2"}
    )
    clearance: Clearance
    suction_valve_area: ValveArea
    discharge_valve_area: ValveArea
    pocket: Pocket | None = None
    variable_pocket: Pocket | None = None


class LoadStepBlock(Block):
    stand_ins = MappingProxyType({"held_open": []})
    word: Text
    held_open: list[Text]
    permitted: StrictBool = True
    pockets_open: list[Text] = []
    pocket_positions: dict[str, Part] = {}
    valves_close: dict[str, ClosingAngle] = {}
    lowest_suction: Pressure | None = None


class LimitBlock(Block):
    stand_ins = MappingProxyType({"source": "-", "entered_by": "-"})
    quantity: Text
    of: Text
    value: Text  # its dimension is that of the quantity
    source: Text
    entered_by: Text


class AlarmBlock(Block):
    setting: Text | None = None
    deadband: Text | None = None
    on_delay: Delay | None = None


class FlowReferenceBlock(Block):
    stand_ins = MappingProxyType({"dry": True})
    temperature: Temperature
    pressure: Pressure
    dry: StrictBool


class InputBlock(Block):
    stand_ins = MappingProxyType({"tag": "-", "tap": "-", "stale_after": "1 s"})
    quantity: Text
    of: Text
    tag: Text
    source: Text
    address: Text
    unit: Text
    span: Text | None = None
    accuracy: Text | None = None
    tap: Text
    stale_after: StaleLimit
    updates: Literal["periodically", "on change"] = "periodically"
    required: StrictBool = True
