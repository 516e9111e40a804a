"""Sheets kept on disk, under a digest of all that they depend on: the plant's sources and every input."""

import hashlib
from collections.abc import Mapping
from collections.abc import Set as AbstractSet
from dataclasses import fields, is_dataclass
from pathlib import Path
from typing import Final

import numpy as np

from simulator.tabulate_sheet import Sheet

_SOURCES: Final = (
    "compiled.py", "cylinder.py", "eos.py", "equipment.py", "faults.py", "gas_data.py", "kinematics.py",
    "layout.py", "machine.py", "network.py", "outcome.py", "polynomial.py", "reckoning.py", "settling.py",
    "tabulate.py", "tabulate_columns.py", "tabulate_domain.py", "tabulate_sheet.py", "valves.py",
    "wet_gas.py",
)  # fmt: skip


def source_digest() -> str:
    """Digest of the sources that decide what a table says."""
    folder = Path(__file__).parent
    digest = hashlib.sha256(np.__version__.encode())
    for name in _SOURCES:
        digest.update((folder / name).read_bytes())
    return digest.hexdigest()[:16]


def canonical(value: object) -> str:
    """A text that is the same for equal values in every process."""
    if is_dataclass(value) and not isinstance(value, type):
        inside = ",".join(f"{f.name}={canonical(getattr(value, f.name))}" for f in fields(value))
        return f"{type(value).__name__}({inside})"
    if isinstance(value, Mapping):
        return "{" + ",".join(sorted(f"{canonical(k)}:{canonical(v)}" for k, v in value.items())) + "}"
    if isinstance(value, AbstractSet):
        return "{" + ",".join(sorted(canonical(v) for v in value)) + "}"
    if isinstance(value, (list, tuple)):
        return "[" + ",".join(canonical(v) for v in value) + "]"
    return repr(value)


class SheetStore:
    """A folder of sheets.

    Parameters
    ----------
    folder : Path or None
        The folder; None: nothing is kept.
    owner : object
        The machine they are of.
    """

    def __init__(self, folder: Path | None, owner: object) -> None:
        self._folder = None if folder is None else folder / f"plant-tables-{source_digest()}"
        self._owner = canonical(owner)

    def load(self, key: object) -> Sheet | None:
        path = self._path(key)
        if path is None or not path.is_file():
            return None
        with np.load(path, allow_pickle=False) as kept:
            return Sheet(
                axis_powers=kept["axis_powers"], size_powers=kept["size_powers"], weights=kept["weights"],
                runs=int(kept["runs"]), held_out=float(kept["held_out"]),
            )  # fmt: skip

    def save(self, key: object, sheet: Sheet) -> None:
        path = self._path(key)
        if path is None:
            return
        path.parent.mkdir(parents=True, exist_ok=True)
        draft = path.with_suffix(".part.npz")
        np.savez(
            draft, axis_powers=sheet.axis_powers, size_powers=sheet.size_powers, weights=sheet.weights,
            runs=sheet.runs, held_out=sheet.held_out,
        )  # fmt: skip
        draft.replace(path)

    def _path(self, key: object) -> Path | None:
        if self._folder is None:
            return None
        text = f"{self._owner}|{canonical(key)}"
        return self._folder / f"{hashlib.sha256(text.encode()).hexdigest()[:24]}.npz"
