"""Which tables a history needs: one a load step that its minutes visit, with the faults they meet there."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
import numpy.typing as npt

from agent.siteplan.plan import UnitPlan
from simulator.equipment import Surroundings
from simulator.faults import RULES, FaultKind
from simulator.gas_data import Floats
from simulator.history_minutes import Minutes
from simulator.tabulate import Table, Tabulator
from simulator.tabulate_domain import Spot, domain_of, gas_shares, rounded_up
from simulator.tabulate_sheet import pairs

# Of these a story knows only "is" and "is not": a machine with one is another machine, no axis.
_SWITCHES: Final = frozenset({FaultKind.UNLOADER_STUCK_OPEN, FaultKind.UNLOADER_STUCK_CLOSED})


@dataclass(frozen=True, slots=True, kw_only=True)
class Piece:
    """The table of the minutes at one load step, and the spots it knows by their places in the unit."""

    table: Table
    members: tuple[int, ...]

    def values(self, minutes: Minutes, chosen: npt.NDArray[np.bool_]) -> dict[str, Floats]:
        """Settled values of the chosen minutes."""
        boundary = {name: v[chosen] for name, v in minutes.values.items()}
        if minutes.composition is not None:
            boundary |= gas_shares(self.table.domain, minutes.names, minutes.composition[chosen])
        return self.table.values(
            boundary, minutes.sizes[np.ix_(chosen, np.array(self.members, dtype=np.intp))]
        )


def codes(minutes: Minutes) -> npt.NDArray[np.int64]:
    """A number for each minute: its load step, and which switched faults are there."""
    code = minutes.step.copy()
    for k, spot in enumerate(minutes.spots):
        code *= 2
        if spot.kind in _SWITCHES:
            code += minutes.sizes[:, k] > 0.0
    return code


def tables_of(
    tabulator: Tabulator,
    plan: UnitPlan,
    usual: Surroundings,
    minutes: Minutes,
    told: Callable[[str], None] = lambda _: None,
) -> Mapping[int, Piece]:
    """Every table that some running minutes need, by `codes`."""
    code = codes(minutes)
    found = {}
    for number in np.unique(code[minutes.running]):
        chosen = minutes.running & (code == number)
        step = plan.unit.load_steps[int(minutes.step[chosen.argmax()])]
        told(f"{plan.unit.id} at load step {step.word}")
        around = replace(
            usual, held_open=step.held_open, composition=usual.composition or plan.unit.composition
        )
        found[int(number)] = _piece(tabulator, around, minutes, chosen)
    return found


def _piece(
    tabulator: Tabulator, around: Surroundings, minutes: Minutes, chosen: npt.NDArray[np.bool_]
) -> Piece:
    sizes = minutes.sizes[chosen]
    fixed, members, spots = [], [], []
    for k, spot in enumerate(minutes.spots):
        largest = float(sizes[:, k].max())
        if largest == 0.0:
            continue
        if spot.kind in _SWITCHES and float(sizes[:, k].min()) == largest:
            fixed.append(spot.fault(largest))
        else:
            members.append(k)
            spots.append((spot, rounded_up(largest, RULES[spot.kind].largest)))
    gas = None if minutes.composition is None else (minutes.names, minutes.composition[chosen])
    values = {name: v[chosen] for name, v in minutes.values.items()}
    domain = domain_of(around, values, gas, fixed=tuple(fixed))
    return Piece(table=tabulator.table(domain, spots, _together(sizes[:, members])), members=tuple(members))


def _together(sizes: Floats) -> list[tuple[int, int]]:
    there = sizes > 0.0
    return [(k, j) for k, j in pairs(sizes.shape[1]) if bool((there[:, k] & there[:, j]).any())]


__all__ = ["Piece", "Spot", "codes", "tables_of"]
