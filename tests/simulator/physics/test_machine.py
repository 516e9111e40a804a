# ruff: noqa: PLR0917 - one argument a column of the table
"""The whole machine: what it gives at design, that its balances close, what holds of any compressor."""

import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from model.machine import Side
from simulator.equipment import ConditionError, SealedDraw
from simulator.machine import Machine
from simulator.ostmere import SEED, USUAL
from simulator.outcome import CylinderOutcome, MachineOutcome

MASS = {"K-110": 0.018053, "K-220": 0.003878, "K-330": 0.018053}  # kg/mol, hand


def degrees(cylinder: CylinderOutcome) -> float:
    return math.degrees(cylinder.reversal.angle_rad)


@pytest.mark.parametrize(
    ("name", "kg_s", "kw", "ratios", "hot_k"),
    [
        # source: an earlier prototype of the same equations by another hand; K-110 with a 57 mm rod there
        ("K-110", 4.53, 628.0, (2.363,), (374.3,)),
        ("K-220", 1.479, 2415.0, (2.11, 2.02, 1.87), (381.4, 377.4, 370.5)),
        ("K-330", 3.084, 989.0, (2.51, 2.76), (370.7, 389.2)),
    ],
)
def test_design_points(
    settled: Callable[..., MachineOutcome],
    name: str,
    kg_s: float,
    kw: float,
    ratios: tuple[float, ...],
    hot_k: tuple[float, ...],
) -> None:
    got = settled(name)
    assert got.export_flow_mol_s * MASS[name] == pytest.approx(kg_s, rel=0.012)
    assert got.indicated_power_w / 1e3 == pytest.approx(kw, rel=0.012)
    for stage, ratio, hot in zip(got.stages, ratios, hot_k, strict=True):
        assert stage.discharge_pressure_pa / stage.suction_pressure_pa == pytest.approx(ratio, rel=0.01)
        assert stage.discharge_temperature_k == pytest.approx(hot, abs=1.6)


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
@pytest.mark.parametrize("wet", [False, True])
def test_balances_close(settled: Callable[..., MachineOutcome], name: str, wet: bool) -> None:
    got = settled(name, wet=wet)
    assert abs(got.closure.amount) < 1e-5
    assert abs(got.closure.energy) < 2e-3
    assert got.closure.clipped == 0.0
    print(f"{name}: amount {got.closure.amount:.0e}, energy {got.closure.energy:.0e}")


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_the_machines_that_were_built_need_no_help_in_a_thousand_steps(
    machine_of: Callable[..., Machine], name: str
) -> None:
    closure = machine_of(name, draw=SEED).settle().closure
    print(f"{name}: held back {closure.held_back:.1e}, bounded {closure.clipped:.1e} of all steps")
    assert closure.held_back <= 1e-3
    assert closure.clipped <= 1e-3


@pytest.mark.parametrize(
    "name",
    [
        "K-110",
        pytest.param(
            "K-220",
            marks=pytest.mark.xfail(
                reason="light gas at low speed, nameplate valves: plates flutter near the dead centres and "
                "about 1 step in 80 is held back; flow and power stay within 0.1 % of those at 7200 steps"
            ),
        ),
        "K-330",
    ],
)
def test_machines_as_on_their_nameplate_need_no_help_in_a_thousand_steps(
    settled: Callable[..., MachineOutcome], name: str
) -> None:
    closure = settled(name).closure
    print(f"{name}: held back {closure.held_back:.1e}, bounded {closure.clipped:.1e} of all steps")
    assert closure.clipped <= 1e-3
    assert closure.held_back <= 1e-3


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_dry_gas_is_kept_from_header_to_header(settled: Callable[..., MachineOutcome], name: str) -> None:
    got = settled(name, wet=True)
    assert got.export_dry_mol_s == pytest.approx(got.inlet_dry_mol_s, rel=1e-3)


@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_walls_lie_between_suction_and_discharge(
    settled: Callable[..., MachineOutcome], machine_of: Callable[..., Machine], name: str
) -> None:
    # P3: suction < wall < discharge, a quarter to a bit over half of the way, at every end
    got = settled(name)
    for stage, nameplate in zip(got.stages, machine_of(name).unit.stages, strict=True):
        for number in (c.number for c in nameplate.cylinders):
            cylinder, low = got.cylinder(number), stage.suction_temperature_k
            for e in cylinder.ends:
                assert low < e.wall_temperature_k < cylinder.delivered_temperature_k
                share = (e.wall_temperature_k - low) / (cylinder.delivered_temperature_k - low)
                assert 0.25 <= share <= 0.55, (number, e.side, share)


def test_head_ends_held_open_leave_half_the_flow_and_the_known_reversal(
    machine_of: Callable[..., Machine],
) -> None:
    held = frozenset((n, Side.HEAD) for n in (1, 2, 3, 4))
    machine = machine_of("K-220", around=replace(USUAL["K-220"], saturation=0.0, held_open=held))
    got = machine.settle()
    # source: the earlier prototype: 1163 kW, ratios 2.08/2.07/1.82, reversal 82 to 104 degrees
    assert got.indicated_power_w == pytest.approx(1163e3, rel=0.015)
    ratios = [s.discharge_pressure_pa / s.suction_pressure_pa for s in got.stages]
    assert ratios == pytest.approx([2.08, 2.07, 1.82], rel=0.015)
    assert min(degrees(c) for c in got.cylinders) == pytest.approx(82.0, abs=3.0)
    assert max(degrees(c) for c in got.cylinders) == pytest.approx(104.0, abs=3.0)
    for cylinder in got.cylinders:
        assert abs(cylinder.ends[0].volumetric_efficiency) < 1e-3


def test_first_stage_recycle_raises_the_last_ratio_and_temperature(
    machine_of: Callable[..., Machine], settled: Callable[..., MachineOutcome]
) -> None:
    closed = settled("K-330")
    around = replace(USUAL["K-330"], saturation=0.0, first_recycle=0.02)
    opened = machine_of("K-330", around=around).settle()

    def last(got: MachineOutcome) -> float:
        return got.stages[1].discharge_pressure_pa / got.stages[1].suction_pressure_pa

    # source: the earlier prototype: 28 % of the flow, second ratio 3.36, 403 K, 2.33 of 3.084 kg/s
    assert opened.first_recycle_mol_s / opened.stages[0].suction_flow_mol_s == pytest.approx(0.28, abs=0.03)
    assert last(opened) == pytest.approx(3.36, abs=0.10)
    assert last(opened) > last(closed)
    assert opened.stages[1].discharge_temperature_k == pytest.approx(403.0, abs=3.0)
    assert opened.export_flow_mol_s / closed.export_flow_mol_s == pytest.approx(2.33 / 3.084, abs=0.03)


def test_final_recycle_costs_export_and_nothing_inside(
    machine_of: Callable[..., Machine], settled: Callable[..., MachineOutcome]
) -> None:
    closed = settled("K-110")
    around = replace(USUAL["K-110"], saturation=0.0, final_recycle=0.01)
    opened = machine_of("K-110", around=around).settle()
    assert opened.export_flow_mol_s < 0.9 * closed.export_flow_mol_s
    assert opened.indicated_power_w == pytest.approx(closed.indicated_power_w, rel=0.03)
    assert opened.inlet_flow_mol_s == pytest.approx(opened.export_flow_mol_s, rel=1e-3)


def test_an_induction_motor_slips_with_load(settled: Callable[..., MachineOutcome]) -> None:
    got = settled("K-330")
    assert 740.0 < got.speed_rad_s * 30.0 / math.pi < 746.0
    assert got.electrical_power_w > 1.05 * got.indicated_power_w


@pytest.mark.slow
def test_power_peaks_at_the_known_ratio(
    rig: Callable[..., Machine], natural_gas: Mapping[str, float]
) -> None:
    # P1: clearance 0.2 / 0.3 (natural gas): 4.0 +- 0.2 / 3.05 +- 0.15
    for clearance, ratios, peak, bar in (
        (0.2, np.arange(3.0, 5.2, 0.25), 4.0, 0.2),
        (0.3, np.arange(2.2, 4.1, 0.2), 3.05, 0.15),
    ):
        power = [
            rig(natural_gas, rpm=600.0, ratio=r, suction_pa=10e5, clearance=(clearance, clearance)).settle()
            for r in ratios
        ]
        fit = np.polyfit(ratios, [p.indicated_power_w for p in power], 4)
        fine = np.linspace(ratios[0], ratios[-1], 500)
        assert fine[int(np.argmax(np.polyval(fit, fine)))] == pytest.approx(peak, abs=bar)


@pytest.mark.slow
def test_reversal_with_one_unloaded_end_falls_with_ratio_and_speed(
    machine_of: Callable[..., Machine],
) -> None:
    # P2 on unit K-110 with gas at 30 bar
    def sweep(side: Side, rpm: float, mass_factor: float = 1.0) -> list[CylinderOutcome]:
        found = []
        for ratio in (2.0, 2.5, 3.0, 4.0):
            around = replace(
                USUAL["K-110"], saturation=0.0, held_open=frozenset({(1, side), (2, side)}),
                speed_rad_s=rpm * math.pi / 30.0, discharge_pressure_pa=30e5 * ratio,
            )  # fmt: skip
            machine = machine_of("K-110", around=around)
            found.append(machine.settle().cylinders[0])
        return found

    by_speed = {rpm: sweep(Side.CRANK, rpm) for rpm in (900.0, 600.0, 300.0)}
    for cylinders in by_speed.values():
        angles = [degrees(c) for c in cylinders]
        assert all(a > b for a, b in pairwise(angles)), angles
    for fast, slow in ((900.0, 600.0), (600.0, 300.0)):
        assert all(degrees(a) > degrees(b) for a, b in zip(by_speed[fast], by_speed[slow], strict=True))
    for rpm in (600.0, 300.0):  # gas load alone never reverses
        assert all(c.gas_load_tension_n < 0.02 * c.gas_load_compression_n for c in by_speed[rpm])
    by_speed = {rpm: sweep(Side.HEAD, rpm) for rpm in (900.0, 600.0)}
    for cylinders in by_speed.values():
        shares = [c.reversal.share for c in cylinders]
        assert all(a > b for a, b in pairwise(shares)), shares
    assert all(
        a.reversal.share > b.reversal.share for a, b in zip(by_speed[900.0], by_speed[600.0], strict=True)
    )


@pytest.mark.slow
@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_four_times_the_steps_change_little(settled: Callable[..., MachineOutcome], name: str) -> None:
    coarse, fine = settled(name), settled(name, steps=7200)
    assert coarse.export_flow_mol_s == pytest.approx(fine.export_flow_mol_s, rel=3e-3)
    assert coarse.indicated_power_w == pytest.approx(fine.indicated_power_w, rel=3e-3)
    for one, other in zip(coarse.stages, fine.stages, strict=True):
        assert one.discharge_temperature_k == pytest.approx(other.discharge_temperature_k, abs=0.5)


@pytest.mark.slow
@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
@pytest.mark.parametrize("gas", ["natural_gas", "hydrogen_rich"])
def test_coarse_steps_never_break_down(
    machine_of: Callable[..., Machine], name: str, gas: str, request: pytest.FixtureRequest
) -> None:
    usual = USUAL[name]
    stages = {"K-110": 1, "K-220": 3, "K-330": 2}[name]
    for ratio in (1.2, 2.0, 3.5, 5.0):  # of every stage: where that is too much, the suction is lower
        low = min(usual.suction_pressure_pa, 300e5 / ratio**stages)
        for faster in (1.0, 1.1):
            around = replace(
                usual, saturation=0.0, composition=request.getfixturevalue(gas),
                speed_rad_s=usual.speed_rad_s * faster, suction_pressure_pa=low,
                discharge_pressure_pa=low * ratio**stages,
            )  # fmt: skip
            got = machine_of(name, around=around, steps=720).run(40)
            assert math.isfinite(got.indicated_power_w + got.export_flow_mol_s)
            assert all(math.isfinite(s.discharge_temperature_k) for s in got.stages)
            assert got.closure.clipped == 0.0


@pytest.mark.slow
@pytest.mark.parametrize("name", ["K-110", "K-220", "K-330"])
def test_periodic_within_sixty_turns(machine_of: Callable[..., Machine], name: str) -> None:
    machine = machine_of(name)
    for _ in range(6):
        got = machine.hasten(10)
    machine.hasten(60)
    at_rest = machine.hasten(20)
    for one, other in zip(got.stages, at_rest.stages, strict=True):
        assert one.suction_pressure_pa == pytest.approx(other.suction_pressure_pa, rel=1e-3)
        assert one.discharge_pressure_pa == pytest.approx(other.discharge_pressure_pa, rel=1e-3)


def test_walls_lag_in_a_live_run_and_not_while_settling(machine_of: Callable[..., Machine]) -> None:
    machine = machine_of("K-110")
    machine.settle()
    before = machine._wall.copy()
    machine.change(around=replace(machine.around, jacket_water_k=338.0))
    machine.run(15)  # one second
    live = machine._wall - before
    machine.settle()
    settled = machine._wall - before
    assert np.all(settled > 3.0)
    assert np.all(np.abs(live) < 0.02 * settled)


def test_the_same_seed_builds_the_same_machine_and_another_unit_differs() -> None:
    one, again, other = (SealedDraw.from_seed(SEED, n) for n in ("K-110", "K-110", "K-220"))
    assert one == again
    assert one != other
    assert one != SealedDraw.from_seed(SEED + 1, "K-110")
    for draw in (one, other):
        values = [
            draw.valve_preload,
            draw.valve_full_lift,
            draw.valve_frequency,
            draw.valve_area,
            draw.wall_heat,
        ]
        assert all(0.7 <= v <= 1.3 for v in [*values, draw.passage_volume])


def test_the_sealed_draw_moves_the_machine_a_little(
    machine_of: Callable[..., Machine], settled: Callable[..., MachineOutcome]
) -> None:
    nameplate, built = settled("K-110"), machine_of("K-110", draw=SEED).settle()
    assert built.indicated_power_w != nameplate.indicated_power_w
    assert built.indicated_power_w == pytest.approx(nameplate.indicated_power_w, rel=0.06)


def test_impossible_surroundings_are_refused() -> None:
    with pytest.raises(ConditionError, match="discharge_pressure_pa"):
        replace(USUAL["K-110"], discharge_pressure_pa=20e5)
    with pytest.raises(ConditionError, match="saturation"):
        replace(USUAL["K-110"], saturation=1.4)
    with pytest.raises(ConditionError, match="speed_rad_s"):
        replace(USUAL["K-110"], speed_rad_s=0.0)
