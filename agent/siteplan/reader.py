"""Checks the blocks of a document one by one and gathers what is wrong."""

import difflib
from collections.abc import Iterable
from typing import Any, TypeVar

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from agent.siteplan.document import Document, Mark, Place, dotted
from agent.siteplan.errors import Fault, ValueRefusedError
from agent.siteplan.schema import Block
from model import units

BlockT = TypeVar("BlockT", bound=Block)

# Words of pydantic's error types, in ours.
_EXPECTED = {
    "string_type": "text",
    "bool_type": "true or false",
    "dict_type": "keys with their values",
    "model_type": "keys with their values",
    "list_type": "a list",
    "int_parsing": "a whole number",
    "int_type": "a whole number",
    "float_parsing": "a number",
    "float_type": "a number",
    "too_short": "at least one entry",
}
_SECRETS = ("password", "passwd", "secret", "token", "user", "username", "credentials")


def closest(word: str, known: Iterable[str]) -> str:
    """A hint towards a known word: the nearest one, or all of them where there are few."""
    words = list(known)
    near = difflib.get_close_matches(word.lower(), [w.lower() for w in words], n=1, cutoff=0.6)
    if near:
        return f"did you mean {next(w for w in words if w.lower() == near[0])}?"
    return f"known: {', '.join(words)}" if 0 < len(words) <= 12 else ""


class Reader:
    """Holds the document, the barometer once it is known, and the faults and notices so far."""

    def __init__(self, document: Document) -> None:
        self.document = document
        self.faults = list(document.faults)
        self.notices: list[str] = []
        self.barometer_pa: float | None = None
        self._told: set[tuple[Mark, str | int, str, str]] = set()

    def at(self, place: Place) -> Any:
        """The raw value at a place, None where there is none."""
        value: Any = self.document.values
        for step in place:
            try:
                value = value[step]
            except (KeyError, IndexError, TypeError):
                return None
        return value

    def count(self, place: Place) -> int:
        """How many entries a list has; none if it is no list."""
        value = self.at(place)
        return len(value) if isinstance(value, list) else 0

    def keys(self, place: Place) -> tuple[str, ...]:
        """The keys that stand at a place; none if it holds no keys."""
        value = self.at(place)
        return tuple(value) if isinstance(value, dict) else ()

    def fault(self, place: Place, expected: str, hint: str = "", value: str | None = None) -> None:
        """Note that the value at a place is not what was expected; ``value`` replaces what is shown of it."""
        shown = _written(self.at(place)) if value is None else value
        mark = self.document.mark(place)
        # Two cylinders that share an anchor share its faults: they are told once.
        same = (mark, place[-1] if place else "", shown, expected)
        if same in self._told:
            return
        self._told.add(same)
        self.faults.append(
            Fault(
                file=self.document.file,
                line=mark[0],
                path=dotted(place),
                value=shown,
                expected=expected,
                hint=hint,
            )
        )

    def notice(self, text: str) -> None:
        if text not in self.notices:
            self.notices.append(text)

    def block(self, model: type[BlockT], place: Place) -> BlockT | None:
        """The block at a place after its faults were noted.

        Keys with faults are replaced by the stand-ins of the block, so that its other keys can be checked
        against each other and against the rest of the file; without a stand-in there is no block.
        """
        raw = self.at(place)
        context = {"barometer_pa": self.barometer_pa}
        try:
            return model.model_validate(raw, context=context)
        except ValidationError as error:
            wrong = {str(details["loc"][0]) for details in error.errors() if details["loc"]}
            for details in error.errors(include_url=False):
                self._schema_fault(model, place, details)
        if not isinstance(raw, dict):
            return None
        rest = {key: value for key, value in raw.items() if key not in wrong}
        stand_ins = {key: value for key, value in model.stand_ins.items() if key not in rest}
        try:
            return model.model_validate(rest | stand_ins, context=context)
        except ValidationError:
            return None

    def _schema_fault(self, model: type[Block], place: Place, details: ErrorDetails) -> None:
        here = (*place, *(step for step in details["loc"] if step != "[key]"))
        kind = details["type"]
        if kind == "missing":
            self.fault(here, "this key, which is missing", value="")
        elif kind == "extra_forbidden":
            word = str(here[-1])
            known = [f.alias or name for name, f in model.model_fields.items()]
            secret = any(part in word.lower() for part in _SECRETS)
            hint = "secrets never stand in the site file" if secret else closest(word, known)
            self.fault(here, "a known key", hint, value="")
        else:
            expected, hint = _expectation(details)
            self.fault(here, expected, hint)

    def quantity(self, place: Place, text: str, dimension: str) -> float | None:
        """SI value of a text whose dimension another key decides."""
        try:
            return units.parse(text, dimension, barometer_pa=self.barometer_pa)
        except units.UnitError as error:
            self.fault(place, error.expected, error.hint)
            return None


def _written(value: Any) -> str:
    if value is None:
        return ""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, dict):
        return "keys with values"
    if isinstance(value, list):
        return "a list"
    return repr(value)


def _expectation(details: ErrorDetails) -> tuple[str, str]:
    context = details.get("ctx", {})
    error = context.get("error")
    if isinstance(error, ValueRefusedError):
        return error.expected, error.hint
    kind = details["type"]
    if kind in ("enum", "literal_error"):
        return f"one of {context['expected']}".replace("'", "").replace(" or ", ", "), ""
    if kind == "greater_than_equal":
        return f"a number of at least {context['ge']:g}", ""
    if kind == "less_than_equal":
        return f"a number of at most {context['le']:g}", ""
    return _EXPECTED.get(kind, details["msg"]), ""
