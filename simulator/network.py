# ruff: noqa: PLR0917 - compiled functions take plain positional arguments
"""The whole machine over one turn of the crank: ends, bottles, lines, coolers and recycles, compiled."""

from typing import Final, NamedTuple

import numpy as np

from simulator.compiled import compiled
from simulator.cylinder import (
    AMOUNT,
    CLIPPED,
    CONCENTRATION,
    DISCHARGE,
    ENTHALPY,
    HEAT_CAPACITY,
    NOZZLE,
    PASSAGE_AMOUNT,
    PASSAGE_MEAN,
    PASSAGE_TEMPERATURE,
    PRESSURE,
    RATE_COLUMNS,
    SLOPE,
    STATE_COLUMNS,
    TEMPERATURE,
    WALL_FILM,
    WORK,
    Crank,
    Records,
    bounded,
    end_rates,
    end_states,
    exchange,
    leak_rates,
    move_plates,
    wall_films,
)
from simulator.eos import gas_state
from simulator.gas_data import Floats

# rows of a table of flows; its columns: amount, enthalpy, amount lost as condensate behind the cooler
FLOW_COLUMNS: Final = 3
INLET: Final = 0  # header into the first suction bottle
FIRST_RECYCLE: Final = 1
FINAL_RECYCLE: Final = 2
LINES: Final = 3  # then one row a stage: out of its discharge bottle; then one a stage: past its relief valve


class Network(NamedTuple):
    """What joins the stages; ``sides`` holds both headers' states, the second behind the last cooler."""

    volume: Floats  # of each bottle: suction, discharge, suction, ...
    inlet_area: float
    line_area: Floats  # out of each stage's discharge bottle, cooler and knock-out included
    first_recycle_area: float
    final_recycle_area: float
    relief_area: Floats
    relief_pa: float  # pressure behind the relief valves
    vent_pa: float  # pressure behind the packings
    sides: Floats  # (2, 5)
    cooled_enthalpy: Floats  # of the gas behind each stage's cooler
    vapour_share: Floats  # moles behind the knock-out / moles before it
    evaporation: Floats  # heat taken in each suction bottle by carried-over liquid, J per mole
    pinned: bool  # bottles keep their state: a cylinder between two boundless vessels


@compiled
def bottle_states(network: Network, amount: Floats, temperature: Floats, gas: Floats, out: Floats) -> None:
    """Fill ``out`` with the states of all bottles."""
    for j in range(amount.size):
        volume = network.volume[j]
        p, slope, h, cv = gas_state(temperature[j], volume / amount[j], gas[j // 2])
        out[j, PRESSURE], out[j, SLOPE], out[j, ENTHALPY], out[j, HEAT_CAPACITY] = p, slope, h, cv
        out[j, CONCENTRATION] = amount[j] / volume


@compiled
def line_flows(network: Network, bottles: Floats, gas: Floats, flows: Floats) -> None:
    """Flows between header, bottles and header; the enthalpy is that of the gas as it arrives."""
    stages = network.line_area.size
    flow, heat, _ = exchange(network.inlet_area, network.sides[0], bottles[0], 0.0, gas[0], 0.0)
    flows[INLET, 0], flows[INLET, 1] = flow, heat
    flows[FIRST_RECYCLE, 0] = flows[FIRST_RECYCLE, 1] = 0.0
    if network.first_recycle_area > 0.0 and stages > 1:
        flow, heat, _ = exchange(network.first_recycle_area, bottles[2], bottles[0], 0.0, gas[1], 0.0)
        flows[FIRST_RECYCLE, 0], flows[FIRST_RECYCLE, 1] = flow, heat
    flow, heat, _ = exchange(network.final_recycle_area, network.sides[1], bottles[0], 0.0, gas[stages], 0.0)
    flows[FINAL_RECYCLE, 0], flows[FINAL_RECYCLE, 1] = flow, heat
    for k in range(stages):
        here = bottles[2 * k + 1]
        there = bottles[2 * k + 2] if k + 1 < stages else network.sides[1]
        flow, heat, _ = exchange(network.line_area[k], here, there, 0.0, gas[k], 0.0)
        if k + 1 == stages and flow < 0.0:  # non-return valve
            flow = heat = 0.0
        flows[LINES + k, 0], flows[LINES + k, 1] = flow, heat
        flows[LINES + k, 2] = flow * (1.0 - network.vapour_share[k])  # gas that swings back takes it along
        relief = network.relief_area[k]
        flow = heat = 0.0
        if relief > 0.0:
            vent = np.array([network.relief_pa, 0.0, 0.0, 0.0, 0.0])
            flow, heat, _ = exchange(relief, here, vent, 0.0, gas[k], 0.0)
        flows[LINES + stages + k, 0], flows[LINES + stages + k, 1] = flow, heat


@compiled
def bottle_gains(network: Network, ends: Records, rates: Floats, flows: Floats, gain: Floats) -> None:
    """Moles and enthalpy that each bottle gains in unit time."""
    stages = network.line_area.size
    gain[:] = 0.0
    for e in range(ends.size):
        k = ends[e]["stage"]
        gain[2 * k, 0] -= rates[e, NOZZLE]
        gain[2 * k, 1] -= rates[e, NOZZLE + 1]
        gain[2 * k + 1, 0] += rates[e, DISCHARGE]
        gain[2 * k + 1, 1] += rates[e, DISCHARGE + 1]
    for i in range(LINES):
        gain[0, 0] += flows[i, 0]
        gain[0, 1] += flows[i, 1]
    gain[0, 1] -= max(flows[INLET, 0], 0.0) * network.evaporation[0]
    if stages > 1:
        gain[2, 0] -= flows[FIRST_RECYCLE, 0]
        gain[2, 1] -= flows[FIRST_RECYCLE, 1]
    for k in range(stages):
        flow, heat = flows[LINES + k, 0], flows[LINES + k, 1]
        gain[2 * k + 1, 0] -= flow + flows[LINES + stages + k, 0]
        gain[2 * k + 1, 1] -= heat + flows[LINES + stages + k, 1]
        if k + 1 < stages:
            arriving = flow - flows[LINES + k, 2]
            gain[2 * k + 2, 0] += arriving
            if flow > 0.0:
                heat = arriving * (network.cooled_enthalpy[k] - network.evaporation[k + 1])
            gain[2 * k + 2, 1] += heat


@compiled
def move_bottles(bottles: Floats, gain: Floats, amount: Floats, temperature: Floats, step: float) -> float:
    """Move every bottle on by one step; returns how many had to be bounded."""
    clipped = 0.0
    for j in range(amount.size):
        net = gain[j, 0]
        swell = temperature[j] * bottles[j, SLOPE] / bottles[j, CONCENTRATION]
        heat = gain[j, 1] - net * bottles[j, ENTHALPY] + swell * net
        t = temperature[j] + step * heat / (amount[j] * bottles[j, HEAT_CAPACITY])
        amount[j], temperature[j], out = bounded(amount[j] + step * net, t)
        clipped += out
    return clipped


@compiled
def predict(
    moving: Records, first: Floats, second: Floats, step: float, ahead: Records, sums: Floats
) -> None:
    """Heun's predictor of every end; plates stand as they now are."""
    for e in range(moving.size):
        now, then = moving[e], ahead[e]
        second[e, WALL_FILM] = first[e, WALL_FILM]
        n, t, out = bounded(
            now["amount"] + step * first[e, AMOUNT], now["temperature"] + step * first[e, TEMPERATURE]
        )
        then["amount"], then["temperature"] = n, t
        n, t, out_too = bounded(
            now["passage_amount"] + step * first[e, PASSAGE_AMOUNT],
            now["passage_temperature"] + step * first[e, PASSAGE_TEMPERATURE],
        )
        then["passage_amount"], then["passage_temperature"] = n, t
        then["suction_lift"], then["discharge_lift"] = now["suction_lift"], now["discharge_lift"]
        then["pushed_back"] = now["pushed_back"]
        sums[e, CLIPPED] += out + out_too


@compiled
def correct(moving: Records, first: Floats, second: Floats, step: float, sums: Floats) -> None:
    """Heun's corrector of every end, and the sums over the turn; ``second`` then holds the mean rates."""
    for e in range(moving.size):
        now = moving[e]
        for i in range(WORK):
            mean = 0.5 * (first[e, i] + second[e, i])
            second[e, i] = mean
            sums[e, i] += step * mean
        n, t, out = bounded(
            now["amount"] + step * second[e, AMOUNT], now["temperature"] + step * second[e, TEMPERATURE]
        )
        now["amount"], now["temperature"] = n, t
        n, t, out_too = bounded(
            now["passage_amount"] + step * second[e, PASSAGE_AMOUNT],
            now["passage_temperature"] + step * second[e, PASSAGE_TEMPERATURE],
        )
        now["passage_amount"], now["passage_temperature"] = n, t
        given = now["pushed_back"] - step * second[e, NOZZLE]
        now["pushed_back"] = min(n, max(0.0, given))
        sums[e, PASSAGE_MEAN] += step * t
        sums[e, CLIPPED] += out + out_too


@compiled
def turn(
    ends: Records,
    crank: Crank,
    network: Network,
    gas: Floats,
    moving: Records,
    bottle_amount: Floats,
    bottle_temperature: Floats,
    speed: float,
    sums: Floats,
    flow_sums: Floats,
    bottle_sums: Floats,
    trace: Floats,
) -> None:
    """One turn of the crank at a steady speed [rad/s]; sums and traces are added to, never cleared."""
    count, steps = ends.size, trace.shape[1]
    step = 2.0 * np.pi / speed / steps
    drive = (speed, step)
    state = np.empty((count, STATE_COLUMNS))
    after = np.empty((count, STATE_COLUMNS))
    first = np.zeros((count, RATE_COLUMNS))
    second = np.zeros((count, RATE_COLUMNS))
    bottles = np.empty((bottle_amount.size, STATE_COLUMNS // 2))
    gain = np.zeros((bottle_amount.size, 2))
    flows = np.zeros(flow_sums.shape)
    ahead = moving.copy()
    for i in range(steps):
        bottle_states(network, bottle_amount, bottle_temperature, gas, bottles)
        end_states(i, ends, crank, gas, moving, state)
        wall_films(ends, gas, state, first)
        leak_rates(ends, gas, network.vent_pa, step, state, first)
        end_rates(i, ends, crank, gas, bottles, moving, drive, state, first)
        move_plates(ends, moving, bottles, state, step)
        predict(moving, first, second, step, ahead, sums)
        end_states(i + 1, ends, crank, gas, ahead, after)
        leak_rates(ends, gas, network.vent_pa, step, after, second)
        end_rates(i + 1, ends, crank, gas, bottles, ahead, drive, after, second)
        correct(moving, first, second, step, sums)
        for e in range(count):
            mean = 0.5 * (state[e, PRESSURE] + after[e, PRESSURE])
            sums[e, WORK] -= mean * (crank.volume[e, i + 1] - crank.volume[e, i])
            trace[e, (i + ends[e]["offset"]) % steps] += state[e, PRESSURE]
        line_flows(network, bottles, gas, flows)
        for j in range(bottle_amount.size):
            bottle_sums[j, 0] += step * bottles[j, PRESSURE]
            bottle_sums[j, 1] += step * bottle_temperature[j]
        for j in range(flow_sums.shape[0]):
            for column in range(FLOW_COLUMNS):
                flow_sums[j, column] += step * flows[j, column]
        if not network.pinned:
            bottle_gains(network, ends, second, flows, gain)
            sums[0, CLIPPED] += move_bottles(bottles, gain, bottle_amount, bottle_temperature, step)
