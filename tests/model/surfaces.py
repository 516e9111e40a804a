"""Gas surfaces for the tests, each built once a run."""

from functools import lru_cache

from model.gas import build_surface
from model.surface import GasSurface
from tests.model.nameplates import HYDROGEN_DOMAIN, HYDROGEN_RICH, NATURAL_GAS, NATURAL_GAS_DOMAIN


@lru_cache(maxsize=1)
def natural_gas() -> GasSurface:
    return build_surface(NATURAL_GAS, NATURAL_GAS_DOMAIN)


@lru_cache(maxsize=1)
def hydrogen_rich() -> GasSurface:
    return build_surface(HYDROGEN_RICH, HYDROGEN_DOMAIN)
