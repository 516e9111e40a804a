"""Surfaces against what they approximate, their inverses, their domain, their cache."""

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import model.gas
from model.errors import CompositionError, OutOfRange
from model.gas import COMPONENTS, build_surface, load_or_build, normalised, perfect_gas
from model.machine import GasDomain
from model.surface import GasSurface
from tests.model.nameplates import HYDROGEN_RICH, NATURAL_GAS
from tests.model.surfaces import hydrogen_rich, natural_gas

SMALL = GasDomain(low_temperature_k=290, high_temperature_k=400, low_pressure_pa=1e5, high_pressure_pa=20e5)


@pytest.mark.parametrize(
    ("composition", "make"),
    [(NATURAL_GAS, natural_gas), (HYDROGEN_RICH, hydrogen_rich)],
    ids=["natural", "hydrogen"],
)
def test_surfaces_follow_the_library_at_500_random_states(
    composition: Mapping[str, float], make: "type[GasSurface]"
) -> None:
    """The library is what is approximated here, not an outside reference; those are in tests/reference."""
    import CoolProp.CoolProp as library  # noqa: PLC0415, N813

    gas = make()
    rng = np.random.default_rng(7)
    domain = gas.domain
    t = rng.uniform(domain.low_temperature_k, domain.high_temperature_k, 500)
    p = rng.uniform(domain.low_pressure_pa, domain.high_pressure_pa, 500)
    state = library.AbstractState("HEOS", "&".join(COMPONENTS[word] for word in composition))
    state.set_mole_fractions(list(composition.values()))
    state.specify_phase(library.iphase_supercritical_gas)
    rows = []
    for temperature, pressure in zip(t, p, strict=True):
        state.update(library.PT_INPUTS, pressure, temperature)
        rows.append((state.rhomass(), state.hmass(), state.smass(), state.cpmass()))
    rho, h, s, cp = np.array(rows).T
    ours = gas.properties(t, p)
    # requirement: 1e-4; measured 1e-6 and better on both gases
    assert np.abs(ours[0] / rho - 1).max() < 1e-4
    assert np.abs((ours[1] - h) / (cp * t)).max() < 1e-4
    assert np.abs((ours[2] - s) / cp).max() < 1e-4
    assert np.abs(gas.temperature_from_entropy(s, p) - t).max() < 0.02
    assert np.abs(gas.temperature_from_enthalpy(h, p) - t).max() < 0.02


@pytest.mark.parametrize("make", [natural_gas, hydrogen_rich])
def test_inverse_surfaces_undo_the_forward_ones(make: "type[GasSurface]") -> None:
    gas = make()
    t, p = np.meshgrid(np.linspace(285, 425, 23), np.linspace(2e5, 90e5, 19))
    _, h, s = gas.properties(t, p)
    assert np.abs(gas.temperature_from_entropy(s, p) - t).max() < 1e-3
    assert np.abs(gas.temperature_from_enthalpy(h, p) - t).max() < 1e-3


def test_entropy_and_enthalpy_obey_the_first_law_together() -> None:
    """T ds = dh - v dp between neighbours: ties three surfaces that were fitted apart."""
    gas = natural_gas()
    t, p, step = 340.0, 50e5, 1e3
    high, low = gas.properties(t, p + step), gas.properties(t, p - step)
    rho = float(gas.density(t, p))
    # hand
    assert t * (high[2] - low[2]) == pytest.approx(high[1] - low[1] - 2 * step / rho, rel=1e-3)


def test_perfect_gas_has_no_residual() -> None:
    gas = perfect_gas(0.029, 1.4, SMALL)
    # hand: perfect gas
    assert gas.z(350.0, 15e5) == pytest.approx(1.0, abs=1e-12)
    rise = gas.enthalpy(350.0, 15e5) - gas.enthalpy(300.0, 2e5)
    assert rise == pytest.approx(3.5 * 8.31446261815324 / 0.029 * 50, rel=1e-7)
    entropy = gas.entropy(300.0, 2e5)
    assert gas.temperature_from_entropy(entropy, 4e5) == pytest.approx(300 * 2 ** (0.4 / 1.4), abs=1e-4)


def test_scalars_and_arrays_of_any_shape_give_the_same() -> None:
    gas = natural_gas()
    t, p = np.meshgrid(np.linspace(300, 400, 4), np.linspace(10e5, 70e5, 3))
    table = gas.density(t, p)
    assert table.shape == (3, 4)
    for place in np.ndindex(table.shape):
        assert float(gas.density(t[place], p[place])) == pytest.approx(table[place], rel=1e-13)


@pytest.mark.parametrize(
    ("t", "p"), [(250.0, 50e5), (460.0, 50e5), (300.0, 0.5e5), (300.0, 99e5), (np.nan, 50e5), (300.0, np.nan)]
)
def test_a_state_outside_the_domain_is_no_number(t: float, p: float) -> None:
    gas = natural_gas()
    assert all(np.isnan(part) for part in gas.properties(t, p))


def test_a_pressure_or_entropy_outside_gives_no_temperature() -> None:
    gas = natural_gas()
    entropy = gas.entropy(300.0, 50e5)
    for pressure in (-1e5, 0.0, 0.5e5, np.nan):
        assert np.isnan(gas.temperature_from_entropy(entropy, pressure))
    assert np.isnan(gas.temperature_from_entropy(entropy + 5e3, 50e5))


def test_a_gas_under_its_dew_line_is_no_number() -> None:
    wet = build_surface({"methane": 0.99, "water": 0.01}, SMALL)
    dew = float(wet.dew_temperature(10e5))
    assert np.isnan(wet.density(dew - 1, 10e5))
    assert np.isfinite(wet.density(dew + 1, 10e5))


@pytest.mark.parametrize(("pressure", "boiling"), [(2e5, 393.36), (5e5, 424.98)])
def test_dew_line_of_steam_is_its_boiling_line(pressure: float, boiling: float) -> None:
    domain = GasDomain(
        low_temperature_k=380, high_temperature_k=500, low_pressure_pa=1e5, high_pressure_pa=8e5
    )
    steam = build_surface({"water": 1.0}, domain)
    # source: steam tables, IAPWS: 120.21 degC at 2 bar, 151.83 degC at 5 bar; a cubic equation is good to 1 K
    assert float(steam.dew_temperature(pressure)) == pytest.approx(boiling, abs=1.0)


def test_dry_lean_gases_have_no_dew_line_in_their_domain() -> None:
    assert natural_gas().dew_temperature_k.max() == 0
    assert hydrogen_rich().dew_temperature_k.max() == 0


@pytest.mark.parametrize(
    ("composition", "words"),
    [
        ({"methane": 0.5, "phlogiston": 0.5}, "unknown component: phlogiston"),
        ({"methane": 0.9, "ethane": 0.2}, "sum to 1.1"),
        ({"methane": 1.1, "ethane": -0.1}, "between 0 and 1: ethane, methane"),
        ({"methane": float("nan")}, "between 0 and 1: methane"),
        ({}, "sum to 0.0"),
    ],
)
def test_a_wrong_composition_is_refused_with_its_reason(composition: dict[str, float], words: str) -> None:
    with pytest.raises(CompositionError, match=words):
        build_surface(composition, SMALL)


def test_a_composition_that_is_a_rounding_off_is_made_whole() -> None:
    whole = normalised({"methane": 0.9000004, "ethane": 0.1})
    assert sum(whole.values()) == pytest.approx(1.0, abs=1e-15)
    with pytest.raises(CompositionError):
        normalised({"methane": 0.900002, "ethane": 0.1})


def test_an_empty_domain_is_refused() -> None:
    with pytest.raises(OutOfRange):
        perfect_gas(0.03, 1.4, replace(SMALL, low_temperature_k=400.0))


AIR = {"nitrogen": 0.79, "oxygen": 0.21}


def test_a_cached_surface_is_read_and_not_built(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    first = load_or_build(AIR, SMALL, tmp_path / "gas")

    def refuse(*_: object) -> GasSurface:
        raise AssertionError("built again")

    monkeypatch.setattr(model.gas, "build_surface", refuse)
    second = load_or_build(AIR, SMALL, tmp_path / "gas")
    assert np.array_equal(first.properties(333.0, 9e5), second.properties(333.0, 9e5))
    assert [path.suffix for path in (tmp_path / "gas").iterdir()] == [".npz"]
    with pytest.raises(AssertionError, match="built again"):
        load_or_build({"nitrogen": 0.78, "oxygen": 0.22}, SMALL, tmp_path / "gas")


@pytest.mark.parametrize("damage", ["empty", "text", "cut", "foreign", "pickle", "shape", "nan"])
def test_a_damaged_or_foreign_cache_file_is_built_again(tmp_path: Path, damage: str) -> None:
    built = load_or_build(AIR, SMALL, tmp_path)
    (path,) = tmp_path.iterdir()
    whole = path.read_bytes()
    with np.load(path) as archive:
        parts = dict(archive)
    if damage == "empty":
        path.write_bytes(b"")
    elif damage == "text":
        path.write_text("not a table")
    elif damage == "cut":
        path.write_bytes(whole[: len(whole) // 2])
    else:
        changes = {
            "foreign": {"digest": np.array("0" * 64)},
            "pickle": {"ideals": np.array([{"a": 1}], object)},
            "shape": {"ideals": np.zeros((2, 3))},
            "nan": {"ideals": parts["ideals"] * np.nan},
        }
        np.savez(path, **parts | changes[damage])
    again = load_or_build(AIR, SMALL, tmp_path)
    assert np.array_equal(built.properties(333.0, 9e5), again.properties(333.0, 9e5))
    with np.load(path) as archive:  # and left whole for the next start
        assert all(np.array_equal(archive[name], parts[name]) for name in parts)


def test_no_cache_folder_builds_without_a_file(tmp_path: Path) -> None:
    load_or_build(AIR, SMALL, None)
    assert list(tmp_path.iterdir()) == []
