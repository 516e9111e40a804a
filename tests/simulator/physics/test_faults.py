"""Fault signs against the published symptom table, and what the fault values refuse.

Symptoms: H. P. Bloch, J. J. Hoefner, Reciprocating Compressors: Operation and Maintenance (1996), pages 304
and 336, as summarised by later authors; the rest is common practice.
"""

import math
from collections.abc import Callable
from typing import Any

import pytest

from model.machine import Side
from simulator.faults import RULES, Fault, FaultError, FaultKind, Faults, Place
from simulator.machine import Machine
from simulator.outcome import EndOutcome, MachineOutcome

K = FaultKind
HEAD, CRANK = Side.HEAD, Side.CRANK


def end(got: MachineOutcome, cylinder: int, side: Side) -> EndOutcome:
    return next(e for e in got.cylinder(cylinder).ends if e.side is side)


def change(
    settled: Callable[..., MachineOutcome], name: str, *faults: Fault
) -> tuple[MachineOutcome, MachineOutcome]:
    return settled(name), settled(name, *faults)


@pytest.mark.parametrize("kind", [K.SUCTION_VALVE_LEAK, K.DISCHARGE_VALVE_LEAK])
@pytest.mark.parametrize("side", list(Side))
def test_leaking_valve_heats_the_gas_and_costs_capacity(
    settled: Callable[..., MachineOutcome], kind: FaultKind, side: Side
) -> None:
    healthy, faulty = change(settled, "K-110", Fault(kind=kind, size=0.001, cylinder=1, side=side))
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 336:
    # discharge temperature up, capacity down; between headers whose pressures stay
    assert faulty.stages[0].discharge_temperature_k > healthy.stages[0].discharge_temperature_k + 1.0
    assert faulty.export_flow_mol_s < 0.985 * healthy.export_flow_mol_s
    assert faulty.cylinder(1).delivered_temperature_k > healthy.cylinder(1).delivered_temperature_k + 2.5
    assert faulty.cylinder(2).delivered_temperature_k < healthy.cylinder(2).delivered_temperature_k + 2.0


def test_cover_of_the_leaking_suction_valve_is_the_hot_one(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(
        settled, "K-110", Fault(kind=K.SUCTION_VALVE_LEAK, size=0.001, cylinder=1, side=HEAD)
    )
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 336:
    # the cover of the leaking valve is the hot one
    rise = {
        (n, side): end(faulty, n, side).suction_passage_temperature_k
        - end(healthy, n, side).suction_passage_temperature_k
        for n in (1, 2)
        for side in Side
    }
    assert rise[1, HEAD] > 3.0
    assert all(value < 0.4 * rise[1, HEAD] for at, value in rise.items() if at != (1, HEAD))


@pytest.mark.parametrize("side", list(Side))
def test_the_end_of_the_leaking_discharge_valve_delivers_the_hot_gas(
    settled: Callable[..., MachineOutcome], side: Side
) -> None:
    healthy, faulty = change(
        settled, "K-110", Fault(kind=K.DISCHARGE_VALVE_LEAK, size=0.001, cylinder=1, side=side)
    )
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 336: the cover of the leaking valve is
    # hot; a discharge cover feels the gas that passes under it
    rise = {
        (n, s): end(faulty, n, s).delivered_temperature_k - end(healthy, n, s).delivered_temperature_k
        for n in (1, 2)
        for s in Side
    }
    assert rise[1, side] > 3.0
    assert all(value < 0.4 * rise[1, side] for at, value in rise.items() if at != (1, side))


def test_leaking_rings_heat_both_ends_and_no_single_one(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-110", Fault(kind=K.RING_LEAK, size=0.001, cylinder=1))
    # common practice: both ends warmer, no single hot cover, capacity down
    for side in Side:
        rise = end(faulty, 1, side).delivered_temperature_k - end(healthy, 1, side).delivered_temperature_k
        assert rise > 3.0
        assert end(faulty, 1, side).volumetric_efficiency < end(healthy, 1, side).volumetric_efficiency - 0.02
    assert faulty.export_flow_mol_s < 0.98 * healthy.export_flow_mol_s


def test_leaking_packing_vents_crank_end_gas_and_leaves_temperature_alone(
    settled: Callable[..., MachineOutcome],
) -> None:
    healthy, faulty = change(settled, "K-110", Fault(kind=K.PACKING_LEAK, size=0.0001, cylinder=1))
    # common practice: vent flow up, a slight loss of capacity
    lost = healthy.export_flow_mol_s - faulty.export_flow_mol_s
    assert healthy.cylinder(1).packing_flow_mol_s == 0.0
    assert faulty.cylinder(1).packing_flow_mol_s > 0.5
    assert 0.0 < lost < faulty.cylinder(1).packing_flow_mol_s  # some of it is drawn in anew
    assert faulty.inlet_flow_mol_s > healthy.inlet_flow_mol_s
    assert faulty.stages[0].discharge_temperature_k == pytest.approx(
        healthy.stages[0].discharge_temperature_k, abs=0.4
    )


@pytest.mark.parametrize("kind", [K.SUCTION_VALVE_LEAK, K.DISCHARGE_VALVE_LEAK])
def test_leak_in_the_second_stage_raises_the_pressure_that_feeds_it(
    settled: Callable[..., MachineOutcome], kind: FaultKind
) -> None:
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 336:
    # the pressure that feeds the stage rises, that behind it falls
    healthy, faulty = change(settled, "K-330", Fault(kind=kind, size=0.001, cylinder=3, side=HEAD))
    assert faulty.stages[1].suction_pressure_pa > 1.01 * healthy.stages[1].suction_pressure_pa
    assert faulty.export_flow_mol_s < healthy.export_flow_mol_s
    healthy, faulty = change(settled, "K-330", Fault(kind=kind, size=0.001, cylinder=1, side=HEAD))
    assert faulty.stages[1].suction_pressure_pa < 0.99 * healthy.stages[1].suction_pressure_pa


def test_unloader_that_sticks_open_takes_its_end_out(settled: Callable[..., MachineOutcome]) -> None:
    # common practice: capacity and power step without a command
    fault = Fault(kind=K.UNLOADER_STUCK_OPEN, size=1.0, cylinder=1, side=HEAD)
    healthy, faulty = change(settled, "K-110", fault)
    assert faulty.export_flow_mol_s == pytest.approx(0.74 * healthy.export_flow_mol_s, rel=0.03)
    assert faulty.indicated_power_w == pytest.approx(0.75 * healthy.indicated_power_w, rel=0.03)
    assert faulty.cylinder(1).reversal.angle_rad < 0.65 * healthy.cylinder(1).reversal.angle_rad


def test_unloader_that_sticks_closed_keeps_its_end_at_work(
    machine_of: Callable[..., Machine], settled: Callable[..., MachineOutcome]
) -> None:
    fault = Fault(kind=K.UNLOADER_STUCK_CLOSED, size=1.0, cylinder=1, side=HEAD)
    machine = machine_of("K-110", fault)
    around = machine.around.__class__(
        suction_pressure_pa=machine.around.suction_pressure_pa,
        suction_temperature_k=machine.around.suction_temperature_k,
        discharge_pressure_pa=machine.around.discharge_pressure_pa,
        speed_rad_s=machine.around.speed_rad_s,
        held_open=frozenset({(1, HEAD), (2, HEAD)}),
    )
    machine.change(around=around)
    got = machine.settle()
    assert end(got, 1, HEAD).volumetric_efficiency > 0.7
    assert abs(end(got, 2, HEAD).volumetric_efficiency) < 1e-3


def test_fouled_cooler_warms_the_next_suction_and_its_discharge_at_the_same_ratio(
    settled: Callable[..., MachineOutcome],
) -> None:
    healthy, faulty = change(settled, "K-330", Fault(kind=K.COOLER_FOULING, size=0.3, stage=1))
    # common practice: the next suction warmer, its discharge too at the same ratio
    before, after = healthy.stages[1], faulty.stages[1]
    assert after.suction_temperature_k > before.suction_temperature_k + 3.0
    assert after.discharge_temperature_k > before.discharge_temperature_k + 3.0
    ratio = (after.discharge_pressure_pa / after.suction_pressure_pa) / (
        before.discharge_pressure_pa / before.suction_pressure_pa
    )
    assert ratio == pytest.approx(1.0, abs=0.02)


def test_lost_cooling_water_is_a_worse_fouling(settled: Callable[..., MachineOutcome]) -> None:
    _, fouled = change(settled, "K-330", Fault(kind=K.COOLER_FOULING, size=0.3, stage=1))
    _, lost = change(settled, "K-330", Fault(kind=K.COOLER_WATER_LOSS, size=0.7, stage=1))
    assert lost.stages[1].suction_temperature_k > fouled.stages[1].suction_temperature_k + 20.0


def test_plugged_strainer_lowers_suction_pressure_and_raises_ratio_and_temperature(
    settled: Callable[..., MachineOutcome],
) -> None:
    # source: Bloch and Hoefner, Reciprocating Compressors (1996), page 304: suction pressure down, ratio and
    # discharge temperature up
    healthy, faulty = change(settled, "K-110", Fault(kind=K.STRAINER_PLUGGING, size=0.7))
    before, after = healthy.stages[0], faulty.stages[0]
    assert after.suction_pressure_pa < 0.98 * before.suction_pressure_pa
    assert (
        after.discharge_pressure_pa / after.suction_pressure_pa
        > before.discharge_pressure_pa / before.suction_pressure_pa
    )
    assert after.discharge_temperature_k > before.discharge_temperature_k + 1.0
    assert faulty.export_flow_mol_s < healthy.export_flow_mol_s


def test_pocket_costs_capacity_and_power_and_no_heat(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-110", Fault(kind=K.POCKET_OPEN, size=0.15, cylinder=1, side=HEAD))
    assert faulty.export_flow_mol_s < 0.98 * healthy.export_flow_mol_s
    assert faulty.indicated_power_w < 0.98 * healthy.indicated_power_w
    assert faulty.stages[0].discharge_temperature_k == pytest.approx(
        healthy.stages[0].discharge_temperature_k, abs=0.6
    )


def test_passing_relief_valve_loses_gas_behind_its_cylinder(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-330", Fault(kind=K.RELIEF_PASSING, size=0.005, stage=1))
    assert faulty.stages[0].relief_flow_mol_s > 0.5
    assert faulty.stages[1].suction_pressure_pa < healthy.stages[1].suction_pressure_pa
    assert faulty.inlet_flow_mol_s > faulty.export_flow_mol_s + 0.5
    assert faulty.inlet_flow_mol_s > healthy.inlet_flow_mol_s


def test_liquid_cools_what_it_enters(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-330", Fault(kind=K.LIQUID_CARRY_OVER, size=0.01, stage=2))
    assert faulty.stages[1].suction_temperature_k < healthy.stages[1].suction_temperature_k - 0.5
    # hand: 0.01 mol of water takes 435 J from a mole of gas whose heat capacity is about 44 J/K: 10 K
    drop = healthy.stages[1].discharge_temperature_k - faulty.stages[1].discharge_temperature_k
    assert drop == pytest.approx(10.0, abs=4.0)


def test_lost_jacket_water_warms_the_discharge_a_little(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-110", Fault(kind=K.JACKET_WATER_LOSS, size=1.0))
    rise = faulty.stages[0].discharge_temperature_k - healthy.stages[0].discharge_temperature_k
    assert 0.05 < rise < 4.0  # common practice: one to four kelvin on real plants; this one does less
    assert end(faulty, 1, HEAD).wall_temperature_k > end(healthy, 1, HEAD).wall_temperature_k


def test_passing_recycles_cost_what_they_pass(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(settled, "K-330", Fault(kind=K.FIRST_RECYCLE_PASSING, size=0.01))
    assert faulty.export_flow_mol_s < 0.93 * healthy.export_flow_mol_s
    assert faulty.stages[1].discharge_temperature_k > healthy.stages[1].discharge_temperature_k + 2.0
    healthy, faulty = change(settled, "K-330", Fault(kind=K.FINAL_RECYCLE_PASSING, size=0.005))
    assert faulty.export_flow_mol_s < 0.95 * healthy.export_flow_mol_s
    assert faulty.indicated_power_w == pytest.approx(healthy.indicated_power_w, rel=0.01)


def test_broken_suction_valve_takes_the_reversal_away(settled: Callable[..., MachineOutcome]) -> None:
    healthy, faulty = change(
        settled, "K-110", Fault(kind=K.SUCTION_VALVE_LEAK, size=0.05, cylinder=1, side=CRANK)
    )
    # source: a technical article on reversal: failure of the suction valves of one end can remove it
    assert math.degrees(healthy.cylinder(1).reversal.angle_rad) > 160.0
    assert math.degrees(faulty.cylinder(1).reversal.angle_rad) < 100.0


def test_every_kind_of_fault_has_a_rule() -> None:
    assert set(RULES) == set(FaultKind)


@pytest.mark.parametrize(
    ("values", "words"),
    [
        ({"kind": K.RING_LEAK, "size": 0.2, "cylinder": 1}, "not within"),
        ({"kind": K.RING_LEAK, "size": -0.1, "cylinder": 1}, "not within"),
        ({"kind": K.RING_LEAK, "size": math.nan, "cylinder": 1}, "not within"),
        ({"kind": K.RING_LEAK, "size": 0.001}, "must name its cylinder"),
        ({"kind": K.RING_LEAK, "size": 0.001, "cylinder": 1, "stage": 1}, "nothing else"),
        ({"kind": K.SUCTION_VALVE_LEAK, "size": 0.001, "cylinder": 1}, "must name its end"),
        ({"kind": K.STRAINER_PLUGGING, "size": 0.1, "stage": 1}, "must name its unit"),
    ],
)
def test_a_fault_that_makes_no_sense_is_refused(values: dict[str, Any], words: str) -> None:
    with pytest.raises(FaultError, match=words):
        Fault(**values)


def test_a_fault_at_a_place_the_unit_lacks_is_refused(machine_of: Callable[..., Machine]) -> None:
    for fault in (
        Fault(kind=K.RING_LEAK, size=0.001, cylinder=9),
        Fault(kind=K.COOLER_FOULING, size=0.1, stage=3),
    ):
        with pytest.raises(FaultError, match="K-110 has no"):
            machine_of("K-110", fault)


def test_sizes_of_equal_faults_add_up() -> None:
    leak = Fault(kind=K.RING_LEAK, size=0.001, cylinder=1)
    faults = Faults(present=(leak, leak, Fault(kind=K.RING_LEAK, size=0.002, cylinder=2)))
    assert faults.at_cylinder(K.RING_LEAK, 1) == pytest.approx(0.002)
    assert faults.at_unit(K.STRAINER_PLUGGING) == 0.0
    assert {rule.place for rule in RULES.values()} == set(Place)
