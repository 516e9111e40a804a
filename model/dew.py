"""The dew line of a gas, by a cubic equation of state.

It only has to say where a gas may drop liquid, to a kelvin or two; the properties themselves come from
`model.gas`.
"""

from typing import Final

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_GAS_CONSTANT: Final = 8.31446261815324
_PASSES: Final = 40  # of successive substitution; enough away from the critical point
_SQRT2: Final = np.sqrt(2.0)


def dew_line(critical: Array, fractions: Array, low_temperature_k: float, pressure_pa: Array) -> Array:
    """Dew temperature at each pressure, sought upwards from a lowest temperature.

    Parameters
    ----------
    critical : ndarray
        (3, c): critical temperature [K], critical pressure [Pa], acentric factor [-] of each component.
    fractions : ndarray
        (c,) mole fractions. [-]
    low_temperature_k : float
        Lowest temperature of interest. [K]
    pressure_pa : ndarray
        (m,) pressures, absolute. [Pa]

    Returns
    -------
    ndarray
        (2, m): the pressures [Pa] and the highest temperature at which the gas is not stable as one
        phase [K], 0 where it is stable at every temperature from the lowest on.

    Notes
    -----
    Tangent-plane stability of the gas against a heavier trial phase, Peng-Robinson without binary constants.
    For water the trial phase is close to pure, so its line is close to that of the saturation pressure.

    References
    ----------
    M. L. Michelsen, *Fluid Phase Equilibria* 9 (1982) 1. D.-Y. Peng, D. B. Robinson, *Ind. Eng. Chem.
    Fundam.* 15 (1976) 59.
    """
    span = np.linspace(low_temperature_k, max(low_temperature_k, float(critical[0].max())), 40)
    t, p = np.meshgrid(span, pressure_pa, indexing="ij")
    unstable = _unstable(critical, fractions, t.ravel(), p.ravel()).reshape(t.shape)
    wet = unstable.any(axis=0)
    top = span.size - 1 - np.argmax(unstable[::-1], axis=0)
    low, high = span[top], span[np.minimum(top + 1, span.size - 1)]
    for _ in range(8):  # a fortieth of the span, halved eight times: a few hundredths of a kelvin
        middle = (low + high) / 2
        below = _unstable(critical, fractions, middle, pressure_pa)
        low, high = np.where(below, middle, low), np.where(below, high, middle)
    return np.stack([pressure_pa, np.where(wet, low, 0.0)])


def _unstable(critical: Array, z: Array, t: Array, p: Array) -> NDArray[np.bool_]:
    if z.size == 1:
        return _pure_is_liquid(critical, t, p)
    gas = np.log(z)[:, None] + _log_fugacity(critical, np.broadcast_to(z[:, None], (z.size, t.size)), t, p, 1)
    tc, pc, acentric = (row[:, None] for row in critical)
    wilson = pc / p * np.exp(5.373 * (1 + acentric) * (1 - tc / t))
    heaviest = np.zeros((z.size, 1))
    heaviest[np.argmax(critical[0])] = 1.0
    found = np.zeros(t.size, bool)
    for trial in (z[:, None] / wilson, 0.999 * heaviest + 0.001 * z[:, None] + np.zeros_like(wilson)):
        amount = trial
        for _ in range(_PASSES):
            total = amount.sum(axis=0)
            amount = np.exp(gas - _log_fugacity(critical, amount / total, t, p, -1))
            amount = np.clip(amount, 1e-300, 1e12)
        share = amount / amount.sum(axis=0)
        trivial = np.abs(np.log(share / z[:, None])).max(axis=0) < 1e-3
        found |= (amount.sum(axis=0) > 1 + 1e-7) & ~trivial
    return found


def _pure_is_liquid(critical: Array, t: Array, p: Array) -> NDArray[np.bool_]:
    """A pure gas condenses where the liquid root has the lower fugacity."""
    one = np.ones((1, t.size))
    liquid = _log_fugacity(critical, one, t, p, -1)[0]
    gas = _log_fugacity(critical, one, t, p, 1)[0]
    return np.asarray((liquid < gas - 1e-9) & (t < critical[0, 0]))


def _log_fugacity(critical: Array, x: Array, t: Array, p: Array, root: int) -> Array:
    """Logarithms (c, m) of the fugacity coefficients of phase x (c, m); root +1 vapour, -1 liquid."""
    tc, pc, acentric = (row[:, None] for row in critical)
    kappa = 0.37464 + 1.54226 * acentric - 0.26992 * acentric**2
    alpha = (1 + kappa * (1 - np.sqrt(t / tc))) ** 2
    rt = _GAS_CONSTANT * t
    root_a = np.sqrt(0.45724 * (_GAS_CONSTANT * tc) ** 2 / pc * alpha)
    b = 0.07780 * _GAS_CONSTANT * tc / pc
    mean_root, mean_b = (x * root_a).sum(axis=0), (x * b).sum(axis=0)
    A, B = mean_root**2 * p / rt**2, mean_b * p / rt
    Z = _cubic(B - 1, A - 2 * B - 3 * B**2, B**3 + B**2 - A * B, root)
    Z = np.maximum(Z, B * (1 + 1e-9))
    pull = A / (2 * _SQRT2 * B) * np.log((Z + (1 + _SQRT2) * B) / (Z + (1 - _SQRT2) * B))
    share = b / mean_b
    return np.asarray(share * (Z - 1) - np.log(Z - B) - pull * (2 * root_a / mean_root - share))


def _cubic(c2: Array, c1: Array, c0: Array, root: int) -> Array:
    """Largest (+1) or smallest (-1) real root of Z^3 + c2 Z^2 + c1 Z + c0."""
    q = c1 / 3 - c2**2 / 9
    r = (c1 * c2 - 3 * c0) / 6 - c2**3 / 27
    inner = q**3 + r**2
    single = np.sqrt(np.maximum(inner, 0.0))
    one = np.cbrt(r + single) + np.cbrt(r - single)
    radius = np.sqrt(np.maximum(-q, 1e-60))
    angle = np.arccos(np.clip(r / radius**3, -1.0, 1.0)) / 3
    largest = 2 * radius * np.cos(angle)
    smallest = 2 * radius * np.cos(angle + 2 * np.pi / 3)
    three = largest if root > 0 else smallest
    return np.asarray(np.where(inner > 0, one, three) - c2 / 3)
