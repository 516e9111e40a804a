"""The cycle of one end: its limits, its three ways to write the efficiency, its valves."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from model.corrections import Corrections
from model.cycle import (
    GasPath,
    end_cycle,
    end_geometry,
    end_pressure,
)
from model.efficiency import volumetric_efficiency, volumetric_efficiency_from_temperatures
from model.machine import End, Side
from model.stage import gas_path, isentropic_discharge_temperature
from model.valves import full_lift_loss, plate_loss
from tests.model.surfaces import natural_gas

END = End(side=Side.HEAD, clearance=0.16, suction_area_ratio=0.06, discharge_area_ratio=0.06)


def path(ratio: float, exponent: float = 1.3) -> GasPath:
    def one(value: float) -> np.ndarray:
        return np.array([[value]])

    dense = 20.0 * ratio ** (1 / exponent)
    return GasPath(
        suction_pressure_pa=one(30e5), discharge_pressure_pa=one(30e5 * ratio),
        suction_density_kg_m3=one(20.0), cylinder_density_kg_m3=one(20.0),
        discharge_density_kg_m3=one(dense), exponent=one(exponent),
    )  # fmt: skip


def trace(
    ratio: float, corrections: Corrections, *, held: bool = False, end: End = END
) -> tuple[np.ndarray, float]:
    angle = np.linspace(0, 2 * math.pi, 721)[None, :]
    cycle, efficiency = end_cycle(
        end, path(ratio), np.array([[94.0]]), np.array([[held]]), corrections, stroke_m=0.14, rod_m=0.36,
        natural_frequency_hz=150.0,
    )  # fmt: skip
    return end_pressure(cycle, end_geometry(angle, end, 0.14, 0.36))[0], float(efficiency[0, 0])


@given(st.floats(0.02, 0.4), st.floats(1.05, 6.0), st.floats(1.05, 1.6))
def test_efficiency_falls_with_clearance_and_with_ratio(c: float, r: float, n: float) -> None:
    here = float(volumetric_efficiency(c, r, n))
    assert here < 1
    assert volumetric_efficiency(c * 1.01, r, n) < here
    assert volumetric_efficiency(c, r * 1.01, n) < here
    assert volumetric_efficiency(0.0, r, n) == 1


def test_efficiency_is_zero_where_the_clearance_gas_fills_the_stroke() -> None:
    # hand: r = ((1 + c)/c)^n
    for c in (0.1, 0.2, 0.3):
        assert volumetric_efficiency(c, ((1 + c) / c) ** 1.3, 1.3) == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize("ratio", [1.5, 2.36, 3.0])
def test_the_three_forms_of_the_efficiency_agree_only_with_their_own_exponents(ratio: float) -> None:
    """Pressure-volume exponent without Z; temperature exponent with Z; heat capacities are too high."""
    gas, ps, ts, c = natural_gas(), 30e5, 303.0, 0.17
    pd = ratio * ps
    t2 = float(isentropic_discharge_temperature(gas, ts, ps, pd))
    z_s, z_d = float(gas.z(ts, ps)), float(gas.z(t2, pd))
    states, _ = gas_path(gas, np.array([ts]), np.array([ps]), np.array([pd]), 0.0)
    by_volume = float(volumetric_efficiency(c, ratio, states.exponent[0, 0]))
    by_temperature = float(volumetric_efficiency_from_temperatures(c, ratio, z_s, z_d, t2 / ts))
    assert by_temperature == pytest.approx(by_volume, abs=1e-9)
    step = 0.05
    cp = float(gas.enthalpy(ts + step, ps) - gas.enthalpy(ts - step, ps)) / (2 * step)
    # cv = cp + T (dv/dT)_P^2 / (dv/dP)_T
    v_t = float(1 / gas.density(ts + step, ps) - 1 / gas.density(ts - step, ps)) / (2 * step)
    v_p = float(1 / gas.density(ts, ps + 100) - 1 / gas.density(ts, ps - 100)) / 200
    k = cp / (cp + ts * v_t**2 / v_p)
    with_k = 1 - c * (z_s / z_d * ratio ** (1 / k) - 1)
    # regression only: 0.4, 1.3 and 2.0 points too high on this gas
    assert 0.003 < with_k - by_volume < 0.025


def test_full_lift_loss_is_the_velocity_head_in_the_ports() -> None:
    # hand: 20 kg/m3 at 5 m/s of piston over a twentieth of its area: 100 m/s, 1 bar
    speed, rate = 100.0, 0.05
    assert full_lift_loss(20.0, speed, 0.05) * rate**2 == pytest.approx(0.5 * 20 * 100.0**2)


@given(st.floats(1e-4, 2.0), st.floats(0.05, 0.95))
def test_plate_stands_where_springs_and_flow_balance(x: float, share: float) -> None:
    line, full = 50e5, 0.012
    loss = float(plate_loss(np.array([x * full * line]), np.array([line]), share * full, full)[0])
    if x >= 1:
        assert loss == x * full * line
    elif x >= 0.02:  # below, the preload is tapered off
        lift = (loss / line - share * full) / (full - share * full)
        # hand: the flow needs x / lift^2 of the full-lift loss
        assert loss == pytest.approx(x * full * line / lift**2, rel=1e-5)
    else:
        assert 0 <= loss <= full * line


def test_plate_without_springs_loses_what_the_flow_takes() -> None:
    flow = np.array([0.0, 1e4, 5e4])
    assert np.array_equal(plate_loss(flow, np.array([50e5]), 0.004, 0.0), flow)


def test_plate_loss_rises_with_the_flow() -> None:
    flow = np.linspace(0, 1.2, 400) * 0.012 * 50e5
    assert (np.diff(plate_loss(flow, np.array([50e5]), 0.004, 0.012)) >= 0).all()


def test_ideal_trace_runs_between_the_lines() -> None:
    pressure, efficiency = trace(2.5, Corrections.ideal())
    # hand
    assert pressure.max() == pytest.approx(75e5)
    assert pressure.min() == pytest.approx(30e5)
    assert efficiency == pytest.approx(1.16 - 0.16 * 2.5 ** (1 / 1.3))


def test_valves_widen_the_trace_on_both_sides() -> None:
    ideal, _ = trace(2.5, Corrections.ideal())
    real, _ = trace(2.5, Corrections.nominal())
    assert real.max() > ideal.max() * 1.01
    assert real.min() < ideal.min() * 0.99


def test_a_closed_turn_ends_where_it_began() -> None:
    for corrections in (Corrections.ideal(), Corrections.nominal()):
        pressure, _ = trace(2.5, corrections)
        assert pressure[-1] == pytest.approx(pressure[0], rel=1e-6)


def test_an_end_held_open_stays_near_the_suction_line() -> None:
    pressure, _ = trace(2.5, Corrections.nominal(), held=True)
    assert abs(pressure - 30e5).max() < 0.05 * 30e5
    assert pressure[:361].max() <= 30e5 <= pressure[360:].min()


def test_an_end_that_never_opens_follows_one_line_both_ways() -> None:
    end = End(side=Side.HEAD, clearance=0.5, suction_area_ratio=0.06, discharge_area_ratio=0.06)
    pressure, efficiency = trace(5.0, Corrections.ideal(), end=end)
    assert efficiency == 0
    assert pressure[1:360] == pytest.approx(pressure[-2:360:-1], rel=1e-9)
    # hand: from the discharge pressure, by the exponent
    assert pressure[360] == pytest.approx(150e5 * (0.5 / 1.5) ** 1.3)


def test_crank_end_is_the_head_end_seen_from_the_other_side() -> None:
    head = end_geometry(np.array([0.4]), END, 0.14, 1e4)
    crank = end_geometry(
        np.array([0.4 + math.pi]),
        End(side=Side.CRANK, clearance=0.16, suction_area_ratio=0.06, discharge_area_ratio=0.06), 0.14, 1e4,
    )  # fmt: skip
    assert crank.volume == pytest.approx(head.volume, rel=1e-4)
    assert bool(head.suction_stroke[0])
    assert bool(crank.suction_stroke[0])
