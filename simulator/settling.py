"""Settling a machine quickly at many points: starts are foretold and states extrapolated.

A machine left alone comes to rest over some sixty turns, the bottles last. Here its slow state is moved on by
what the last few turns have shown of its way (Anderson mixing), from a start that a polynomial through all
points settled before foretells. It comes to the same state as `Machine.settle`, in a third of the turns.
"""

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
MOST: Final = 240  # turns
_FOLLOW: Final = 3  # turns in which passages and cylinders follow the bottles
_MEMORY: Final = 6
_PATIENCE: Final = 25
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
            Means over `AVERAGED` turns.

        Raises
        ------
        NotSettledError
            `MOST` turns were not enough.
        """
        self.machine.change(around=around, faults=faults)
        start = self._foretold(point)
        if start is not None:
            self.machine.place(start)
        self._rest()
        outcome = self.machine.hasten(AVERAGED)
        self.turns += AVERAGED
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

    def _rest(self) -> None:
        machine = self.machine
        machine.hasten(_FOLLOW)
        self.turns += _FOLLOW
        states: list[Floats] = []
        moves: list[Floats] = []
        quiet = 0
        for done in range(MOST):
            if done % _PATIENCE == _PATIENCE - 1:  # extrapolation goes round a kink: a while without it
                machine.hasten(_PATIENCE)
                self.turns += _PATIENCE
                states, moves = [], []
            before = machine.slow
            machine.hasten(1)
            self.turns += 1
            move = machine.slow - before
            quiet = quiet + 1 if np.abs(move).max() < AT_REST else 0
            if quiet > 1:
                return
            states, moves = [*states[1 - _MEMORY :], before], [*moves[1 - _MEMORY :], move]
            machine.place(before + _mixed(states, moves))
        raise NotSettledError(machine.unit.id, MOST)


def _mixed(states: list[Floats], moves: list[Floats]) -> Floats:
    """The step from the last state to where the moves would vanish, as far as the last few show it."""
    step = moves[-1]
    if len(moves) > 1:
        bends = np.diff(np.array(moves), axis=0).T
        ways = np.diff(np.array(states), axis=0).T
        share, *_ = np.linalg.lstsq(bends, moves[-1], rcond=_SINGULAR)
        step = step - (ways + bends) @ share
    return np.asarray(step * min(1.0, _LARGEST_STEP / max(float(np.abs(step).max()), 1e-12)))
