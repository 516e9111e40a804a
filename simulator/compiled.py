"""The one door to the compiler.

Only files that hold compiled functions import this one, and only `machine` imports those files, so
that a process that never turns a crank never loads the compiler.

Machine code is kept in the folder named by the environment variable NUMBA_CACHE_DIR; without it nothing
is written anywhere and each process compiles anew. The compiler looks at one file's age only, not at the
files it calls, so the cache folder carries a digest of every compiled source: a change in one makes all new.
"""

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from typing import Final, TypeVar, cast

import numba
import numpy as np

_Function = TypeVar("_Function", bound=Callable[..., object])

_SOURCES: Final = ("compiled.py", "eos.py", "valves.py", "cylinder.py", "network.py")


def _source_digest() -> str:
    folder = Path(__file__).parent
    digest = hashlib.sha256(f"{numba.__version__} {np.__version__}".encode())
    for name in _SOURCES:
        digest.update((folder / name).read_bytes())
    return digest.hexdigest()[:16]


def _cache_folder() -> Path | None:
    entered = os.environ.get("NUMBA_CACHE_DIR", "")
    return Path(entered) / f"plant-{_source_digest()}" if entered else None


_FOLDER: Final = _cache_folder()
if _FOLDER is not None:
    _FOLDER.mkdir(parents=True, exist_ok=True)
    numba.config.CACHE_DIR = str(_FOLDER)  # type: ignore[attr-defined] # set at run time by numba itself


def compiled(function: _Function) -> _Function:
    """Compile a function of numbers and arrays at its first call; it never holds the interpreter lock."""
    make = numba.njit(cache=_FOLDER is not None, nogil=True, error_model="numpy")
    return cast("_Function", make(function))
