"""Gases of the published points, through our surfaces."""

from collections.abc import Callable, Mapping
from functools import lru_cache

from model.gas import build_surface
from model.machine import GasDomain
from model.surface import GasSurface

_WORDS = ("methane", "nitrogen", "carbon dioxide", "ethane", "propane", "isobutane", "n-butane", "isopentane",
          "n-pentane", "n-hexane")  # fmt: skip

TEST_GAS_21 = {
    "methane": 0.77824, "nitrogen": 0.02, "carbon dioxide": 0.06, "ethane": 0.08, "propane": 0.03,
    "isobutane": 0.0015, "n-butane": 0.003, "isopentane": 0.0005, "n-pentane": 0.00165, "n-hexane": 0.00215,
    "n-heptane": 0.00088, "n-octane": 0.00024, "n-nonane": 0.00015, "n-decane": 0.00009, "hydrogen": 0.004,
    "oxygen": 0.005, "carbon monoxide": 0.002, "water": 0.0001, "hydrogen sulfide": 0.0025, "helium": 0.007,
    "argon": 0.001,
}  # fmt: skip
ISO_GAS_1 = {
    "methane": 0.796, "nitrogen": 0.1, "carbon dioxide": 0.01, "ethane": 0.057, "propane": 0.02,
    "n-butane": 0.005, "isobutane": 0.005, "n-pentane": 0.002, "isopentane": 0.002, "n-hexane": 0.001,
    "n-heptane": 0.001, "n-octane": 0.001,
}  # fmt: skip
ISO_GAS_4 = {
    "methane": 0.55, "propane": 0.1, "hydrogen": 0.2, "oxygen": 0.04999, "carbon monoxide": 0.1,
    "water": 0.00001,
}  # fmt: skip


def percent(*shares: float) -> dict[str, float]:
    whole = sum(shares)
    return {word: share / whole for word, share in zip(_WORDS, shares, strict=True)}


GULF_COAST = percent(96.5222, 0.2595, 0.5956, 1.8186, 0.4596, 0.0977, 0.1007, 0.0473, 0.0324, 0.0664)
AMARILLO = percent(90.6724, 3.1284, 0.4676, 4.5279, 0.828, 0.1037, 0.1563, 0.0321, 0.0443, 0.0393)
HIGH_NITROGEN = percent(81.441, 13.465, 0.985, 3.3, 0.605, 0.1, 0.104, 0, 0, 0)
HIGH_CO2 = percent(81.212, 5.702, 7.585, 4.303, 0.895, 0.151, 0.152, 0, 0, 0)

Inputs = Mapping[str, float]
Outcome = Callable[[Inputs], float]


@lru_cache(maxsize=32)
def _surface(fractions: tuple[tuple[str, float], ...], domain: GasDomain) -> GasSurface:
    return build_surface(dict(fractions), domain)


def surface(composition: Mapping[str, float], inputs: Inputs) -> GasSurface:
    """A surface around a state; an input named as a component replaces its fraction, the rest pro rata."""
    fractions = dict(composition)
    for word in set(inputs) & set(fractions):
        rest = 1 - fractions[word]
        fractions = {w: f * (1 - inputs[word]) / rest for w, f in fractions.items()} | {word: inputs[word]}
    # wide in steps, so that a state moved a little finds the same surface
    low_t, high_p = 20 * (inputs["t"] // 20) - 40, 5e6 * (inputs["p"] // 5e6) + 7e6
    domain = GasDomain(
        low_temperature_k=low_t, high_temperature_k=low_t + 150, low_pressure_pa=1e5, high_pressure_pa=high_p
    )
    return _surface(tuple(fractions.items()), domain)


def compressibility(composition: Mapping[str, float]) -> Outcome:
    return lambda x: float(surface(composition, x).z(x["t"], x["p"]))


def density(composition: Mapping[str, float]) -> Outcome:
    return lambda x: float(surface(composition, x).density(x["t"], x["p"]))


def molar_density(composition: Mapping[str, float]) -> Outcome:
    """[mol/l]"""

    def outcome(x: Inputs) -> float:
        gas = surface(composition, x)
        return float(gas.density(x["t"], x["p"])) / gas.molar_mass_kg_mol / 1e3

    return outcome


def heat_capacity(composition: Mapping[str, float]) -> Outcome:
    """At constant pressure, as the slope of the enthalpy surface [kJ/(kg K)]."""

    def outcome(x: Inputs) -> float:
        gas = surface(composition, x)
        rise = gas.enthalpy(x["t"] + 0.5, x["p"]) - gas.enthalpy(x["t"] - 0.5, x["p"])
        return float(rise) / 1e3

    return outcome


def speed_of_sound(composition: Mapping[str, float]) -> Outcome:
    """From densities along an isentrope: entropy surface, its inverse, density [m/s]."""

    def outcome(x: Inputs) -> float:
        gas, step = surface(composition, x), 1e-3 * x["p"]
        entropy = gas.entropy(x["t"], x["p"])
        low, high = x["p"] - step, x["p"] + step
        dense = gas.density(gas.temperature_from_entropy(entropy, high), high)
        thin = gas.density(gas.temperature_from_entropy(entropy, low), low)
        return float((2 * step / (dense - thin)) ** 0.5)

    return outcome


def isentropic_exponent(composition: Mapping[str, float]) -> Outcome:
    """Of pressure against volume [-]."""
    sound, dense = speed_of_sound(composition), density(composition)
    return lambda x: sound(x) ** 2 * dense(x) / x["p"]
