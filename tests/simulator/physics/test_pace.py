"""What a turn of the crank costs, measured against a loop whose length in clock cycles is known."""

import time
from collections.abc import Callable

import numba
import pytest

from simulator.machine import Machine

BAR_MS = 1.5  # an end, a turn, 1800 steps, one thread of a processor at 2.8 GHz left to itself
SHARED = 2.0  # as much again where others compute on the same cores
CYCLES = 8  # of one dependent multiplication and addition, four each, on the processors of these years


@numba.njit
def chain(links: int) -> float:
    x = 1.0
    for _ in range(links):
        x = x * 0.999999 + 1e-7  # each waits for the last, so neighbours on the core hardly slow it
    return x


def spent(work: Callable[[], object]) -> float:
    began = time.thread_time()
    work()
    return time.thread_time() - began


@pytest.mark.slow
@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_an_end_turns_in_time(machine_of: Callable[..., Machine], name: str) -> None:
    links = round(BAR_MS * 1e-3 * 2.8e9 / CYCLES)
    chain(1)
    machine = machine_of(name)
    machine.run(20)
    ends = sum(len(c.ends) for c in machine.unit.cylinders)
    yardstick, turns = [], []
    for _ in range(30):  # the quietest moment of each counts
        yardstick.append(spent(lambda: chain(links)))
        turns.append(spent(lambda: machine.run(4)) / 4 / ends)
    ratio = min(turns) / min(yardstick)
    print(f"{name}: {1e3 * min(turns):.2f} ms of processor time an end and turn, {ratio:.2f} of the bar")
    assert ratio <= SHARED
