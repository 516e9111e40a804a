"""Water in the gas and what the knock-outs drain."""

from collections.abc import Callable, Mapping
from itertools import pairwise

import pytest

from simulator.outcome import MachineOutcome
from simulator.wet_gas import enhancement, saturation_pressure, water_held, wetted


@pytest.mark.parametrize(
    ("celsius", "kpa"), [(0.01, 0.611657), (25.0, 3.1698), (35.0, 5.6290), (100.0, 101.42), (150.0, 476.16)]
)
def test_saturation_pressure(celsius: float, kpa: float) -> None:
    # source: IAPWS steam tables
    assert saturation_pressure(celsius + 273.15) == pytest.approx(kpa * 1e3, rel=1e-3)


@pytest.mark.parametrize(("bar", "percent"), [(5.0, 1.1), (20.0, 0.28)])
def test_water_held_at_35_celsius(natural_gas: Mapping[str, float], bar: float, percent: float) -> None:
    # common practice: charts of saturated natural gas, two digits
    assert 100.0 * water_held(natural_gas, 308.15, bar * 1e5) == pytest.approx(percent, rel=0.10)


@pytest.mark.parametrize("bar", [10.0, 20.0, 70.0])
def test_water_held_by_methane_follows_the_chart_correlation(bar: float) -> None:
    # source: R. F. Bukacek, Institute of Gas Technology bulletin 8 (1955): W = A/P + B; from memory
    celsius = 35.0
    b = 10.0 ** (-3083.87 / (459.6 + celsius * 1.8 + 32.0) + 6.69449)  # lb per million cubic feet
    share = saturation_pressure(celsius + 273.15) / (bar * 1e5) + b / 47_484.0
    assert water_held({"methane": 1.0}, celsius + 273.15, bar * 1e5) == pytest.approx(share, rel=0.06)


def test_enhancement_vanishes_with_pressure(hydrogen_rich: Mapping[str, float]) -> None:
    assert enhancement(hydrogen_rich, 308.0, 5e3) == pytest.approx(1.0, abs=5e-4)
    assert 1.0 < enhancement(hydrogen_rich, 308.0, 18e5) < 1.08


def test_moist_composition_sums_to_one(natural_gas: Mapping[str, float]) -> None:
    moist = wetted(natural_gas, 0.01)
    assert sum(moist.values()) == pytest.approx(1.0)
    assert moist["water"] == 0.01
    assert moist["methane"] / moist["ethane"] == pytest.approx(natural_gas["methane"] / natural_gas["ethane"])
    assert wetted(moist, 0.0).keys() == natural_gas.keys()


def test_drain_of_a_three_stage_machine_by_hand(
    settled: Callable[..., MachineOutcome], hydrogen_rich: Mapping[str, float]
) -> None:
    got = settled("K-220", wet=True)
    # source: IAPWS steam tables, kPa; drained = flow x (y before - y behind) / (1 - y behind), by hand
    table = {307: 5.282, 308: 5.583, 309: 5.899, 310: 6.231}

    def held(kelvin: float, pressure: float) -> float:
        low = int(kelvin)
        steam = 1e3 * (table[low] + (kelvin - low) * (table[low + 1] - table[low]))
        return enhancement(hydrogen_rich, kelvin, pressure) * steam / pressure

    y = [held(308.0, 18e5)]
    y += [
        held(before.cooler_outlet_temperature_k, behind.suction_pressure_pa)
        for before, behind in pairwise(got.stages)
    ]
    for k in (0, 1):
        drained = got.stages[k].discharge_flow_mol_s * (y[k] - y[k + 1]) / (1.0 - y[k + 1])
        assert got.stages[k].condensate_mol_s == pytest.approx(drained, rel=0.02)
    # source: about 0.16 mol % of hydrogen-rich gas saturated at 308 K and 18 bar falls out behind stage 1
    assert got.stages[0].condensate_mol_s / got.inlet_flow_mol_s == pytest.approx(0.0016, rel=0.06)
