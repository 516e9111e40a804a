"""Builds the nameplate of a unit: frame, gas, stages, cylinders, load steps and limits."""

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace

from agent.siteplan.document import Place
from agent.siteplan.reader import Reader, closest
from agent.siteplan.schema import (
    COMPONENTS,
    CylinderBlock,
    EndBlock,
    FrameBlock,
    GasBlock,
    LimitBlock,
    LoadStepBlock,
    StageBlock,
)
from agent.siteplan.subjects import Declared, end, spoken
from model.machine import Cylinder, End, GasDomain, Limit, LoadStep, Side, Stage
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
        stages.append(Stage(number=block.number, cylinders=tuple(c for c in cylinders if c is not None)))
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
    bare = Cylinder(
        number=block.number,
        bore_m=block.bore,
        rod_diameter_m=block.rod,
        tail_rod_diameter_m=tail,
        reciprocating_mass_kg=block.reciprocating_mass,
        ends=(),
        valve_natural_frequency_hz=block.valve_natural_frequency,
    )
    ends = [
        _read_end(reader, (*place, "ends", side.value), bare, side) for side in Side if side in block.ends
    ]
    sound = tuple(end for end in ends if end is not None)
    return replace(bare, ends=sound) if len(reader.faults) == before else None


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
    )


def read_load_steps(reader: Reader, place: Place, has: Declared) -> tuple[LoadStep, ...]:
    """The truth table: a word of the plant and the ends it holds open."""
    steps: list[LoadStep] = []
    seen: dict[str, Place] = {}
    for index in range(reader.count(place)):
        here = (*place, index)
        block = reader.block(LoadStepBlock, here)
        if block is None:
            continue
        if block.word in seen:
            line = reader.document.line(seen[block.word])
            reader.fault((*here, "word"), "each word once in a unit", f"line {line} has it already")
        seen.setdefault(block.word, (*here, "word"))
        held = _held_open(reader, (*here, "held_open"), block.held_open, has)
        steps.append(LoadStep(word=block.word, index=index, held_open=held, permitted=block.permitted))
    if steps and len(steps) == reader.count(place) and not any(step.permitted for step in steps):
        reader.fault(place, "a load step that is permitted", value="")
    return tuple(steps)


def _held_open(
    reader: Reader, place: Place, words: Sequence[str], has: Declared
) -> frozenset[tuple[int, Side]]:
    held: set[tuple[int, Side]] = set()
    for index, word in enumerate(words):
        named = end(word)
        if named is None:
            reader.fault((*place, index), "an end, e.g. 'cylinder 1 head'")
        elif named not in has.ends and has.sure:
            known = [f"cylinder {number} {side}" for number, side in sorted(has.ends)]
            reader.fault((*place, index), "an end that this unit has", f"it has {', '.join(known)}")
        elif named in held:
            reader.fault((*place, index), "each end once in a load step")
        else:
            held.add(named)
    return frozenset(held)


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
