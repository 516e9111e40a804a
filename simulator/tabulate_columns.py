"""The columns of a table: what of a settled machine is kept, and in what reduced form it is smooth."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Final

import numpy as np

from model.machine import Unit
from simulator.gas_data import Floats
from simulator.kinematics import reversal
from simulator.machine import Machine
from simulator.outcome import MachineOutcome

CARD_ANGLES: Final = 200  # of the pin load, from which reversal is read


_OF_CYLINDER: Final = (
    "gas_load_tension_n", "gas_load_compression_n", "pin_load_tension_n", "pin_load_compression_n",
    "wall_temperature_k", "packing_flow_mol_s",
)  # fmt: skip


class Form(StrEnum):
    PER_SWEPT = "per suction pressure and speed"  # flows and powers
    LOGARITHM = "logarithm"
    PER_SPEED = "per ordered speed"
    PLAIN = "plain"


@dataclass(frozen=True, slots=True, kw_only=True)
class Column:
    name: str
    form: Form


def columns_of(unit: Unit) -> tuple[Column, ...]:
    """Names and forms of a unit's columns; loads over the angle follow them, cylinder after cylinder."""
    found = [
        ("inlet_flow_mol_s", Form.PER_SWEPT),
        ("inlet_dry_mol_s", Form.PER_SWEPT),
        ("export_flow_mol_s", Form.PER_SWEPT),
        ("export_dry_mol_s", Form.PER_SWEPT),
        ("indicated_power_w", Form.PER_SWEPT),
        ("speed_rad_s", Form.PER_SPEED),
    ]
    for stage in unit.stages:
        for name, form in (
            ("suction_pressure_pa", Form.LOGARITHM),
            ("discharge_pressure_pa", Form.LOGARITHM),
            ("suction_temperature_k", Form.PLAIN),
            ("discharge_temperature_k", Form.PLAIN),
        ):
            found.append((f"stage{stage.number}.{name}", form))
    for cylinder in unit.cylinders:
        found += [(f"cylinder{cylinder.number}.{name}", Form.PLAIN) for name in _OF_CYLINDER]
    return tuple(Column(name=name, form=form) for name, form in found)


def reading(machine: Machine, outcome: MachineOutcome) -> Floats:
    """All columns of a machine that has just settled, in SI, loads over the angle behind them."""
    row = [
        outcome.inlet_flow_mol_s, outcome.inlet_dry_mol_s, outcome.export_flow_mol_s,
        outcome.export_dry_mol_s, outcome.indicated_power_w, outcome.speed_rad_s,
    ]  # fmt: skip
    for stage in outcome.stages:
        row += [
            stage.suction_pressure_pa, stage.discharge_pressure_pa,
            stage.suction_temperature_k, stage.discharge_temperature_k,
        ]  # fmt: skip
    for cylinder in outcome.cylinders:
        row += [
            cylinder.gas_load_tension_n, cylinder.gas_load_compression_n,
            cylinder.pin_load_tension_n, cylinder.pin_load_compression_n,
            float(np.mean([e.wall_temperature_k for e in cylinder.ends])), cylinder.packing_flow_mol_s,
        ]  # fmt: skip
    cards = [_spaced(card.pin_load_n) for card in machine.cards()]
    return np.concatenate([row, *cards])


def _spaced(load: Floats) -> Floats:
    """A load over the angle at `CARD_ANGLES` equal angles."""
    at = np.arange(CARD_ANGLES) * (len(load) / CARD_ANGLES)
    return np.asarray(np.interp(at, np.arange(len(load) + 1), np.append(load, load[0])))


def scale(columns: Sequence[Column], boundary: Mapping[str, Floats]) -> Floats:
    """By what each column is divided before it is tabulated, (n, columns)."""
    pressure, speed = boundary["suction_pressure_pa"], boundary["speed_rad_s"]
    factors = {
        Form.PER_SWEPT: pressure * speed * 1e-6,
        Form.PER_SPEED: speed,
        Form.LOGARITHM: np.ones_like(pressure),
        Form.PLAIN: np.ones_like(pressure),
    }
    return np.column_stack([factors[column.form] for column in columns])


def reduced(columns: Sequence[Column], rows: Floats, scales: Floats) -> Floats:
    """SI to the form in which a column is smooth."""
    count = len(columns)
    logarithms = np.array([c.form is Form.LOGARITHM for c in columns])
    head = rows[:, :count] / scales
    head[:, logarithms] = np.log(head[:, logarithms])
    return np.concatenate((head, rows[:, count:]), axis=1)


def restored(columns: Sequence[Column], rows: Floats, scales: Floats) -> Floats:
    """Back to SI; for the columns without the loads over the angle."""
    logarithms = np.array([c.form is Form.LOGARITHM for c in columns])
    rows = rows.copy()
    rows[:, logarithms] = np.exp(rows[:, logarithms])
    return np.asarray(rows * scales)


def reversals(loads: Floats) -> Floats:
    """Degrees of reversal of loads over the angle, (n, angles) to (n,); rows alike `kinematics.reversal`."""
    most, least = loads.max(axis=1), loads.min(axis=1)
    threshold = 0.002 * np.maximum(most, -least)
    tension, compression = loads - threshold[:, None], -loads - threshold[:, None]
    minor_is_tension = (tension > 0.0).sum(axis=1) < (compression > 0.0).sum(axis=1)
    minor = np.where(minor_is_tension[:, None], tension, compression)
    positive = minor > 0.0
    after = np.roll(minor, -1, axis=1)
    rises, falls = ~positive & (after > 0.0), positive & ~(after > 0.0)
    once = (rises.sum(axis=1) == 1) & (falls.sum(axis=1) == 1)
    at, step = np.arange(len(loads)), 360.0 / loads.shape[1]
    places = []
    for edge in (rises, falls):
        first = edge.argmax(axis=1)
        now, then = minor[at, first], after[at, first]
        with np.errstate(divide="ignore", invalid="ignore"):
            places.append(first + now / (now - then))
    angle = np.where(once, (places[1] - places[0]) % loads.shape[1] * step, 0.0)
    for row in np.flatnonzero(~once & positive.any(axis=1)):
        angle[row] = np.degrees(reversal(loads[row]).angle_rad)
    return np.asarray(angle)
