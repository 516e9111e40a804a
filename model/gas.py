"""Gas properties as fast surfaces: composition and domain in, Chebyshev tables out.

Only `build_surface` knows the property library, and it loads it when it is called: that takes seconds.
The imposed phase that makes the library fast also hides condensation, so the dew line of the domain is
sought at the same time (`model.dew`) and every state under it answers NaN.
"""

import hashlib
import json
import os
import tempfile
import zipfile
from collections.abc import Mapping
from dataclasses import fields
from importlib import metadata
from pathlib import Path
from types import MappingProxyType
from typing import Final

import numpy as np
from numpy.typing import NDArray

from model.dew import dew_line
from model.errors import CompositionError, GasBuildError, OutOfRange
from model.machine import GasDomain
from model.surface import DEGREE, GAS_CONSTANT, REFERENCE_PRESSURE_PA, GasSurface, nodes, tabulate

Array = NDArray[np.float64]

FORMAT_VERSION: Final = 1  # of the cache file; raised whenever the meaning of its arrays changes
SUM_TOLERANCE: Final = 1e-6
_IDEAL_PRESSURE: Final = 100.0  # Pa: where the gas counts as perfect
_DEW_POINTS: Final = 33

COMPONENTS: Final[Mapping[str, str]] = MappingProxyType(
    {
        "methane": "Methane",
        "ethane": "Ethane",
        "propane": "n-Propane",
        "n-butane": "n-Butane",
        "isobutane": "IsoButane",
        "n-pentane": "n-Pentane",
        "isopentane": "Isopentane",
        "n-hexane": "n-Hexane",
        "n-heptane": "n-Heptane",
        "n-octane": "n-Octane",
        "n-nonane": "n-Nonane",
        "n-decane": "n-Decane",
        "nitrogen": "Nitrogen",
        "carbon dioxide": "CarbonDioxide",
        "hydrogen": "Hydrogen",
        "hydrogen sulfide": "HydrogenSulfide",
        "water": "Water",
        "carbon monoxide": "CarbonMonoxide",
        "oxygen": "Oxygen",
        "helium": "Helium",
        "argon": "Argon",
    }
)
"""Words of the site file for the components of a gas, and the library's names for them."""


def build_surface(composition: Mapping[str, float], domain: GasDomain) -> GasSurface:
    """Tabulate a gas over a domain.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component by its word in `COMPONENTS`; sums to one within 1e-6. [-]
    domain : GasDomain
        Range of temperature and pressure to tabulate. [K, Pa]

    Returns
    -------
    GasSurface
        The tables.

    Raises
    ------
    CompositionError
        A component is unknown, a fraction is negative or not finite, or they do not sum to one.
    OutOfRange
        The domain is empty.
    GasBuildError
        The property library refuses a state.

    Notes
    -----
    Chebyshev interpolation of degree 10 in 1/T and P. Residual parts are divided by the pressure, so the
    perfect-gas limit is exact. Equations of state: multi-fluid Helmholtz energy in the gas phase.

    References
    ----------
    I. H. Bell et al., *Ind. Eng. Chem. Res.* 53 (2014) 2498 (the property library).
    """
    fractions = normalised(composition)
    _check(domain)
    import CoolProp.CoolProp as properties  # noqa: PLC0415, N813 - seconds to load: only when a gas is built

    words = [COMPONENTS[word] for word in fractions]
    state = properties.AbstractState("HEOS", "&".join(words))
    if len(words) > 1:
        state.set_mole_fractions(list(fractions.values()))
    state.specify_phase(properties.iphase_supercritical_gas)
    mass = float(state.molar_mass())

    def at(temperature: float, pressure: float) -> tuple[float, float, float]:
        try:
            state.update(properties.PT_INPUTS, pressure, temperature)
            density = state.rhomolar()
            z = pressure / (density * GAS_CONSTANT * temperature)
            return z, state.hmolar(), state.smolar()
        except ValueError as cause:
            raise GasBuildError(temperature, pressure, str(cause)) from cause

    temperatures, pressures = nodes(domain)
    ideal = np.array([at(t, _IDEAL_PRESSURE)[1:] for t in temperatures])
    ideal[:, 1] += GAS_CONSTANT * np.log(_IDEAL_PRESSURE / REFERENCE_PRESSURE_PA)
    real = np.array([[at(t, p) for p in pressures] for t in temperatures])
    critical = np.array(
        [[properties.PropsSI(key, word) for word in words] for key in ("Tcrit", "pcrit", "acentric")],
        np.float64,
    )
    dew = dew_line(
        critical, np.array(list(fractions.values())), domain.low_temperature_k,
        np.linspace(domain.low_pressure_pa, domain.high_pressure_pa, _DEW_POINTS),
    )  # fmt: skip
    return tabulate(mass, domain, real, ideal, dew)


def perfect_gas(molar_mass_kg_mol: float, heat_capacity_ratio: float, domain: GasDomain) -> GasSurface:
    """A perfect gas as a surface: the limit in which text-book formulas are exact.

    Parameters
    ----------
    molar_mass_kg_mol : float
        Molar mass. [kg/mol]
    heat_capacity_ratio : float
        Ratio of the heat capacities, constant, above one. [-]
    domain : GasDomain
        Range to tabulate. [K, Pa]

    Returns
    -------
    GasSurface
        The tables.

    References
    ----------
    P. K. Nag, *Basic and Applied Thermodynamics*, chapter 19 (formulas this limit must meet).
    """
    _check(domain)
    if not heat_capacity_ratio > 1:
        raise OutOfRange("heat_capacity_ratio", heat_capacity_ratio, 1.0, np.inf)
    temperatures, pressures = nodes(domain)
    cp = GAS_CONSTANT * heat_capacity_ratio / (heat_capacity_ratio - 1)
    ideal = np.stack([cp * temperatures, cp * np.log(temperatures)], axis=1)
    t, p = temperatures[:, None], pressures[None, :]
    entropy = cp * np.log(t) - GAS_CONSTANT * np.log(p / REFERENCE_PRESSURE_PA)
    real = np.stack([np.ones_like(t * p), cp * t + 0 * p, entropy], axis=2)
    nowhere = np.array([[domain.low_pressure_pa, domain.high_pressure_pa], [0.0, 0.0]])
    return tabulate(molar_mass_kg_mol, domain, real, ideal, nowhere)


def load_or_build(
    composition: Mapping[str, float], domain: GasDomain, cache_dir: Path | None = None
) -> GasSurface:
    """Read the surface of a gas from a cache folder, or build it and leave it there.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component by its word in `COMPONENTS`. [-]
    domain : GasDomain
        Range to tabulate. [K, Pa]
    cache_dir : Path or None
        Folder of the cache, made where missing; None builds without a cache.

    Returns
    -------
    GasSurface
        The tables.

    Raises
    ------
    CompositionError
        As of `build_surface`.

    Notes
    -----
    The file is named by what it holds. A file that cannot be read, or holds something else, is built again.
    Nothing in it is ever executed.
    """
    if cache_dir is None:
        return build_surface(composition, domain)
    digest = _digest(normalised(composition), domain)
    path = cache_dir / f"gas-{digest[:32]}.npz"
    surface = _read(path, digest, domain)
    if surface is None:
        surface = build_surface(composition, domain)
        _write(path, digest, surface)
    return surface


def normalised(composition: Mapping[str, float]) -> dict[str, float]:
    """Check a composition and let it sum to one exactly, components in the order of `COMPONENTS`.

    Parameters
    ----------
    composition : mapping
        Mole fraction of each component by its word. [-]

    Returns
    -------
    dict
        Mole fractions above zero. [-]

    Raises
    ------
    CompositionError
        A component is unknown, a fraction is negative or not finite, or they do not sum to one.
    """
    unknown = sorted(set(composition) - set(COMPONENTS))
    if unknown:
        raise CompositionError(f"unknown component: {', '.join(unknown)}")
    wrong = sorted(word for word, value in composition.items() if not 0 <= value <= 1)
    if wrong:
        raise CompositionError(f"a mole fraction lies between 0 and 1: {', '.join(wrong)}")
    total = sum(composition.values())
    if not abs(total - 1) <= SUM_TOLERANCE:
        raise CompositionError(f"mole fractions sum to {total:.6f}, not to 1")
    return {word: composition[word] / total for word in COMPONENTS if composition.get(word, 0.0) > 0}


def _check(domain: GasDomain) -> None:
    if not 0 < domain.low_temperature_k < domain.high_temperature_k:
        raise OutOfRange("low_temperature_k", domain.low_temperature_k, 0.0, domain.high_temperature_k)
    if not _IDEAL_PRESSURE < domain.low_pressure_pa < domain.high_pressure_pa:
        raise OutOfRange("low_pressure_pa", domain.low_pressure_pa, _IDEAL_PRESSURE, domain.high_pressure_pa)


def _digest(fractions: Mapping[str, float], domain: GasDomain) -> str:
    limits = [getattr(domain, f.name) for f in fields(domain)]
    content = {
        "format": FORMAT_VERSION,
        "degree": DEGREE,
        "library": metadata.version("CoolProp"),
        "fractions": {word: f"{value:.10f}" for word, value in sorted(fractions.items())},
        "domain": [repr(float(limit)) for limit in limits],
    }
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


_STORED: Final = tuple(f.name for f in fields(GasSurface) if f.name not in {"molar_mass_kg_mol", "domain"})


def _read(path: Path, digest: str, domain: GasDomain) -> GasSurface | None:
    try:
        with path.open("rb") as file, np.load(file, allow_pickle=False) as archive:
            if str(archive["digest"]) != digest:
                return None
            parts = {name: np.asarray(archive[name], np.float64) for name in _STORED}
            mass = float(archive["molar_mass_kg_mol"])
    except (OSError, KeyError, ValueError, EOFError, zipfile.BadZipFile):
        return None
    n = DEGREE + 1
    wanted = [(3, n, n), (2, n), (2, 2, n), (2, 2), (2, n, n), parts["dew_pressure_pa"].shape, (_DEW_POINTS,)]
    right = [parts[name].shape for name in _STORED] == wanted and mass > 0
    if not right or not all(np.isfinite(part).all() for part in parts.values()):
        return None
    return GasSurface(molar_mass_kg_mol=mass, domain=domain, **parts)


def _write(path: Path, digest: str, surface: GasSurface) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=path.stem, suffix=".part")
    try:
        with os.fdopen(handle, "wb") as file:
            arrays = {name: getattr(surface, name) for name in _STORED}
            np.savez(
                file, digest=np.array(digest), molar_mass_kg_mol=np.array(surface.molar_mass_kg_mol), **arrays
            )
        Path(temporary).replace(path)
    except BaseException:
        Path(temporary).unlink(missing_ok=True)
        raise
