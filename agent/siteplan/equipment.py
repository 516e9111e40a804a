"""Builds what stands around the cylinders: coolers, relief settings, approaches, the driver."""

from dataclasses import replace
from typing import Final

from agent.siteplan.document import Place
from agent.siteplan.reader import Reader
from agent.siteplan.schema import ApproachBlock, CoolerBlock, DriverBlock, StageBlock
from model.machine import Approach, Cooler, Driver, DriverKind, Stage

_MOST_DROP: Final = 0.2
_MOST_LOAD: Final = 1.5  # of rated shaft power


def read_stage_equipment(reader: Reader, place: Place, block: StageBlock, stage: Stage) -> Stage:
    """The stage with what stands around it."""
    if block.relief is not None and block.lowest_suction is not None and block.relief <= block.lowest_suction:
        reader.fault((*place, "relief"), "a relief setting above the lowest suction pressure of its stage")
    return replace(
        stage,
        service=block.service or "",
        relief_pressure_pa=block.relief,
        lowest_suction_pa=block.lowest_suction,
        cooler=_cooler(reader, (*place, "cooler")) if block.cooler is not None else None,
        suction_approach=_approach(reader, (*place, "suction_approach"), block.suction_approach),
        discharge_approach=_approach(reader, (*place, "discharge_approach"), block.discharge_approach),
        suction_taps=block.suction_taps,
    )


def _cooler(reader: Reader, place: Place) -> Cooler | None:
    block = reader.block(CoolerBlock, place)
    if block is None:
        return None
    if not 0 < block.effectiveness < 1:
        reader.fault((*place, "effectiveness"), "an effectiveness above 0 % and below 100 %")
    if block.pressure_drop > _MOST_DROP:
        reader.fault(
            (*place, "pressure_drop"), f"a drop up to {100 * _MOST_DROP:g} % of the pressure before it"
        )
    return Cooler(
        effectiveness=block.effectiveness, design_flow_mol_s=block.design_flow,
        pressure_drop=block.pressure_drop, knock_out=block.knock_out,
    )  # fmt: skip


def _approach(reader: Reader, place: Place, given: object) -> Approach | None:
    block = reader.block(ApproachBlock, place) if given is not None else None
    return None if block is None else Approach(tap=block.tap, loss_per_m4=block.loss)


def read_driver(reader: Reader, place: Place) -> Driver | None:
    """The driver; none if nothing is said of it or it has faults."""
    if reader.at(place) is None:
        return None
    block = reader.block(DriverBlock, place)
    if block is None:
        return None
    if block.full_load_slip and block.kind is not DriverKind.INDUCTION:
        reader.fault(
            (*place, "full_load_slip"), f"this key only with a driver of kind {DriverKind.INDUCTION}"
        )
    if block.mechanical_efficiency == 0:
        reader.fault((*place, "mechanical_efficiency"), "an efficiency above 0 %")
    return Driver(
        kind=block.kind, rated_power_w=block.rated_power, mechanical_efficiency=block.mechanical_efficiency,
        friction_w=block.friction, full_load_slip=block.full_load_slip,
        motor_efficiencies=_curve(reader, (*place, "motor_efficiency"), block.motor_efficiency),
    )  # fmt: skip


def _curve(reader: Reader, place: Place, values: dict[str, object]) -> tuple[tuple[float, float], ...]:
    """Efficiencies of a motor by load, as ``{50 %: 94 %}``, in rising order of load."""
    found = []
    for load, efficiency in values.items():
        x = reader.quantity((*place, load), load, "fraction")
        y = reader.quantity((*place, load), efficiency, "fraction") if isinstance(efficiency, str) else None
        if not isinstance(efficiency, str):
            reader.fault((*place, load), "an efficiency at that load, e.g. 94 %")
        if x is None or y is None:
            continue
        if not 0 < x <= 1.5 or not 0 < y < 1:
            reader.fault((*place, load), "a load up to 150 % and an efficiency above 0 % and below 100 %")
            continue
        found.append((x, y))
    return tuple(sorted(found))
