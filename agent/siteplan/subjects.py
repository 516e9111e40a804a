"""What a line of the site file may be about: the unit, one stage, one cylinder, or every one of them."""

import re
from dataclasses import dataclass
from typing import Any, Final

from model.machine import Side
from model.quantities import Scope

_ONE: Final = re.compile(r"(stage|cylinder)\s+(\d{1,2})")
_END: Final = re.compile(r"cylinder\s+(\d{1,2})\s+(head|crank)")


@dataclass(frozen=True, slots=True, kw_only=True)
class Declared:
    """What a unit says it has, read before its blocks are checked.

    So a cylinder with a wrong bore still counts as there, and a limit on it is no second fault. ``sure`` is
    false where the numbers or ends are themselves in doubt: then nothing is said to be missing.
    """

    stages: tuple[int, ...]
    cylinders: tuple[int, ...]
    ends: frozenset[tuple[int, Side]]
    sure: bool

    def subjects(self, scope: Scope) -> tuple[str, ...]:
        if scope is Scope.UNIT:
            return ("unit",)
        numbers = self.stages if scope is Scope.STAGE else self.cylinders
        return tuple(f"{scope.value}{number}" for number in numbers)

    def named(self, text: str, scope: Scope) -> tuple[str, ...]:
        """Subjects a text names in the scope asked; none if it names no such thing."""
        words = " ".join(text.split())
        known = self.subjects(scope)
        if words == f"every {scope.value}":
            return known
        match = _ONE.fullmatch(words)
        name = f"{match[1]}{int(match[2])}" if match else words
        return (name,) if name in known and (match or scope is Scope.UNIT) else ()

    def choice(self, scope: Scope) -> str:
        """What a text may name in this scope, for a message."""
        if scope is Scope.UNIT:
            return "'unit'"
        return f"one of: {', '.join(spoken(s) for s in self.subjects(scope))}, every {scope.value}"


def declared(stages: Any) -> Declared:
    """What the raw list of stages declares."""
    stage_numbers: list[int | None] = []
    cylinder_numbers: list[int | None] = []
    ends: set[tuple[int, Side]] = set()
    sure = True
    for stage in _mappings(stages):
        stage_numbers.append(_number(stage))
        for cylinder in _mappings(stage.get("cylinders")):
            number = _number(cylinder)
            cylinder_numbers.append(number)
            sides = cylinder.get("ends")
            named = {side for side in Side if isinstance(sides, dict) and side.value in sides}
            ends |= {(number, side) for side in named if number is not None}
            sure &= bool(named)
    return Declared(
        stages=tuple(n for n in stage_numbers if n is not None),
        cylinders=tuple(n for n in cylinder_numbers if n is not None),
        ends=frozenset(ends),
        sure=sure and stage_numbers == [*range(1, len(stage_numbers) + 1)] and _distinct(cylinder_numbers),
    )


def _distinct(numbers: list[int | None]) -> bool:
    return None not in numbers and len(set(numbers)) == len(numbers)


def _mappings(value: Any) -> list[dict[str, Any]]:
    return [item for item in value if isinstance(item, dict)] if isinstance(value, list) else []


def _number(block: dict[str, Any]) -> int | None:
    text = block.get("number")
    return int(text) if isinstance(text, str) and re.fullmatch(r"[0-9]{1,2}", text) else None


def end(text: str) -> tuple[int, Side] | None:
    """The end that a text such as "cylinder 1 head" names."""
    match = _END.fullmatch(" ".join(text.split()))
    return (int(match[1]), Side(match[2])) if match else None


def spoken(subject: str) -> str:
    """The subject with a space: cylinder 1 for cylinder1."""
    return re.sub(r"(\d+)$", r" \1", subject)
