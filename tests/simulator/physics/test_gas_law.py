"""The plant's gas law against independent equations of state and published heat capacities."""

import math
from collections.abc import Mapping
from typing import Any

import CoolProp
import numpy as np
import pytest
from CoolProp import AbstractState

from simulator.eos import gas_enthalpy, gas_row, gas_state, gas_temperature, gas_volume
from simulator.gas_data import GAS_CONSTANT, GASES, UnknownGasError, mixture, transport

FLUIDS = {
    "hydrogen": "Hydrogen",
    "methane": "Methane",
    "ethane": "Ethane",
    "propane": "n-Propane",
    "n-butane": "n-Butane",
    "isobutane": "IsoButane",
    "n-pentane": "n-Pentane",
    "isopentane": "Isopentane",
    "ethylene": "Ethylene",
    "nitrogen": "Nitrogen",
    "oxygen": "Oxygen",
    "carbon dioxide": "CarbonDioxide",
    "carbon monoxide": "CarbonMonoxide",
    "hydrogen sulfide": "HydrogenSulfide",
    "water": "Water",
    "helium": "Helium",
    "argon": "Argon",
}


UNUSED = {"ethylene", "isobutane"}  # no gas of the site holds them


def reference(composition: Mapping[str, float]) -> Any:
    state = AbstractState("HEOS", "&".join(FLUIDS[name] for name in composition))
    state.set_mole_fractions(list(composition.values()))
    state.specify_phase(CoolProp.iphase_supercritical_gas)
    return state


def at(state: Any, temperature: float, pressure: float) -> tuple[float, float]:
    state.update(CoolProp.PT_INPUTS, pressure, temperature)
    return state.compressibility_factor(), state.hmolar()


@pytest.mark.parametrize(
    ("gas", "bar", "highest"), [("natural_gas", 0.015, 80e5), ("hydrogen_rich", 0.006, 150e5)]
)
def test_compressibility_agrees_with_the_multiparameter_equation(
    gas: str, bar: float, highest: float, request: pytest.FixtureRequest
) -> None:
    composition = request.getfixturevalue(gas)
    state, row = reference(composition), gas_row(mixture(composition))
    for temperature in (300.0, 340.0, 400.0, 440.0):
        for pressure in (2e5, 20e5, 45e5, 75e5, highest):  # what the units see
            z = pressure * gas_volume(temperature, pressure, row) / (GAS_CONSTANT * temperature)
            # source: CoolProp 8, multi-parameter equation of state
            assert z == pytest.approx(at(state, temperature, pressure)[0], rel=bar), (temperature, pressure)


@pytest.mark.parametrize(
    ("gas", "stages"),
    [
        (
            "natural_gas",
            [((303.0, 30e5), (374.0, 70e5)), ((300.0, 5e5), (371.0, 12.5e5)), ((308.0, 12e5), (389.0, 34e5))],
        ),
        (
            "hydrogen_rich",
            [((308.0, 18e5), (381.0, 38e5)), ((308.0, 38e5), (377.0, 76e5)), ((308.0, 76e5), (371.0, 141e5))],
        ),
    ],
)
def test_enthalpy_rise_over_a_stage_agrees_with_the_multiparameter_equation(
    gas: str, stages: list[tuple[tuple[float, float], tuple[float, float]]], request: pytest.FixtureRequest
) -> None:
    composition = request.getfixturevalue(gas)
    state, row = reference(composition), gas_row(mixture(composition))
    for low, high in stages:
        rise = gas_enthalpy(*high, row) - gas_enthalpy(*low, row)
        # source: CoolProp 8, multi-parameter equation of state
        assert rise == pytest.approx(at(state, *high)[1] - at(state, *low)[1], rel=0.01), (low, high)


@pytest.mark.parametrize("name", sorted(FLUIDS))
def test_ideal_heat_capacity_of_every_gas_agrees_with_its_reference_equation(name: str) -> None:
    gas = mixture({name: 1.0})
    state = AbstractState("HEOS", FLUIDS[name])
    for temperature in (300.0, 350.0, 400.0, 480.0):
        state.update(CoolProp.DmolarT_INPUTS, 1e-3, temperature)
        # source: CoolProp 8, ideal-gas part
        bar = 0.007 if name in UNUSED else 0.005
        assert gas.ideal_heat_capacity(temperature) == pytest.approx(state.cp0molar(), rel=bar)


@pytest.mark.parametrize(
    ("name", "at_298", "at_400"),
    [
        ("hydrogen", 28.836, 29.181),
        ("methane", 35.639, 40.500),
        ("nitrogen", 29.124, 29.249),
        ("carbon dioxide", 37.129, 41.325),
        ("water", 33.590, 34.262),
        ("oxygen", 29.376, 30.106),
        ("carbon monoxide", 29.142, 29.342),
    ],
)
def test_ideal_heat_capacity_agrees_with_published_tables(name: str, at_298: float, at_400: float) -> None:
    # source: NIST-JANAF Thermochemical Tables, 4th ed. (1998), J/(mol K); from memory
    gas = mixture({name: 1.0})
    assert gas.ideal_heat_capacity(298.15) == pytest.approx(at_298, rel=0.003)
    assert gas.ideal_heat_capacity(400.0) == pytest.approx(at_400, rel=0.005)


@pytest.mark.parametrize("name", sorted(set(FLUIDS) - {"helium", "hydrogen"}))
def test_critical_constants_agree_with_the_reference_equations(name: str) -> None:
    state, gas = AbstractState("HEOS", FLUIDS[name]), GASES[name]
    assert gas.critical_temperature_k == pytest.approx(state.T_critical(), rel=0.003)
    assert gas.critical_pressure_pa == pytest.approx(state.p_critical(), rel=0.012)
    assert gas.acentric_factor == pytest.approx(state.acentric_factor(), abs=0.012)
    assert gas.molar_mass_kg_mol == pytest.approx(state.molar_mass(), rel=1e-4)


@pytest.mark.parametrize("gas", ["natural_gas", "hydrogen_rich"])
def test_pressure_enthalpy_and_heat_capacity_are_slopes_of_one_another(
    gas: str, request: pytest.FixtureRequest
) -> None:
    row = gas_row(mixture(request.getfixturevalue(gas)))
    t, v, dt, dv = 350.0, 4e-4, 1e-3, 1e-9

    def energy(temperature: float, volume: float) -> float:
        p, _, h, _ = gas_state(temperature, volume, row)
        return h - p * volume

    p, slope, _, cv = gas_state(t, v, row)
    assert (gas_state(t + dt, v, row)[0] - gas_state(t - dt, v, row)[0]) / (2 * dt) == pytest.approx(
        slope, rel=1e-7
    )
    assert (energy(t + dt, v) - energy(t - dt, v)) / (2 * dt) == pytest.approx(cv, rel=1e-6)
    # hand: (du/dv)_T = T (dP/dT)_v - P
    assert (energy(t, v + dv) - energy(t, v - dv)) / (2 * dv) == pytest.approx(t * slope - p, rel=1e-3)


def test_volume_and_temperature_undo_pressure_and_enthalpy(natural_gas: Mapping[str, float]) -> None:
    row = gas_row(mixture(natural_gas))
    for temperature in (280.0, 330.0, 440.0):
        for pressure in (1e5, 30e5, 140e5):
            volume = gas_volume(temperature, pressure, row)
            assert gas_state(temperature, volume, row)[0] == pytest.approx(pressure, rel=1e-10)
            heat = gas_enthalpy(temperature, pressure, row)
            assert gas_temperature(heat, pressure, 350.0, row) == pytest.approx(temperature, abs=1e-6)


def test_a_thin_gas_is_ideal(hydrogen_rich: Mapping[str, float]) -> None:
    row = gas_row(mixture(hydrogen_rich))
    p, slope, h, cv = gas_state(350.0, 10.0, row)
    gas = mixture(hydrogen_rich)
    assert p == pytest.approx(GAS_CONSTANT * 350.0 / 10.0, rel=1e-5)
    assert slope == pytest.approx(p / 350.0, rel=1e-5)
    assert h == pytest.approx(gas.ideal_enthalpy(350.0), rel=1e-3)
    assert cv == pytest.approx(gas.ideal_heat_capacity(350.0) - GAS_CONSTANT, rel=1e-5)


@pytest.mark.parametrize("name", ["hydrogen", "methane", "nitrogen", "carbon dioxide", "propane"])
def test_viscosity_and_conductivity_are_good_enough_for_a_wall_film(name: str) -> None:
    state = AbstractState("HEOS", FLUIDS[name])
    state.update(CoolProp.PT_INPUTS, 1e5, 350.0)
    viscosity, conductivity = transport({name: 1.0}, 350.0)
    # source: CoolProp 8, reference transport equations
    assert viscosity == pytest.approx(state.viscosity(), rel=0.03)
    assert conductivity == pytest.approx(state.conductivity(), rel=0.20)


def test_an_unknown_gas_is_named() -> None:
    with pytest.raises(UnknownGasError, match="krypton"):
        mixture({"methane": 0.9, "krypton": 0.1})


def test_fractions_are_normalised(natural_gas: Mapping[str, float]) -> None:
    doubled = {name: 2.0 * x for name, x in natural_gas.items()}
    assert np.allclose(gas_row(mixture(doubled)), gas_row(mixture(natural_gas)), rtol=1e-12)
    assert math.isclose(mixture(doubled).molar_mass_kg_mol, mixture(natural_gas).molar_mass_kg_mol)
