"""A stopped unit: what its tags go to, and how fast."""

import math

import pytest

from simulator.course import UnitOrders
from simulator.faults import HEALTHY
from simulator.ostmere import USUAL
from simulator.outcome import Closure, MachineOutcome, StageOutcome
from simulator.standstill import Standstill

NAN = math.nan
AROUND = USUAL["K-220"]  # 18 bar(a) in the suction header
AMBIENT_K = 283.0
ORDERS = UnitOrders(around=AROUND, faults=HEALTHY, load_step="100", running=False, ambient_k=AMBIENT_K)


def stage(number: int, low_bar: float, high_bar: float) -> StageOutcome:
    return StageOutcome(
        number=number, suction_pressure_pa=low_bar * 1e5, suction_temperature_k=308.0,
        discharge_pressure_pa=high_bar * 1e5, discharge_temperature_k=370.0,
        suction_flow_mol_s=NAN, discharge_flow_mol_s=NAN, water_fraction=NAN, condensate_mol_s=NAN,
        cooler_outlet_temperature_k=NAN, relief_flow_mol_s=NAN, indicated_power_w=NAN,
    )  # fmt: skip


def stopped() -> Standstill:
    outcome = MachineOutcome(
        duration_s=1.0, speed_rad_s=39.0, inlet_flow_mol_s=NAN, inlet_dry_mol_s=NAN, export_flow_mol_s=NAN,
        export_dry_mol_s=NAN, first_recycle_mol_s=NAN, final_recycle_mol_s=NAN, indicated_power_w=2e6,
        electrical_power_w=2.2e6, stages=(stage(1, 17.9, 38.0), stage(2, 37.0, 76.0), stage(3, 75.0, 141.0)),
        cylinders=(), closure=Closure(amount=NAN, energy=NAN, held_back=NAN, clipped=NAN),
    )  # fmt: skip
    still = Standstill()
    still.begin(outcome)
    return still


def after(still: Standstill, seconds: int, step_s: float = 1.0) -> dict[str, float]:
    values: dict[str, float] = {}
    for _ in range(round(seconds / step_s)):
        values = still.update(ORDERS, step_s)
    return values


def test_shaft_stands_and_nothing_flows_from_the_first_second() -> None:
    values = after(stopped(), 1)
    for name in ("speed", "flow", "electrical_power", "run_signal"):
        assert values[f"unit.{name}"] == 0.0


def test_all_pressures_come_to_that_of_the_suction_header_within_about_a_minute() -> None:
    pressures = [v for n, v in after(stopped(), 75).items() if n.endswith("pressure")]
    assert len(pressures) == 6
    assert max(pressures) - min(pressures) < 1e5  # hand: (141 - 18) e^-5 = .83 bar
    assert min(pressures) == pytest.approx(18e5, rel=0.001)


def test_gas_cools_over_tens_of_minutes() -> None:
    after_10, after_120 = (after(stopped(), 60 * m)["stage1.discharge_temperature"] for m in (10, 120))
    assert after_10 == pytest.approx(AMBIENT_K + 87.0 * math.exp(-0.4))  # hand
    assert after_120 == pytest.approx(AMBIENT_K, abs=1.0)


def test_it_does_not_matter_in_how_many_steps_time_goes() -> None:
    fine, coarse = after(stopped(), 600), after(stopped(), 600, step_s=60.0)
    for name, value in fine.items():
        assert coarse[name] == pytest.approx(value, rel=1e-9)


def test_metal_cools_slower_than_gas() -> None:
    still = stopped()
    gas = after(still, 1800)["stage1.discharge_temperature"]
    assert AMBIENT_K < gas < still.wall_k(370.0, AMBIENT_K) < 370.0


def test_another_stop_begins_anew() -> None:
    still = stopped()
    after(still, 600)
    still.begin(
        MachineOutcome(
            duration_s=1.0, speed_rad_s=39.0, inlet_flow_mol_s=NAN, inlet_dry_mol_s=NAN,
            export_flow_mol_s=NAN, export_dry_mol_s=NAN, first_recycle_mol_s=NAN, final_recycle_mol_s=NAN,
            indicated_power_w=2e6, electrical_power_w=2e6, stages=(stage(1, 17.9, 38.0),), cylinders=(),
            closure=Closure(amount=NAN, energy=NAN, held_back=NAN, clipped=NAN),
        )
    )  # fmt: skip
    assert still.stopped_s == 0.0
    assert after(still, 1)["stage1.discharge_pressure"] == pytest.approx(36.71e5, rel=1e-3)  # hand
