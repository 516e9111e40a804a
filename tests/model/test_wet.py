"""Water in a gas, against published tables, and what a three-stage machine drains, by hand."""

from functools import lru_cache

import numpy as np
import pytest

from model.gas import build_surface
from model.machine import GasDomain
from model.surface import GasSurface
from model.wet import enhancement_factor, per_dry, water_held, water_vapour_pressure
from tests.model.nameplates import HYDROGEN_RICH, NATURAL_GAS
from tests.model.surfaces import hydrogen_rich, natural_gas
from tests.model.trains import held, solve

AIR = {"nitrogen": 0.79, "oxygen": 0.21}


@lru_cache(maxsize=1)
def air() -> GasSurface:
    domain = GasDomain(
        low_temperature_k=270.0, high_temperature_k=380.0, low_pressure_pa=5e4, high_pressure_pa=6e6
    )
    return build_surface(AIR, domain)


@pytest.mark.parametrize(
    ("celsius", "kpa"), [(0.01, 0.611657), (25.0, 3.1698), (35.0, 5.6290), (100.0, 101.42), (150.0, 476.16)]
)
def test_vapour_pressure(celsius: float, kpa: float) -> None:
    # source: IAPWS steam tables
    assert float(water_vapour_pressure(celsius + 273.15)) == pytest.approx(kpa * 1e3, rel=5e-4)


@pytest.mark.parametrize(
    ("kelvin", "bar", "factor", "within"),
    [
        (273.15, 1.0, 1.0039, 0.0005),
        (273.15, 5.0, 1.0177, 0.0015),
        (363.15, 5.0, 1.0180, 0.0015),
        (373.15, 5.0, 1.0188, 0.0015),
        (273.15, 10.0, 1.0353, 0.003),
        (363.15, 10.0, 1.0284, 0.0015),
        (373.15, 10.0, 1.0295, 0.0015),
    ],
)
def test_enhancement_in_air(kelvin: float, bar: float, factor: float, within: float) -> None:
    # source: R. W. Hyland, A. Wexler, ASHRAE Transactions 89 (2A) (1983) 520, table 2, as copied in the tests
    # of pjabardo/Psychro.jl, which finds the values at 273.15 K and 5 and 10 bar misprinted by that much
    assert float(enhancement_factor(air(), AIR, kelvin, bar * 1e5)) == pytest.approx(factor, abs=within)


@pytest.mark.parametrize("bar", [5.0, 20.0, 70.0])
@pytest.mark.parametrize("celsius", [20.0, 35.0, 45.0])
def test_natural_gas_follows_the_chart_correlation(bar: float, celsius: float) -> None:
    # source: Bukacek's correlation of the charts, 47430 Psat/P + B pounds per million cubic feet, log10 B =
    # 6.69449 - 3083.87/(degrees Rankine), as in a paper of J. Carroll (2002) quoted by arb-stanford OPGEE
    kelvin = celsius + 273.15
    b = 10.0 ** (6.69449 - 3083.87 / (kelvin * 1.8))
    chart = float(water_vapour_pressure(kelvin)) / (bar * 1e5) + b / 47430
    found = float(water_held(natural_gas(), NATURAL_GAS, kelvin, bar * 1e5))
    assert found == pytest.approx(chart, rel=0.05)


@pytest.mark.parametrize(("bar", "percent"), [(5.0, 1.1), (20.0, 0.28)])
def test_water_held_at_35_celsius(bar: float, percent: float) -> None:
    # common practice: charts of saturated natural gas, two digits
    found = float(water_held(natural_gas(), NATURAL_GAS, 308.15, bar * 1e5))
    assert 100 * found == pytest.approx(percent, rel=0.10)


def test_enhancement_vanishes_with_pressure_and_is_small_in_hydrogen() -> None:
    low = enhancement_factor(hydrogen_rich(), HYDROGEN_RICH, 308.0, 1e5)
    assert float(low) == pytest.approx(1.0, abs=5e-3)
    assert 1.01 < float(enhancement_factor(hydrogen_rich(), HYDROGEN_RICH, 308.0, 18e5)) < 1.06


def test_hydrogen_at_308_kelvin_and_18_bar() -> None:
    # source: the project's plant: .31 mol % of the gas, of which about .16 falls out behind the first stage
    found = solve(held())
    assert found.water_fraction[0, 0] == pytest.approx(0.0031 * 1.05, rel=0.03)
    drained = found.condensate_mol_s[0, 0] / found.inlet_flow_mol_s[0]
    assert drained == pytest.approx(0.0016, rel=0.05)


def test_the_drain_of_three_stages_by_hand() -> None:
    found = solve(held(cooling_k=np.array([[300.0, 303.0, 305.0]])))
    # source: Perry's Handbook, 9th edition, table 2-135: saturated steam at 300, 310 and 320 K [kPa]
    # hand: ln P over 1/T between them; enhancement exp((18 + 14 + 2x19.5) e-6 P / (R T)) with the virial
    # coefficients of this gas and of water with it; moles of dry gas times what each of them loses
    table = {300: 3.537, 310: 6.231, 320: 10.546}

    def carried(kelvin: float, pressure: float) -> float:
        low = 10 * int(kelvin // 10)
        share = (1 / low - 1 / kelvin) / (1 / low - 1 / (low + 10))
        steam = 1e3 * table[low] * (table[low + 10] / table[low]) ** share
        held_share = np.exp(71e-6 * pressure / (8.314 * kelvin)) * steam / pressure
        return held_share / (1 - held_share)

    behind = [found.suction_pressure_pa[0, 1], found.suction_pressure_pa[0, 2], 140e5]
    before = carried(308.0, 18e5)
    for k in range(3):
        after = carried(float(found.cooled_temperature_k[0, k]), float(behind[k]))
        drained = float(found.dry_flow_mol_s[0, k]) * (before - after)
        assert found.condensate_mol_s[0, k] == pytest.approx(drained, rel=0.02)
        before = after


def test_dry_gas_drains_nothing() -> None:
    found = solve(held(water_saturation=0.0))
    assert (found.condensate_mol_s == 0).all()
    assert (found.water_fraction == 0).all()


def test_gas_drier_than_its_coolers_keeps_its_water() -> None:
    found = solve(held(water_saturation=0.1))
    assert (found.condensate_mol_s == 0).all()
    assert np.ptp(found.water_fraction) < 1e-15


@pytest.mark.parametrize("saturation", [0.2, 0.5, 1.0])
def test_recycled_gas_brings_its_water_back(saturation: float) -> None:
    found = solve(held(water_saturation=saturation, first_recycle_share=0.3, final_recycle_share=0.2))
    water = per_dry(found.water_fraction)[0]
    inlet, first, final = (
        float(x[0]) for x in (found.inlet_dry_mol_s, found.first_recycle_mol_s, found.final_recycle_mol_s)
    )
    header = float(found.inlet_flow_mol_s[0]) / inlet - 1
    last = float(found.export_flow_mol_s[0] / found.export_dry_mol_s[0]) - 1
    # hand: mean of what meets, by dry moles
    mean = (inlet * header + first * water[1] + final * last) / (inlet + first + final)
    assert water[0] == pytest.approx(mean, rel=1e-9)
