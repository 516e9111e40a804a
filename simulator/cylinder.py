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

Records = npt.NDArray[np.void]

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


# One record an end, so that a compiled function gets one array and not twenty: counting references to each
# of them took longer than the physics. First the constants, then what moves.
END: Final = np.dtype(
    [
        ("stage", np.int64),  # row of the gas and number of the stage, from 0
        ("offset", np.int64),  # steps by which its throw is ahead of the first
        ("partner", np.int64),  # the other end of the same cylinder, or -1
        ("side", np.float64),  # HEAD or CRANK
        ("area", np.float64),  # piston, m2
        ("clearance", np.float64),  # m3
        ("suction_area", np.float64),  # effective, at full lift, m2
        ("discharge_area", np.float64),
        ("suction_leak", np.float64),  # effective, always open, m2
        ("discharge_leak", np.float64),
        ("ring_leak", np.float64),  # entered at the head end only
        ("packing_leak", np.float64),
        ("held_open", np.float64),  # least lift of the suction valves, 0 to 1
        ("frequency", np.float64),  # rad/s
        ("suction_preload", np.float64),  # Pa
        ("suction_full", np.float64),
        ("discharge_preload", np.float64),
        ("discharge_full", np.float64),
        ("film", np.float64),  # film coefficient / density^0.8
        ("wall_base", np.float64),  # head and piston faces, m2
        ("wall_per_volume", np.float64),  # liner, 1/m
        ("wall_temperature", np.float64),
        ("passage_volume", np.float64),
        ("nozzle_area", np.float64),
        ("evaporation", np.float64),  # heat taken by carried-over liquid, J per mole drawn in
    ]
)
MOVING: Final = np.dtype(
    [
        ("amount", np.float64),  # mol
        ("temperature", np.float64),
        ("passage_amount", np.float64),
        ("passage_temperature", np.float64),
        ("suction_lift", np.float64),
        ("suction_speed", np.float64),
        ("discharge_lift", np.float64),
        ("discharge_speed", np.float64),
        ("pushed_back", np.float64),  # mol given back to the bottle and not yet drawn in again
    ]
)


class Crank(NamedTuple):
    """Volume of each end, and its slope with angle, at every step of a turn and one more."""

    volume: Floats  # (ends, steps + 1)
    per_radian: Floats


@compiled
def end_states(at: int, ends: Records, crank: Crank, gas: Floats, moving: Records, out: Floats) -> None:
    """Fill ``out`` with the states of every cylinder end and passage."""
    for e in range(ends.size):
        row = gas[ends[e]["stage"]]
        now = moving[e]
        n, volume = now["amount"], crank.volume[e, at]
        p, slope, h, cv = gas_state(now["temperature"], volume / n, row)
        out[e, PRESSURE], out[e, SLOPE], out[e, ENTHALPY], out[e, HEAT_CAPACITY] = p, slope, h, cv
        out[e, CONCENTRATION] = n / volume
        n, volume = now["passage_amount"], ends[e]["passage_volume"]
        p, slope, h, cv = gas_state(now["passage_temperature"], volume / n, row)
        out[e, 5], out[e, 6], out[e, 7], out[e, 8] = p, slope, h, cv
        out[e, 9] = n / volume


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
    amount: float, spill: float, drawing: tuple[float, float], passage: Floats, bottle: Floats, step: float
) -> tuple[float, float]:
    """Flow from the bottle into a passage [mol/s], and its enthalpy [W].

    The passage keeps the bottle's pressure: what is drawn is replaced, less what the gas in it swells by
    as it mixes; the last term brings what is left of a difference back within a few steps. The loss of the
    nozzle is reckoned with the valve's: a pressure of its own here would need far shorter steps.

    Gas pushed back through the nozzle is at first the cold gas that came in last; only when as much as the
    passage holds was pushed back does what leaves have its mean temperature (``spill`` 0 to 1).
    """
    drawn, drawn_heat = drawing
    pressure = passage[PRESSURE]
    replaced = bottle[ENTHALPY] if drawn > 0.0 else passage[ENTHALPY]
    mixing = drawn * replaced - drawn_heat
    swelling = mixing * passage[SLOPE] / (pressure * (passage[HEAT_CAPACITY] + GAS_CONSTANT))
    flow = drawn - swelling + _RETURN * amount * (bottle[PRESSURE] / pressure - 1.0) / step
    warmer = spill * (passage[ENTHALPY] - bottle[ENTHALPY]) if flow < 0.0 else 0.0
    return flow, flow * (bottle[ENTHALPY] + warmer)


@compiled
def leak_rates(ends: Records, gas: Floats, vent_pa: float, step: float, state: Floats, out: Floats) -> None:
    """Flow past the rings of each cylinder and out of each packing."""
    for e in range(ends.size):
        out[e, PACKING] = out[e, PACKING + 1] = 0.0
        if ends[e]["side"] > 0.0 or ends[e]["partner"] < 0:
            out[e, RING] = out[e, RING + 1] = 0.0
    for e in range(ends.size):
        end = ends[e]
        row, other = gas[end["stage"]], end["partner"]
        if end["side"] > 0.0 and other >= 0:
            flow, heat, _ = exchange(end["ring_leak"], state[e], state[other], 0.0, row, step)
            out[e, RING], out[e, RING + 1] = flow, heat
            out[other, RING], out[other, RING + 1] = -flow, -heat
        p = state[e, PRESSURE]
        if end["packing_leak"] > 0.0 and p > vent_pa:
            c = state[e, CONCENTRATION]
            m, critical, choked = row[MOLAR_MASS], row[CRITICAL_RATIO], row[CHOKED_SQUARED]
            flow = molar_flow(end["packing_leak"], p, vent_pa, c, m, critical, choked)
            out[e, PACKING], out[e, PACKING + 1] = flow, flow * state[e, ENTHALPY]


@compiled
def end_rates(
    at: int,
    ends: Records,
    crank: Crank,
    gas: Floats,
    bottles: Floats,
    moving: Records,
    drive: tuple[float, float],
    state: Floats,
    out: Floats,
) -> None:
    """Rates of change of every end and passage; leaks past rings and packing stand in ``out`` already."""
    speed, step = drive
    for e in range(ends.size):
        end, now, here = ends[e], moving[e], state[e]
        k = end["stage"]
        row, passage = gas[k], state[e, PASSAGE:]
        n, t, passage_n, passage_t = (
            now["amount"],
            now["temperature"],
            now["passage_amount"],
            now["passage_temperature"],
        )
        area = end["suction_leak"] + end["suction_area"] * max(now["suction_lift"], end["held_open"])
        nozzle = end["nozzle_area"]
        area *= nozzle / math.sqrt(area * area + nozzle * nozzle)  # two losses in series
        fs, hs, held_s = exchange(area, passage, here, 1.0 / n, row, step)
        area = end["discharge_leak"] + end["discharge_area"] * now["discharge_lift"]
        fd, hd, held_d = exchange(area, here, bottles[2 * k + 1], 1.0 / n, row, step)
        spill = min(1.0, now["pushed_back"] / passage_n)
        fn, hn = refill(passage_n, spill, (fs, hs), passage, bottles[2 * k], step)
        # passage
        net = fn - fs
        swell = passage_t * passage[SLOPE] / passage[CONCENTRATION]
        gain = hn - hs - net * passage[ENTHALPY] + swell * net
        out[e, PASSAGE_AMOUNT] = net
        out[e, PASSAGE_TEMPERATURE] = gain / (passage_n * passage[HEAT_CAPACITY])
        # cylinder
        if fs > 0.0:
            hs -= fs * end["evaporation"]
        film = out[e, WALL_FILM] * (end["wall_base"] + crank.volume[e, at] * end["wall_per_volume"])
        heat = film * (end["wall_temperature"] - t)
        net = fs - fd - out[e, RING] - out[e, PACKING]
        swell = t * here[SLOPE] / here[CONCENTRATION]
        gain = heat - t * here[SLOPE] * crank.per_radian[e, at] * speed + swell * net
        gain += hs - hd - out[e, RING + 1] - out[e, PACKING + 1] - net * here[ENTHALPY]
        out[e, AMOUNT] = net
        out[e, TEMPERATURE] = gain / (n * here[HEAT_CAPACITY])
        out[e, SUCTION], out[e, SUCTION + 1] = fs, hs
        out[e, DISCHARGE], out[e, DISCHARGE + 1] = fd, hd
        out[e, NOZZLE], out[e, NOZZLE + 1] = fn, hn
        out[e, WALL_HEAT] = heat
        out[e, WALL_AREA], out[e, WALL_AREA_HEAT] = film, film * t
        out[e, HELD_BACK] = held_s + held_d


@compiled
def wall_films(ends: Records, gas: Floats, state: Floats, out: Floats) -> None:
    """Film coefficient of every end for one step, before the area."""
    for e in range(ends.size):
        density = state[e, CONCENTRATION] * gas[ends[e]["stage"], MOLAR_MASS]
        out[e, WALL_FILM] = ends[e]["film"] * density**0.8


@compiled
def move_plates(ends: Records, moving: Records, bottles: Floats, state: Floats, step: float) -> None:
    """Move every valve plate on by one step under the pressures at its start."""
    for e in range(ends.size):
        end, now, p = ends[e], moving[e], state[e, PRESSURE]
        lift, speed = plate_step(
            now["suction_lift"], now["suction_speed"], state[e, PASSAGE] - p,
            end["suction_preload"], end["suction_full"], end["frequency"], step,
        )  # fmt: skip
        now["suction_lift"], now["suction_speed"] = lift, speed
        lift, speed = plate_step(
            now["discharge_lift"], now["discharge_speed"], p - bottles[2 * end["stage"] + 1, PRESSURE],
            end["discharge_preload"], end["discharge_full"], end["frequency"], step,
        )  # fmt: skip
        now["discharge_lift"], now["discharge_speed"] = lift, speed


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
