"""Builds the nameplate of a unit: frame, gas, stages, cylinders and limits."""

import math
from collections.abc import Mapping
from dataclasses import replace

from agent.siteplan.document import Place
from agent.siteplan.equipment import read_stage_equipment
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import (
    COMPONENTS,
    CylinderBlock,
    EndBlock,
    FrameBlock,
    GasBlock,
    LimitBlock,
    StageBlock,
)
from agent.siteplan.subjects import Declared, spoken
from model.machine import Cylinder, End, GasDomain, Limit, OtherSide, Side, Stage
from model.quantities import LOWER_LIMITS, QUANTITIES, UPPER_LIMITS, Quantity

_SUM_TOLERANCE = 0.002
_FAST_PISTON_M_S = 6.0


def read_frame(reader: Reader, place: Place) -> FrameBlock | None:
    frame = reader.block(FrameBlock, place)
    if frame is None:
        return None
    if frame.connecting_rod <= frame.stroke:
        reader.fault((*place, "connecting_rod"), "a connecting rod longer than the stroke")
        return None
    speed = piston_speed_m_s(frame.stroke, frame.rated_speed)
    if speed > _FAST_PISTON_M_S:
        line = reader.document.line(place)
        reader.notice(f"line {line}: mean piston speed at rated speed is {speed:.1f} m/s, unusually high")
    return frame


def piston_speed_m_s(stroke_m: float, speed_rad_s: float) -> float:
    """Mean piston speed [m/s]: two strokes a revolution."""
    return 2 * stroke_m * speed_rad_s / math.tau


def read_gas(reader: Reader, place: Place) -> tuple[Mapping[str, float], GasDomain] | None:
    gas = reader.block(GasBlock, place)
    if gas is None:
        return None
    here = (*place, "composition")
    unknown = [word for word in gas.composition if word not in COMPONENTS]
    for word in unknown:
        reader.fault((*here, word), "a known component", closest(word, COMPONENTS), value="")
    total = sum(gas.composition.values())
    if abs(total - 1) > _SUM_TOLERANCE:
        hint = "write mole fractions, not percent" if abs(total - 100) < 1 else ""
        reader.fault(here, "mole fractions that sum to 1", hint, value=f"sum {total:.4f}")
        return None
    if unknown:
        return None
    domain = GasDomain(
        low_temperature_k=gas.temperature_range[0],
        high_temperature_k=gas.temperature_range[1],
        low_pressure_pa=gas.pressure_range[0],
        high_pressure_pa=gas.pressure_range[1],
    )
    return {word: share / total for word, share in gas.composition.items() if share > 0}, domain


def read_stages(reader: Reader, place: Place) -> tuple[Stage, ...]:
    """The stages that could be read; a cylinder or an end with faults is left out."""
    stages = []
    seen: dict[int, Place] = {}
    for index in range(reader.count(place)):
        here = (*place, index)
        block = reader.block(StageBlock, here)
        if block is None:
            continue
        if block.number != index + 1:
            reader.fault(
                (*here, "number"), f"stage number {index + 1}", "stages are numbered 1, 2, ... in order"
            )
        cylinders = [
            _read_cylinder(reader, (*here, "cylinders", k), seen) for k in range(len(block.cylinders))
        ]
        sound = tuple(c for c in cylinders if c is not None)
        stages.append(read_stage_equipment(reader, here, block, Stage(number=block.number, cylinders=sound)))
    return tuple(stages)


def _read_cylinder(reader: Reader, place: Place, seen: dict[int, Place]) -> Cylinder | None:
    block = reader.block(CylinderBlock, place)
    if block is None:
        return None
    before = len(reader.faults)
    first = seen.setdefault(block.number, (*place, "number"))
    if first != (*place, "number"):
        line = reader.document.line(first)
        reader.fault((*place, "number"), "each cylinder number once in a unit", f"line {line} has it already")
    tail = block.tail_rod or 0.0
    for key, rod in (("rod", block.rod), ("tail_rod", tail)):
        if rod >= block.bore:
            reader.fault((*place, key), f"a rod smaller than the bore of {1000 * block.bore:g} mm")
    if reader.at((*place, "ends")) == {}:
        reader.fault((*place, "ends"), "an end: head, crank or both", value="")
    _check_piston(reader, place, block)
    bare = Cylinder(
        number=block.number,
        bore_m=block.bore,
        rod_diameter_m=block.rod,
        tail_rod_diameter_m=tail,
        reciprocating_mass_kg=block.reciprocating_mass,
        ends=(),
        valve_natural_frequency_hz=block.valve_natural_frequency,
        crosshead_mass_kg=block.crosshead_mass or 0.0,
        other_side=block.other_side or OtherSide.SUCTION,
        distance_piece_pressure_pa=block.distance_piece,
    )
    ends = [
        _read_end(reader, (*place, "ends", side.value), bare, side) for side in Side if side in block.ends
    ]
    sound = tuple(end for end in ends if end is not None)
    return replace(bare, ends=sound) if len(reader.faults) == before else None


def _check_piston(reader: Reader, place: Place, block: CylinderBlock) -> None:
    if block.piston != "plain":
        reader.fault(
            (*place, "piston"), "a plain piston",
            "pistons in tandem and step pistons join ends of several pressures on one rod: not modelled",
        )  # fmt: skip
    if block.other_side is not None and len(block.ends) != 1:
        expected = "this key only with one end, where the other side has no valves"
        reader.fault((*place, "other_side"), expected)
    if block.crosshead_mass is not None and block.crosshead_mass >= block.reciprocating_mass:
        expected = f"less than the reciprocating mass of {block.reciprocating_mass:g} kg, which includes it"
        reader.fault((*place, "crosshead_mass"), expected)


def _read_end(reader: Reader, place: Place, cylinder: Cylinder, side: Side) -> End | None:
    block = reader.block(EndBlock, place)
    if block is None:
        return None
    piston = cylinder.area_m2(side)
    if piston <= 0:
        return None  # the rod was told of already
    fits = True
    for key in ("suction_valve_area", "discharge_valve_area"):
        if getattr(block, key) >= piston:
            fits = False
            reader.fault((*place, key), f"an area below the piston area of this end, {1e4 * piston:.1f} cm2")
    if not fits:
        return None
    return End(
        side=side,
        clearance=block.clearance,
        suction_area_ratio=block.suction_valve_area / piston,
        discharge_area_ratio=block.discharge_valve_area / piston,
        pocket_clearance=block.pocket or 0.0,
        variable_pocket_clearance=block.variable_pocket or 0.0,
    )


def read_limits(reader: Reader, place: Place, has: Declared) -> tuple[Limit, ...]:
    """The limits as entered, one for each subject that a line names."""
    limits: list[Limit] = []
    seen: dict[tuple[str, str], Place] = {}
    for index in range(reader.count(place)):
        here = (*place, index)
        block = reader.block(LimitBlock, here)
        if block is None:
            continue
        if block.quantity not in UPPER_LIMITS | LOWER_LIMITS:
            known = sorted(UPPER_LIMITS | LOWER_LIMITS)
            reader.fault((*here, "quantity"), "a quantity that takes a limit", closest(block.quantity, known))
            continue
        quantity = QUANTITIES[block.quantity]
        value = _limit_value(reader, (*here, "value"), block.value, quantity)
        named = has.named(block.of, quantity.scope)
        if not named and has.sure:
            reader.fault((*here, "of"), has.choice(quantity.scope))
        for subject in named:
            first = seen.setdefault((subject, quantity.key), here)
            if first is not here:
                line = reader.document.line(first)
                reader.fault(
                    here,
                    f"one limit of {quantity.key} for {spoken(subject)}",
                    f"line {line} has it already",
                    value="",
                )
            elif value is not None:
                limits.append(_limit(block, subject, value))
    return tuple(limits)


def _limit(block: LimitBlock, subject: str, value: float) -> Limit:
    return Limit(
        quantity=block.quantity,
        subject=subject,
        value=value,
        source=block.source,
        entered_by=block.entered_by,
    )


def _limit_value(reader: Reader, place: Place, text: str, quantity: Quantity) -> float | None:
    value = reader.quantity(place, text, quantity.dimension)
    if value is None:
        return None
    if value <= 0:
        reader.fault(place, "a limit above 0", "tension and compression are both entered as positive numbers")
        return None
    if quantity.dimension == "fraction" and value > 1:
        reader.fault(place, "a fraction up to 100 %", f"write {text.strip()} %" if value <= 100 else "")
        return None
    if quantity.dimension == "angle" and value > math.pi:
        reader.fault(place, "an angle up to 180 deg", "the rarer sign of the load cannot last longer")
        return None
    return value
