"""Settling a machine quickly at many points: starts are foretold and states extrapolated.

A machine left alone comes to rest over some sixty turns, the bottles last. Here its slow state is moved on by
what the last few turns have shown of its way (Anderson mixing), from a start that a polynomial through all
points settled before foretells. It comes to the same state as `Machine.settle`, in a third of the turns.
"""

import math
from typing import Final

import numpy as np

from simulator.equipment import Surroundings
from simulator.faults import Faults
from simulator.gas_data import Floats
from simulator.machine import Machine, NotSettledError
from simulator.outcome import MachineOutcome
from simulator.polynomial import basis, total_degree

AT_REST: Final = 2e-5  # change of any part of the slow state in a turn
AVERAGED: Final = 5  # turns; at rest one turn is like the next
RESTLESS: Final = 40  # turns averaged of a machine whose plates flutter
FLUTTER: Final = 0.02  # largest change in ten turns that is still flutter
_BLOCK: Final = 10  # turns
_FOLLOW: Final = 3  # turns in which passages and cylinders follow the bottles
_PLANS: Final = ((1, 24, 6), (6, 16, 3))  # turns at once, how often, states remembered
_LARGEST_STEP: Final = 0.05
_SINGULAR: Final = 1e-4


class Settler:
    """A machine, and the slow states it has settled to so far.

    Parameters
    ----------
    machine : Machine
        Moved by every call.
    """

    def __init__(self, machine: Machine) -> None:
        self.machine = machine
        self.turns = 0
        self._points: list[Floats] = []
        self._states: list[Floats] = []

    def settle(self, point: Floats, around: Surroundings, faults: Faults) -> MachineOutcome:
        """Settle at one point.

        Parameters
        ----------
        point : Floats
            Where this is among its like, each coordinate within -1 to 1; only the foretelling looks at it.
        around : Surroundings
            What the site imposes.
        faults : Faults
            What is wrong with the machine.

        Returns
        -------
        MachineOutcome
            Means over `AVERAGED` turns, or over `RESTLESS` where plates flutter.

        Raises
        ------
        NotSettledError
            Bottles or walls still wander.
        """
        self.machine.change(around=around, faults=faults)
        start = self._foretold(point)
        if start is not None:
            self.machine.place(start)
        turns = AVERAGED if self._rest() else RESTLESS
        outcome = self._turn(turns)
        self._points.append(point)
        self._states.append(self.machine.slow)
        return outcome

    def _foretold(self, point: Floats) -> Floats | None:
        for degree in (2, 1):
            powers = total_degree(len(point), degree)
            if len(self._points) >= 1.4 * len(powers) + 2:
                known = basis(np.array(self._points), powers)
                weights, *_ = np.linalg.lstsq(known, np.array(self._states), rcond=None)
                return np.asarray(basis(point[None], powers)[0] @ weights)
        return None

    def _turn(self, turns: int) -> MachineOutcome:
        self.turns += turns
        return self.machine.hasten(turns)

    def _rest(self) -> bool:
        """Bring the machine to rest; False if its plates flutter and it has none, yet wanders no further.

        Turn by turn first. That goes round a kink, such as a plate that just touches its stop, for ever; so
        next in blocks of turns, in which all dies away but the slowest mode: gas shut in an idle end.
        """
        self._turn(_FOLLOW)
        if any(self._extrapolated(*plan) < plan[0] * AT_REST for plan in _PLANS):
            return True
        before = self.machine.slow
        self._turn(_BLOCK)
        move = float(np.abs(self.machine.slow - before).max())
        if move > FLUTTER:
            raise NotSettledError(self.machine.unit.id, sum(turns * most for turns, most, _ in _PLANS))
        return move < AT_REST * _BLOCK

    def _extrapolated(self, turns: int, most: int, memory: int) -> float:
        """Turn and extrapolate until at rest; the last move."""
        machine = self.machine
        states: list[Floats] = []
        moves: list[Floats] = []
        quiet, largest = 0, math.inf
        for _ in range(most):
            before = machine.slow
            self._turn(turns)
            move = machine.slow - before
            largest = float(np.abs(move).max())
            quiet = quiet + 1 if largest < turns * AT_REST else 0
            if quiet > (turns == 1):
                break
            states, moves = [*states[1 - memory :], before], [*moves[1 - memory :], move]
            machine.place(before + _mixed(states, moves))
        return largest


def _mixed(states: list[Floats], moves: list[Floats]) -> Floats:
    """The step from the last state to where the moves would vanish, as far as the last few show it."""
    step = moves[-1]
    if len(moves) > 1:
        bends = np.diff(np.array(moves), axis=0).T
        ways = np.diff(np.array(states), axis=0).T
        share, *_ = np.linalg.lstsq(bends, moves[-1], rcond=_SINGULAR)
        step = step - (ways + bends) @ share
    return np.asarray(step * min(1.0, _LARGEST_STEP / max(float(np.abs(step).max()), 1e-12)))
