"""The guide's Markdown to page elements: headings, paragraphs, lists, tables, bold, code and links.

Only what the guide uses. Nothing is ever inserted as HTML, so a text cannot become a script.
"""

import re
from collections.abc import Callable, Sequence
from typing import Any, Final

from dash import html
from dash.development.base_component import Component

_INLINE: Final = re.compile(
    r"\*\*(?P<bold>[^*]+)\*\*|`(?P<code>[^`]+)`|\[(?P<words>[^\]]+)\]\((?P<address>[^)\s]+)\)"
)
_HEADING: Final = re.compile(r"(#{1,3}) (.+)")
_ITEM: Final = re.compile(r"(?:[-*]|\d+\.) (.+)")
_RULE: Final = re.compile(r"\|?[\s:|-]+\|?$")


def render(text: str) -> list[Component]:
    """Blocks are set apart by empty lines."""
    return [_block(block.splitlines()) for block in re.split(r"\n\s*\n", text.strip()) if block.strip()]


def _block(lines: Sequence[str]) -> Component:
    heading = _HEADING.fullmatch(lines[0])
    if heading:
        tags = {1: html.H1, 2: html.H2, 3: html.H3}
        return tags[len(heading[1])](_inline(heading[2]))
    if lines[0].startswith("|") and len(lines) > 1 and _RULE.fullmatch(lines[1].strip()):
        return _table(lines)
    if _ITEM.match(lines[0]):
        return _list(lines)
    return html.P(_inline(" ".join(line.strip() for line in lines)))


def _list(lines: Sequence[str]) -> Component:
    items: list[str] = []
    for line in lines:
        item = _ITEM.fullmatch(line)
        if item:
            items.append(item[1])
        else:  # a wrapped line goes on with the item before
            items[-1] += " " + line.strip()
    holder: Callable[..., Component] = html.Ol if lines[0][0].isdigit() else html.Ul
    return holder([html.Li(_inline(item)) for item in items])


def _table(lines: Sequence[str]) -> Component:
    head, _, *rows = [[cell.strip() for cell in line.strip().strip("|").split("|")] for line in lines]
    return html.Table(
        [
            html.Thead(html.Tr([html.Th(_inline(cell), scope="col") for cell in head])),
            html.Tbody([html.Tr([html.Td(_inline(cell)) for cell in row]) for row in rows]),
        ]
    )


def _inline(text: str) -> list[Any]:
    parts: list[Any] = []
    end = 0
    for match in _INLINE.finditer(text):
        if match.start() > end:
            parts.append(text[end : match.start()])
        parts.append(_marked(match))
        end = match.end()
    if end < len(text):
        parts.append(text[end:])
    return parts


def _marked(match: re.Match[str]) -> Component:
    if match["bold"]:
        return html.Strong(match["bold"])
    if match["code"]:
        return html.Code(match["code"])
    address = match["address"]
    # The guide links to its own pages only; anything else is shown as text.
    return (
        html.A(match["words"], href=address) if address.startswith(("/", "#")) else html.Span(match["words"])
    )
