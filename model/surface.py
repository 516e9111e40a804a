"""A gas as Chebyshev surfaces over 1/T and P: the tables, how they are read and how they are made."""

from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from model.machine import GasDomain

Array = NDArray[np.float64]

GAS_CONSTANT: Final = 8.31446261815324  # J/(mol K), exact since the SI of 2019
DEGREE: Final = 10  # of both axes; meets 1e-4 on natural gas from 270 K to 250 bar
REFERENCE_PRESSURE_PA: Final = 1e5  # Pa: entropy is tabulated against ln(P / this)


@dataclass(frozen=True, slots=True, eq=False, kw_only=True)
class GasSurface:
    """Thermodynamic properties of one gas over one domain.

    Arrays of temperature and pressure broadcast. A state outside the domain or under the dew line gives NaN.
    """

    molar_mass_kg_mol: float
    domain: GasDomain
    residuals: Array  # (3, n, n): (Z-1)/P, (h-h0)/(R T P), (s-s0+R ln P)/(R P), over 1/T and P
    ideals: Array  # (2, n): h0 and s0 per mole, over 1/T
    edge_residuals: Array  # (2, 2, n): of s and of h at the low and the high temperature, over P
    edge_ideals: Array  # (2, 2): the ideal parts there
    inverses: Array  # (2, n, n): T over the share of the span of s and of h, and over P
    dew_pressure_pa: Array  # (m,)
    dew_temperature_k: Array  # (m,), 0 where the gas stays whole over the whole domain

    def z(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Compressibility factor.

        Parameters
        ----------
        temperature_k : array_like
            Temperature. [K]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            P / (rho R T). [-]
        """
        return self._forward(temperature_k, pressure_pa)[0]

    def density(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Mass density.

        Parameters
        ----------
        temperature_k : array_like
            Temperature. [K]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Density. [kg/m3]
        """
        return self.properties(temperature_k, pressure_pa)[0]

    def enthalpy(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Specific enthalpy; the zero is the library's, so only differences mean anything.

        Parameters
        ----------
        temperature_k : array_like
            Temperature. [K]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Enthalpy. [J/kg]
        """
        return self.properties(temperature_k, pressure_pa)[1]

    def entropy(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Specific entropy; only differences mean anything.

        Parameters
        ----------
        temperature_k : array_like
            Temperature. [K]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Entropy. [J/(kg K)]
        """
        return self.properties(temperature_k, pressure_pa)[2]

    def properties(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> tuple[Array, Array, Array]:
        """Density, enthalpy and entropy at once, for the price of one.

        Parameters
        ----------
        temperature_k : array_like
            Temperature. [K]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        tuple of ndarray
            Density [kg/m3], enthalpy [J/kg], entropy [J/(kg K)].
        """
        z, h, s = self._forward(temperature_k, pressure_pa)
        mass = self.molar_mass_kg_mol
        rho = np.asarray(pressure_pa) * mass / (z * GAS_CONSTANT * np.asarray(temperature_k))
        return rho, h / mass, s / mass

    def temperature_from_entropy(self, entropy_j_kg_k: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Temperature at which the gas has a given entropy.

        Parameters
        ----------
        entropy_j_kg_k : array_like
            Specific entropy. [J/(kg K)]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Temperature. [K]
        """
        return self._inverse(0, np.asarray(entropy_j_kg_k) * self.molar_mass_kg_mol, pressure_pa)

    def temperature_from_enthalpy(self, enthalpy_j_kg: ArrayLike, pressure_pa: ArrayLike) -> Array:
        """Temperature at which the gas has a given enthalpy.

        Parameters
        ----------
        enthalpy_j_kg : array_like
            Specific enthalpy. [J/kg]
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Temperature. [K]
        """
        return self._inverse(1, np.asarray(enthalpy_j_kg) * self.molar_mass_kg_mol, pressure_pa)

    def dew_temperature(self, pressure_pa: ArrayLike) -> Array:
        """Temperature below which the gas drops liquid, by a cubic equation; 0 where it never does here.

        Parameters
        ----------
        pressure_pa : array_like
            Pressure, absolute. [Pa]

        Returns
        -------
        ndarray
            Dew temperature. [K]
        """
        return np.asarray(
            np.interp(np.asarray(pressure_pa, np.float64), self.dew_pressure_pa, self.dew_temperature_k)
        )

    def _forward(self, temperature_k: ArrayLike, pressure_pa: ArrayLike) -> tuple[Array, Array, Array]:
        temperature, pressure = np.broadcast_arrays(
            np.asarray(temperature_k, np.float64), np.asarray(pressure_pa, np.float64)
        )
        t, p = temperature.ravel(), pressure.ravel()
        t = np.where(_inside(self.domain, t, p) & (t >= self.dew_temperature(p)), t, np.nan)
        X, Y = _basis(_scaled_inverse_temperature(self.domain, t)), _basis(_scaled_pressure(self.domain, p))
        # einsum without a plan sums in plain loops: the answer does not hang on how frames are chunked
        zr, hr, sr = np.einsum("kij,if,jf->kf", self.residuals, X, Y)
        h0, s0 = np.einsum("ki,if->kf", self.ideals, X)
        R = GAS_CONSTANT
        h = h0 + hr * R * t * p
        s = s0 - R * np.log(p / REFERENCE_PRESSURE_PA) + sr * R * p
        shape = temperature.shape
        return (1 + zr * p).reshape(shape), h.reshape(shape), s.reshape(shape)

    def _inverse(self, which: int, molar: Array, pressure_pa: ArrayLike) -> Array:
        target, pressure = np.broadcast_arrays(molar, np.asarray(pressure_pa, np.float64))
        p = pressure.ravel()
        Y = _basis(_scaled_pressure(self.domain, p))
        low, span = _span(self, which, p, Y)
        share = (target.ravel() - low) / span
        share = np.where((share >= 0) & (share <= 1), share, np.nan)
        X = _basis(2 * share - 1)
        return np.asarray(np.einsum("ij,if,jf->f", self.inverses[which], X, Y)).reshape(target.shape)


def _inside(domain: GasDomain, t: Array, p: Array) -> NDArray[np.bool_]:
    slack = 1e-9  # a state on the edge, a rounding away
    inside = (t >= domain.low_temperature_k * (1 - slack)) & (t <= domain.high_temperature_k * (1 + slack))
    inside &= (p >= domain.low_pressure_pa * (1 - slack)) & (p <= domain.high_pressure_pa * (1 + slack))
    return np.asarray(inside)


def _basis(x: Array) -> Array:
    """Chebyshev polynomials (n, F) at x; NaN where x is NaN."""
    return np.asarray(np.cos(np.arange(DEGREE + 1)[:, None] * np.arccos(np.clip(x, -1.0, 1.0))))


def _scaled_inverse_temperature(domain: GasDomain, t: Array) -> Array:
    low, high = 1 / domain.high_temperature_k, 1 / domain.low_temperature_k
    return np.asarray((2 / t - low - high) / (high - low))


def _scaled_pressure(domain: GasDomain, p: Array) -> Array:
    low, high = domain.low_pressure_pa, domain.high_pressure_pa
    return np.asarray((2 * np.where((p > 0) & (p < np.inf), p, np.nan) - low - high) / (high - low))


def _roots() -> Array:
    return np.cos(np.pi * (np.arange(DEGREE + 1) + 0.5) / (DEGREE + 1))


def nodes(domain: GasDomain) -> tuple[Array, Array]:
    roots = _roots()
    low, high = 1 / domain.high_temperature_k, 1 / domain.low_temperature_k
    temperatures = 2 / (low + high + roots * (high - low))
    p0, p1 = domain.low_pressure_pa, domain.high_pressure_pa
    return temperatures, (p0 + p1 + roots * (p1 - p0)) / 2


def _transform() -> Array:
    """Values at the roots to coefficients (discrete orthogonality)."""
    matrix = _basis(_roots()) * 2 / (DEGREE + 1)
    matrix[0] /= 2
    return matrix


def tabulate(mass: float, domain: GasDomain, real: Array, ideal: Array, dew: Array) -> GasSurface:
    """Interpolate node values: real (n, n, 3) of Z, h, s per mole; ideal (n, 2) of h0 and s0 per mole."""
    temperatures, pressures = nodes(domain)
    t, p, R = temperatures[:, None], pressures[None, :], GAS_CONSTANT
    residual = np.stack(
        [
            (real[:, :, 0] - 1) / p,
            (real[:, :, 1] - ideal[:, None, 0]) / (R * t * p),
            (real[:, :, 2] - ideal[:, None, 1] + R * np.log(p / REFERENCE_PRESSURE_PA)) / (R * p),
        ]
    )
    to = _transform()
    residuals, ideals = np.einsum("ai,bj,kij->kab", to, to, residual), np.einsum("ai,ik->ka", to, ideal)
    edges = np.array([domain.low_temperature_k, domain.high_temperature_k])
    X = _basis(_scaled_inverse_temperature(domain, edges))
    forward = GasSurface(
        molar_mass_kg_mol=mass,
        domain=domain,
        residuals=residuals,
        ideals=ideals,
        edge_residuals=np.stack(
            [
                np.einsum("ij,ie->ej", residuals[2], X) * R,
                np.einsum("ij,ie,e->ej", residuals[1], X, edges) * R,
            ]
        ),
        edge_ideals=np.einsum("ki,ie->ke", ideals[::-1], X),
        inverses=np.zeros((2, DEGREE + 1, DEGREE + 1)),
        dew_pressure_pa=np.array([domain.low_pressure_pa, domain.high_pressure_pa]),
        dew_temperature_k=np.zeros(2),  # the inverse is built over the whole domain, then masked
    )
    inverses = np.stack([np.einsum("ai,bj,ij->ab", to, to, _solve(forward, which)) for which in (0, 1)])
    return replace(forward, inverses=inverses, dew_pressure_pa=dew[0], dew_temperature_k=dew[1])


def _molar(surface: GasSurface, which: int, t: ArrayLike, p: ArrayLike) -> Array:
    return surface._forward(t, p)[2 - which]  # noqa: SLF001 - same file, same thing


def _span(surface: GasSurface, which: int, p: Array, Y: Array) -> tuple[Array, Array]:
    """Entropy (0) or enthalpy (1) per mole: value at the low edge and span to the high one, per pressure."""
    low, high = np.einsum("ej,jf->ef", surface.edge_residuals[which], Y) * p
    low_ideal, high_ideal = surface.edge_ideals[which]
    span = high + high_ideal - low - low_ideal
    if which == 0:
        low = low - GAS_CONSTANT * np.log(np.where(p > 0, p, np.nan) / REFERENCE_PRESSURE_PA)
    return low + low_ideal, span


def _solve(surface: GasSurface, which: int) -> Array:
    """Temperatures (n, n) at the nodes of the inverse surface, by Newton on the forward one."""
    domain = surface.domain
    share = ((_roots() + 1) / 2)[:, None]
    p = nodes(domain)[1]
    low, span = _span(surface, which, p, _basis(_scaled_pressure(domain, p)))
    target = low + share * span
    t = domain.low_temperature_k + share * (domain.high_temperature_k - domain.low_temperature_k) + 0 * p
    step = 1e-3
    inner = (domain.low_temperature_k + step, domain.high_temperature_k - step)
    for _ in range(12):
        t = np.clip(t, *inner)
        slope = (_molar(surface, which, t + step, p) - _molar(surface, which, t - step, p)) / (2 * step)
        t = t - (_molar(surface, which, t, p) - target) / slope
    return t
