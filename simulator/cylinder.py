# ruff: noqa: PLR0917 - compiled functions take plain positional arguments
"""One end of one cylinder, and its suction passage: balances of mass and energy over a crank step, compiled.

Per end: dn/dt = suction - discharge - ring - packing, and
n cv dT/dt = wall heat - T (dP/dT)_v dV/dt + sum of flows x (h upstream - h + T (dP/dT)_v v).
The passage between suction bottle and valve is an end's own volume: the gas that a leaking suction valve
throws back meets the next charge of the same end, and does not warm the neighbours through the bottle.
"""

import math
from typing import Final, NamedTuple

import numpy as np
import numpy.typing as npt

from simulator.compiled import compiled
from simulator.eos import CHOKED_SQUARED, CRITICAL_RATIO, MOLAR_MASS, gas_state
from simulator.gas_data import GAS_CONSTANT, Floats
from simulator.valves import held_back, molar_flow, plate_step

Integers = npt.NDArray[np.int64]

HEAD: Final = 1.0
CRANK: Final = -1.0

# columns of a table of states: cylinder, then the same five of the passage
PRESSURE: Final = 0
SLOPE: Final = 1  # dP/dT at fixed volume
ENTHALPY: Final = 2
HEAT_CAPACITY: Final = 3  # cv
CONCENTRATION: Final = 4
PASSAGE: Final = 5
STATE_COLUMNS: Final = 10

# columns of a table of rates; all flows in mol/s, those with heat in W
AMOUNT: Final = 0
TEMPERATURE: Final = 1
PASSAGE_AMOUNT: Final = 2
PASSAGE_TEMPERATURE: Final = 3
SUCTION: Final = 4  # flow, and its enthalpy in the column after; likewise the next four
DISCHARGE: Final = 6
RING: Final = 8  # out of this end
PACKING: Final = 10
NOZZLE: Final = 12  # from the bottle into the passage
WALL_HEAT: Final = 14  # into the gas
WALL_FILM: Final = 15  # film coefficient, W/(m2 K)
WALL_AREA: Final = 16  # the same x area, W/K
WALL_AREA_HEAT: Final = 17  # the same x gas temperature, W
HELD_BACK: Final = 18  # openings whose flow a step could not bear
WORK: Final = 19  # work on the gas; from here on the columns of a sum over a turn only
PASSAGE_MEAN: Final = 20  # temperature of the passage
CLIPPED: Final = 21
RATE_COLUMNS: Final = 22

_COLDEST_K: Final = 120.0
_HOTTEST_K: Final = 1500.0
_LEAST_MOL: Final = 1e-9
_RETURN: Final = 0.2  # share of a pressure difference that a passage makes good in a step


class Ends(NamedTuple):
    """Constants of all ends of a unit, one value an end."""

    stage: Integers  # row of the gas and number of the stage, from 0
    offset: Integers  # steps by which its throw is ahead of the first
    partner: Integers  # the other end of the same cylinder, or -1
    side: Floats  # HEAD or CRANK
    area: Floats  # piston, m2
    clearance: Floats  # m3
    suction_area: Floats  # effective, at full lift, m2
    discharge_area: Floats
    suction_leak: Floats  # effective, always open, m2
    discharge_leak: Floats
    ring_leak: Floats  # entered at the head end only
    packing_leak: Floats
    held_open: Floats  # least lift of the suction valves, 0 to 1
    frequency: Floats  # rad/s
    suction_preload: Floats  # Pa
    suction_full: Floats
    discharge_preload: Floats
    discharge_full: Floats
    film: Floats  # film coefficient / density^0.8
    wall_base: Floats  # head and piston faces, m2
    wall_per_volume: Floats  # liner, 1/m
    wall_temperature: Floats
    passage_volume: Floats
    nozzle_area: Floats
    evaporation: Floats  # heat taken by carried-over liquid, J per mole drawn in


class EndState(NamedTuple):
    """What moves, one value an end."""

    amount: Floats  # mol
    temperature: Floats
    passage_amount: Floats
    passage_temperature: Floats
    suction_lift: Floats
    suction_speed: Floats
    discharge_lift: Floats
    discharge_speed: Floats


class Crank(NamedTuple):
    """Motion at equal angles: piston position and its slope with angle."""

    position: Floats
    per_radian: Floats
    stroke: float


@compiled
def end_volume(e: int, at: int, ends: Ends, crank: Crank) -> tuple[float, float]:
    """Volume [m3] and its slope with angle [m3/rad] of an end at one crank step."""
    k = (at + ends.offset[e]) % crank.position.size
    x, slope = crank.position[k], crank.per_radian[k]
    if ends.side[e] < 0.0:
        x, slope = crank.stroke - x, -crank.per_radian[k]
    return ends.clearance[e] + ends.area[e] * x, ends.area[e] * slope


@compiled
def end_states(
    at: int,
    ends: Ends,
    crank: Crank,
    gas: Floats,
    amounts: tuple[Floats, Floats, Floats, Floats],
    out: Floats,
) -> None:
    """Fill ``out`` with the states of every cylinder end and passage."""
    n, t, passage_n, passage_t = amounts
    for e in range(n.size):
        row = gas[ends.stage[e]]
        volume, _ = end_volume(e, at, ends, crank)
        p, slope, h, cv = gas_state(t[e], volume / n[e], row)
        out[e, PRESSURE], out[e, SLOPE], out[e, ENTHALPY], out[e, HEAT_CAPACITY] = p, slope, h, cv
        out[e, CONCENTRATION] = n[e] / volume
        volume = ends.passage_volume[e]
        p, slope, h, cv = gas_state(passage_t[e], volume / passage_n[e], row)
        out[e, 5], out[e, 6], out[e, 7], out[e, 8] = p, slope, h, cv
        out[e, 9] = passage_n[e] / volume


@compiled
def exchange(
    area: float, one: Floats, other: Floats, per_mole: float, row: Floats, step: float
) -> tuple[float, float, float]:
    """Flow between two states [mol/s], its enthalpy [W], and 1.0 if it was held back."""
    if area <= 0.0:
        return 0.0, 0.0, 0.0
    difference = one[PRESSURE] - other[PRESSURE]
    m, critical, choked = row[MOLAR_MASS], row[CRITICAL_RATIO], row[CHOKED_SQUARED]
    if difference >= 0.0:
        flow = molar_flow(area, one[PRESSURE], other[PRESSURE], one[CONCENTRATION], m, critical, choked)
        flow, held = held_back(flow, difference, one[PRESSURE], per_mole, step)
        return flow, flow * one[ENTHALPY], held
    flow = molar_flow(area, other[PRESSURE], one[PRESSURE], other[CONCENTRATION], m, critical, choked)
    flow, held = held_back(-flow, difference, other[PRESSURE], per_mole, step)
    return flow, flow * other[ENTHALPY], held


@compiled
def refill(
    amount: float, drawn: float, drawn_heat: float, passage: Floats, bottle: Floats, step: float
) -> tuple[float, float]:
    """Flow from the bottle into a passage [mol/s], and its enthalpy [W].

    The passage keeps the bottle's pressure: what is drawn is replaced, less what the gas in it swells by
    as it mixes; the last term brings what is left of a difference back within a few steps. The loss of the
    nozzle is reckoned with the valve's: a pressure of its own here would need far shorter steps.
    """
    pressure = passage[PRESSURE]
    mixing = drawn * bottle[ENTHALPY] - drawn_heat if drawn > 0.0 else drawn * passage[ENTHALPY] - drawn_heat
    swelling = mixing * passage[SLOPE] / (pressure * (passage[HEAT_CAPACITY] + GAS_CONSTANT))
    flow = drawn - swelling + _RETURN * amount * (bottle[PRESSURE] / pressure - 1.0) / step
    return flow, flow * (bottle[ENTHALPY] if flow > 0.0 else passage[ENTHALPY])


@compiled
def leak_rates(ends: Ends, gas: Floats, vent_pa: float, step: float, state: Floats, out: Floats) -> None:
    """Flow past the rings of each cylinder and out of each packing."""
    for e in range(ends.area.size):
        out[e, PACKING] = out[e, PACKING + 1] = 0.0
        other = ends.partner[e]
        if ends.side[e] > 0.0 or other < 0:
            out[e, RING] = out[e, RING + 1] = 0.0
    for e in range(ends.area.size):
        row = gas[ends.stage[e]]
        other = ends.partner[e]
        if ends.side[e] > 0.0 and other >= 0:
            flow, heat, _ = exchange(ends.ring_leak[e], state[e], state[other], 0.0, row, step)
            out[e, RING], out[e, RING + 1] = flow, heat
            out[other, RING], out[other, RING + 1] = -flow, -heat
        p = state[e, PRESSURE]
        if ends.packing_leak[e] > 0.0 and p > vent_pa:
            c = state[e, CONCENTRATION]
            m, critical, choked = row[MOLAR_MASS], row[CRITICAL_RATIO], row[CHOKED_SQUARED]
            flow = molar_flow(ends.packing_leak[e], p, vent_pa, c, m, critical, choked)
            out[e, PACKING], out[e, PACKING + 1] = flow, flow * state[e, ENTHALPY]


@compiled
def end_rates(
    at: int,
    ends: Ends,
    crank: Crank,
    gas: Floats,
    bottles: Floats,
    amounts: tuple[Floats, Floats, Floats, Floats],
    lifts: tuple[Floats, Floats],
    drive: tuple[float, float],
    state: Floats,
    out: Floats,
) -> None:
    """Rates of change of every end and passage; leaks past rings and packing stand in ``out`` already."""
    n, t, passage_n, passage_t = amounts
    speed, step = drive
    for e in range(n.size):
        k = ends.stage[e]
        row, here = gas[k], state[e]
        passage = state[e, PASSAGE:]
        area = ends.suction_leak[e] + ends.suction_area[e] * max(lifts[0][e], ends.held_open[e])
        nozzle = ends.nozzle_area[e]
        area *= nozzle / math.sqrt(area * area + nozzle * nozzle)  # two losses in series
        fs, hs, held_s = exchange(area, passage, here, 1.0 / n[e], row, step)
        area = ends.discharge_leak[e] + ends.discharge_area[e] * lifts[1][e]
        fd, hd, held_d = exchange(area, here, bottles[2 * k + 1], 1.0 / n[e], row, step)
        fn, hn = refill(passage_n[e], fs, hs, passage, bottles[2 * k], step)
        # passage
        net = fn - fs
        swell = passage_t[e] * passage[SLOPE] / passage[CONCENTRATION]
        gain = hn - hs - net * passage[ENTHALPY] + swell * net
        out[e, PASSAGE_AMOUNT] = net
        out[e, PASSAGE_TEMPERATURE] = gain / (passage_n[e] * passage[HEAT_CAPACITY])
        # cylinder
        if fs > 0.0:
            hs -= fs * ends.evaporation[e]
        volume, per_radian = end_volume(e, at, ends, crank)
        film = out[e, WALL_FILM] * (ends.wall_base[e] + volume * ends.wall_per_volume[e])
        heat = film * (ends.wall_temperature[e] - t[e])
        h = here[ENTHALPY]
        away = fd + out[e, RING] + out[e, PACKING]
        net = fs - away
        swell = t[e] * here[SLOPE] / here[CONCENTRATION]
        gain = heat - t[e] * here[SLOPE] * per_radian * speed + swell * net
        gain += hs - hd - out[e, RING + 1] - out[e, PACKING + 1] - net * h
        out[e, AMOUNT] = net
        out[e, TEMPERATURE] = gain / (n[e] * here[HEAT_CAPACITY])
        out[e, SUCTION], out[e, SUCTION + 1] = fs, hs
        out[e, DISCHARGE], out[e, DISCHARGE + 1] = fd, hd
        out[e, NOZZLE], out[e, NOZZLE + 1] = fn, hn
        out[e, WALL_HEAT] = heat
        out[e, WALL_AREA], out[e, WALL_AREA_HEAT] = film, film * t[e]
        out[e, HELD_BACK] = held_s + held_d


@compiled
def wall_films(ends: Ends, gas: Floats, state: Floats, out: Floats) -> None:
    """Film coefficient of every end for one step, before the area."""
    for e in range(ends.area.size):
        density = state[e, CONCENTRATION] * gas[ends.stage[e], MOLAR_MASS]
        out[e, WALL_FILM] = ends.film[e] * density**0.8


@compiled
def move_plates(ends: Ends, moving: EndState, bottles: Floats, state: Floats, step: float) -> None:
    """Move every valve plate on by one step under the pressures at its start."""
    for e in range(ends.area.size):
        p = state[e, PRESSURE]
        moving.suction_lift[e], moving.suction_speed[e] = plate_step(
            moving.suction_lift[e], moving.suction_speed[e], state[e, PASSAGE] - p,
            ends.suction_preload[e], ends.suction_full[e], ends.frequency[e], step,
        )  # fmt: skip
        moving.discharge_lift[e], moving.discharge_speed[e] = plate_step(
            moving.discharge_lift[e], moving.discharge_speed[e], p - bottles[2 * ends.stage[e] + 1, PRESSURE],
            ends.discharge_preload[e], ends.discharge_full[e], ends.frequency[e], step,
        )  # fmt: skip


@compiled
def bounded(amount: float, temperature: float) -> tuple[float, float, float]:
    """The nearest state a gas can have, and 1.0 if that is not the one given."""
    clipped = 0.0
    if not amount > _LEAST_MOL:
        amount, clipped = _LEAST_MOL, 1.0
    if not temperature > _COLDEST_K:
        temperature, clipped = _COLDEST_K, 1.0
    if temperature > _HOTTEST_K:
        temperature, clipped = _HOTTEST_K, 1.0
    return amount, temperature, clipped
