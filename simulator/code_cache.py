"""Where the compiler keeps the plant's machine code between runs; to be called before it is loaded."""

import os
import sys
from pathlib import Path
from typing import Final

VARIABLE: Final = "NUMBA_CACHE_DIR"


def choose_code_cache() -> None:
    """Name a folder of the user where none is named yet; none where it cannot be written.

    Compiling takes some eight seconds, taking it from the folder under one. The installation itself may be
    read-only.
    """
    if VARIABLE in os.environ:
        return
    try:
        folder = _caches() / "throwline" / "plant-code"
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / f".probe-{os.getpid()}"
        probe.touch()
        probe.unlink()
    except (OSError, RuntimeError):  # cannot be written, or there is no home
        return
    os.environ[VARIABLE] = str(folder)


def _caches() -> Path:
    if named := os.environ.get("XDG_CACHE_HOME"):
        return Path(named)
    home = Path.home()
    if sys.platform == "win32":
        return Path(os.environ.get("LOCALAPPDATA", home / "AppData" / "Local"))
    return home / "Library" / "Caches" if sys.platform == "darwin" else home / ".cache"
