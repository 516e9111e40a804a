"""The site file as plain values, each with the line it stands on.

Scalars stay the text that was written (a tag "0110" is no number); only a plain true, false or nothing is
not text. Aliases and merge keys are resolved, duplicate keys are faults.
"""

import io
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.nodes import MappingNode, ScalarNode, SequenceNode

from agent.siteplan.errors import Fault, SiteFileError

Place = tuple[str | int, ...]
Mark = tuple[int, int]  # line and column, from 1

_LARGEST_BYTES: Final = 4_000_000
_MOST_VALUES: Final = 200_000  # aliases of aliases can ask for more than any memory holds
_DEEPEST: Final = 40
_TAG: Final = "tag:yaml.org,2002:"


@dataclass(frozen=True, slots=True, kw_only=True)
class Document:
    """``marks`` holds where every value stands; a merged value stands where its anchor was written."""

    file: str
    text: str
    values: dict[str, Any]
    marks: dict[Place, Mark]
    faults: tuple[Fault, ...]  # duplicate and odd keys

    def mark(self, place: Place) -> Mark:
        """Line and column of a value, or of the nearest thing around it."""
        while place not in self.marks and place:
            place = place[:-1]
        return self.marks.get(place, (0, 0))

    def line(self, place: Place) -> int:
        return self.mark(place)[0]


def dotted(place: Place) -> str:
    """``units[0].stages[1].number`` for ("units", 0, "stages", 1, "number")."""
    text = ""
    for step in place:
        text += f"[{step}]" if isinstance(step, int) else f".{step}" if text else step
    return text


def read_document(path: Path) -> Document:
    """Read a site file.

    Raises
    ------
    SiteFileError
        There is no such file, or it is not readable as text, as YAML, or as a mapping of keys.
    """
    return _document(str(path), _text(path))


def _text(path: Path) -> str:
    file = str(path)
    try:
        raw = path.read_bytes()
    except IsADirectoryError:
        raise _whole(file, "a site file, but this is a folder") from None
    except OSError as error:
        raise _whole(file, "a readable site file", error.strerror or str(error)) from None
    if len(raw) > _LARGEST_BYTES:
        raise _whole(file, f"a site file of at most {_LARGEST_BYTES // 1_000_000} MB")
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise _whole(file, "text in UTF-8", "save the file again with that encoding", line) from None


def _whole(file: str, expected: str, hint: str = "", line: int = 0) -> SiteFileError:
    return SiteFileError([Fault(file=file, line=line, path="", value="", expected=expected, hint=hint)])


def _document(file: str, text: str) -> Document:
    try:
        node = YAML(typ="rt").compose(io.StringIO(text))
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        raise _whole(file, "valid YAML", _yaml_hint(error), mark.line + 1 if mark else 0) from None
    except YAMLError as error:
        raise _whole(file, "valid YAML", str(error).splitlines()[0]) from None
    except RecursionError:
        raise _whole(file, "fewer brackets inside each other") from None
    if node is None:
        raise _whole(file, "a site file, but this one is empty")
    if not isinstance(node, MappingNode):
        raise _whole(file, "keys with their values, e.g. 'schema: 1'", line=1)
    builder = _Builder(file)
    values = builder.value(node, ())
    return Document(file=file, text=text, values=values, marks=builder.marks, faults=tuple(builder.faults))


def _yaml_hint(error: MarkedYAMLError) -> str:
    problem = str(error.problem or "")
    if "\\t" in problem:
        return "indent with spaces, not tabs"
    if not error.context_mark:
        return problem
    return f"{problem}, {error.context} that starts on line {error.context_mark.line + 1}"


class _Builder:
    """Walks the node graph once and remembers where everything stands."""

    def __init__(self, file: str) -> None:
        self.file = file
        self.marks: dict[Place, Mark] = {}
        self.faults: list[Fault] = []
        self._count = 0
        self._inside: list[int] = []  # the nodes we are in: an alias of one of them would never end

    def value(self, node: Any, place: Place) -> Any:
        if isinstance(node, ScalarNode):
            return _scalar(node)
        self._enter(node)
        content = self._keys(node, place) if isinstance(node, MappingNode) else self._items(node, place)
        self._inside.pop()
        return content

    def _enter(self, node: Any) -> None:
        self._count += len(node.value)
        line = _mark(node)[0]
        if self._count > _MOST_VALUES or len(self._inside) > _DEEPEST:
            raise _whole(self.file, "a smaller site file", f"at most {_MOST_VALUES} values", line)
        if id(node) in self._inside:
            raise _whole(self.file, "an alias that does not hold itself", line=line)
        self._inside.append(id(node))

    def _items(self, node: Any, place: Place) -> list[Any]:
        for number, item in enumerate(node.value):
            self.marks[(*place, number)] = _mark(item)
        return [self.value(item, (*place, number)) for number, item in enumerate(node.value)]

    def _keys(self, node: Any, place: Place) -> dict[str, Any]:
        pairs = [(k, v) for k, v in node.value if str(k.tag) != _TAG + "merge"]
        # Merged keys come first, so that the file's own keys and their lines replace them.
        content: dict[str, Any] = {}
        for key_node, value_node in node.value:
            if str(key_node.tag) == _TAG + "merge":
                content |= self._merged(value_node, place)
        seen: set[str] = set()
        for key_node, value_node in pairs:
            mark = _mark(key_node)
            if not isinstance(key_node, ScalarNode):
                self._fault(mark[0], place, "a plain word as key")
                continue
            key = str(key_node.value)
            if key in seen:
                self._fault(mark[0], (*place, key), "each key once", "it stands twice here")
                continue
            seen.add(key)
            self.marks[(*place, key)] = mark
            content[key] = self.value(value_node, (*place, key))
        return content

    def _merged(self, node: Any, place: Place) -> dict[str, Any]:
        content: dict[str, Any] = {}
        # Of several merged mappings the first one rules, so it is laid on last.
        for source in reversed(node.value if isinstance(node, SequenceNode) else [node]):
            if isinstance(source, MappingNode):
                content |= self.value(source, place)
            else:
                self._fault(_mark(source)[0], (*place, "<<"), "an alias of keys with their values")
        return content

    def _fault(self, line: int, place: Place, expected: str, hint: str = "") -> None:
        fault = Fault(file=self.file, line=line, path=dotted(place), value="", expected=expected, hint=hint)
        if (line, expected) not in [(f.line, f.expected) for f in self.faults]:
            self.faults.append(fault)  # an alias would repeat the fault of its anchor


def _mark(node: Any) -> Mark:
    return node.start_mark.line + 1, node.start_mark.column + 1


def _scalar(node: Any) -> str | bool | None:
    plain = node.style is None
    if plain and str(node.tag) == _TAG + "null":
        return None
    if plain and str(node.tag) == _TAG + "bool":
        return str(node.value).lower() == "true"
    return str(node.value)
