"""What can be wrong with a site file.

Exception
├── SiteFileError       carries every `Fault` of the file, so that one reading tells all
└── ValueError
    └── ValueRefusedError   one value is not what its key takes; becomes a `Fault`
"""

from collections.abc import Sequence
from dataclasses import dataclass

_LONGEST_VALUE = 60


@dataclass(frozen=True, slots=True, kw_only=True)
class Fault:
    """One thing that is wrong, and what would be right."""

    file: str
    line: int  # from 1; 0 where the file has no such place
    path: str  # dotted, e.g. units[0].stages[0].cylinders[1].bore; "" for the file as a whole
    value: str  # as written; "" where there is none
    expected: str
    hint: str = ""

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}" if self.line else self.file
        value = f"{_short(self.value)}: " if self.value else ""
        hint = f" ({self.hint})" if self.hint else ""
        path = f"{self.path}: " if self.path else ""
        return f"{place}: {path}{value}expected {self.expected}{hint}"


def _short(value: str) -> str:
    line = " ".join(value.split())
    return line if len(line) <= _LONGEST_VALUE else line[: _LONGEST_VALUE - 1] + "…"


class SiteFileError(Exception):
    """The site file cannot be used; ``faults`` lists all that is wrong with it, in the file's order."""

    def __init__(self, faults: Sequence[Fault]) -> None:
        self.faults = tuple(sorted(faults, key=lambda f: f.line))
        count = len(self.faults)
        head = f"{self.faults[0].file}: {count} fault{'s' if count > 1 else ''} in the site file"
        super().__init__("\n".join([head, *(f"  {fault}" for fault in self.faults)]))


class ValueRefusedError(ValueError):
    """A value is not what its key takes."""

    def __init__(self, expected: str, hint: str = "") -> None:
        self.expected = expected
        self.hint = hint
        super().__init__(expected)
